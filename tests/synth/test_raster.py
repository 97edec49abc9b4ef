"""The renderer against closed forms."""

from collections.abc import Callable

import numpy as np
import pytest
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq
from scipy.special import ndtr

from printmetrics.synth.raster import blurred_coverage


def rectangle(x0: float, y0: float, x1: float, y1: float) -> np.ndarray:
    return np.array([(x0, y0), (x0, y1), (x1, y1), (x1, y0)], dtype=float)


def edge_at(x: float, tilt_deg: float = 0.0) -> np.ndarray:
    """Ink right of a straight edge through (x, 30), far beyond a picture of 61 rows."""
    slope = -np.tan(np.deg2rad(tilt_deg))
    return np.array([(x - 200 * slope, -170), (x + 200 * slope, 230), (900, 230), (900, -170)])


def pixel_mean(
    signal: Callable[[np.ndarray, np.ndarray], np.ndarray], x: np.ndarray, y: np.ndarray, order: int = 12
) -> np.ndarray:
    """Average a function over each pixel's square by Gauss-Legendre quadrature."""
    node, weight = np.polynomial.legendre.leggauss(order)
    return sum(
        wi * wj / 4 * signal(x + ni / 2, y + nj / 2)
        for ni, wi in zip(node, weight, strict=True)
        for nj, wj in zip(node, weight, strict=True)
    )


# Source: a Gaussian-blurred step is the normal distribution function.
@pytest.mark.parametrize("tilt_deg", [0.0, 0.7, -13.0, 30.0])
@pytest.mark.parametrize("sigma", [0.8, 1.3, 4.0])
@pytest.mark.parametrize("x", [40.0, 40.13, 39.5])
def test_straight_edge_is_the_error_function_averaged_over_pixels(tilt_deg: float, sigma: float, x: float) -> None:
    seen = blurred_coverage([edge_at(x, tilt_deg)], [], (61, 81), [(1.0, sigma)])
    rows, cols = np.mgrid[:61, :81]
    c, s = np.cos(np.deg2rad(tilt_deg)), np.sin(np.deg2rad(tilt_deg))
    truth = pixel_mean(lambda u, v: ndtr(((u - x) * c + (v - 30) * s) / sigma), cols, rows)
    np.testing.assert_allclose(seen, truth, atol=5e-5)


# Source: conservation of light; a row through a straight strip holds its width along the row, centred on its axis.
@pytest.mark.parametrize("tilt_deg", [0.0, 0.4, 11.0, 30.0])
def test_edges_lie_within_a_ten_thousandth_of_a_pixel(tilt_deg: float) -> None:
    left, right = edge_at(60.27, tilt_deg), edge_at(80.59, tilt_deg)
    seen = blurred_coverage([np.concatenate([left[:2], right[1::-1]])], [], (61, 141), [(1.0, 0.8)])
    light = seen.sum(axis=1)
    axis = 70.43 - np.tan(np.deg2rad(tilt_deg)) * (np.arange(61) - 30)
    np.testing.assert_allclose(light, 80.59 - 60.27, atol=1e-4)
    np.testing.assert_allclose((seen * np.arange(141)).sum(axis=1) / light, axis, atol=1e-4)


def level_crossing(sigma: float, level: float) -> float:
    seen = blurred_coverage([edge_at(100.0)], [], (3, 201), [(1.0, sigma)])[1]
    return brentq(CubicSpline(np.arange(201), seen - level), 60, 140)


# Source: normal quantiles. The box pixel widens sigma to sqrt(sigma^2 + 1/12).
def test_distance_from_10_to_90_percent_is_2_5631_sigma() -> None:
    sigma = np.sqrt(64 + 1 / 12)
    assert level_crossing(8.0, 0.9) - level_crossing(8.0, 0.1) == pytest.approx(2.56310 * sigma, abs=5e-4)


# Source: normal quantiles.
def test_40_percent_level_lies_0_25335_sigma_on_the_dark_side() -> None:
    assert level_crossing(8.0, 0.4) - 100.0 == pytest.approx(-0.25335 * np.sqrt(64 + 1 / 12), abs=1e-4)


def test_pixel_centres_are_whole_numbers_from_the_top_left() -> None:
    seen = blurred_coverage([rectangle(2.5, 0.5, 5.5, 3.5)], [], (6, 9), [(1.0, 0.0)])
    truth = np.zeros((6, 9))
    truth[1:4, 3:6] = 1
    np.testing.assert_allclose(seen, truth, atol=1e-8)


def test_without_blur_a_pixel_holds_its_covered_share() -> None:
    seen = blurred_coverage([rectangle(1.75, 0.3, 4.5, 3.5)], [], (4, 6), [(1.0, 0.0)])
    np.testing.assert_allclose(seen[2], [0, 0, 0.75, 1, 1, 0], atol=1e-8)
    np.testing.assert_allclose(seen[:, 3], [0.2, 1, 1, 1], atol=1e-8)


# Source: pi r^2.
def test_disc_holds_its_area_about_its_centre() -> None:
    turn = np.linspace(0, 2 * np.pi, 720, endpoint=False)
    disc = np.stack([30.3 + 12.2 * np.cos(turn), 28.9 + 12.2 * np.sin(turn)], axis=1)
    seen = blurred_coverage([disc], [], (60, 64), [(1.0, 1.1)])
    rows, cols = np.mgrid[:60, :64]
    assert seen.sum() == pytest.approx(np.pi * 12.2**2, rel=2e-5)
    assert (seen * cols).sum() / seen.sum() == pytest.approx(30.3, abs=1e-4)
    assert (seen * rows).sum() / seen.sum() == pytest.approx(28.9, abs=1e-4)


def test_hole_takes_away_what_ink_of_its_shape_adds() -> None:
    hole = rectangle(10.2, 8.1, 14.9, 15.3)
    full, holed, alone = (
        blurred_coverage(inked, bare, (30, 30), [(1.0, 1.0)])
        for inked, bare in (([rectangle(2, 2, 27, 27)], []), ([rectangle(2, 2, 27, 27)], [hole]), ([hole], []))
    )
    np.testing.assert_allclose(full - holed, alone, atol=1e-12)


def test_way_round_an_outline_does_not_matter() -> None:
    one = rectangle(2.2, 3.3, 9.7, 8.8)
    pictures = [blurred_coverage([outline], [], (12, 12), [(1.0, 1.0)]) for outline in (one, one[::-1])]
    np.testing.assert_allclose(*pictures, atol=1e-12)


def test_heavy_tails_are_the_sum_of_their_gaussians() -> None:
    outline = [edge_at(40.2)]
    both = blurred_coverage(outline, [], (5, 81), [(0.85, 1.0), (0.15, 4.0)])
    apart = [blurred_coverage(outline, [], (5, 81), [(1.0, sigma)]) for sigma in (1.0, 4.0)]
    np.testing.assert_allclose(both, 0.85 * apart[0] + 0.15 * apart[1], atol=1e-12)


def test_ink_outside_the_picture_shows_only_by_its_blur() -> None:
    seen = blurred_coverage([rectangle(-50, -50, -2, 80), rectangle(-50, 90, 80, 99)], [], (20, 30), [(1.0, 0.8)])
    assert seen[:, 5:].max() < 1e-9
    assert seen[:, 0].max() == pytest.approx(ndtr(-2 / np.sqrt(0.64 + 1 / 12)), rel=0.1)
