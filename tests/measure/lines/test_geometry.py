"""Edges brought onto a line's own axis: truth from plane geometry."""

import numpy as np
import pytest

from printmetrics.measure.lines.geometry import slope_of, straighten


def edge_points(tilt_deg: float, width: float, wave, rows: np.ndarray, scale=(1.0, 1.0)) -> np.ndarray:  # noqa: ANN001
    """Points, along and across, where rows of pixels meet the two edges of a tilted line that wiggles.

    In the line's own axes the edges are t = wave(s) -+ width / 2; each row meets them where it may.
    """
    angle = np.radians(tilt_deg)
    s = np.arange(-300.0, 300.0, 0.01)
    points = []
    for side in (-1, 1):
        t = wave(s) + side * width / 2
        along = s * np.cos(angle) - t * np.sin(angle)
        across = s * np.sin(angle) + t * np.cos(angle)
        at = np.interp(rows * scale[0], along, across)
        points.append(np.column_stack([rows * scale[0], at]))
    return np.array(points)


ROWS = np.arange(-100.0, 101.0)


@pytest.mark.parametrize("tilt", [-30.0, 0.0, 10.0, 30.0])
def test_slope_is_that_of_the_line(tilt: float) -> None:
    points = edge_points(tilt, 20.0, np.zeros_like, ROWS)
    assert slope_of(points) == pytest.approx(np.tan(np.radians(tilt)), abs=1e-6)


def test_slope_passes_over_what_was_not_measured() -> None:
    points = edge_points(10.0, 20.0, np.zeros_like, ROWS)
    points[:, 30:80] = np.nan
    points[1, 10] = np.nan
    assert slope_of(points) == pytest.approx(np.tan(np.radians(10.0)), abs=1e-6)


@pytest.mark.parametrize("tilt", [-30.0, 0.0, 7.0, 30.0])
def test_width_is_normal_to_the_line(tilt: float) -> None:
    straight = straighten(edge_points(tilt, 20.0, np.zeros_like, ROWS), np.tan(np.radians(tilt)), 1.0)
    known = np.isfinite(straight.width)
    assert known.mean() > 0.9  # at its ends a tilted line has one edge only
    np.testing.assert_allclose(straight.width[known], 20.0, atol=1e-4)


# A wiggle moves both edges alike at the same place along the line: paired along the normal, the width stays.
@pytest.mark.parametrize("tilt", [0.0, 20.0, 30.0])
def test_wiggle_of_a_tilted_line_leaves_no_width_roughness(tilt: float) -> None:
    def wave(s: np.ndarray) -> np.ndarray:
        return 1.5 * np.sin(2 * np.pi * s / 30.0)

    points = edge_points(tilt, 20.0, wave, ROWS)
    straight = straighten(points, np.tan(np.radians(tilt)), 1.0)
    inner = slice(8, -8)  # whatever is done at the ends
    assert straight.width[inner].std() < 0.01
    assert straight.left[inner].std() == pytest.approx(1.5 / np.sqrt(2), rel=0.03)
    if tilt:
        by_rows = (points[1, :, 1] - points[0, :, 1]) * np.cos(np.radians(tilt))
        assert by_rows.std() > 0.5  # paired along the rows instead, the wiggle would be width


def test_gap_stays_a_gap() -> None:
    points = edge_points(15.0, 20.0, np.zeros_like, ROWS)
    points[:, 80:120] = np.nan
    straight = straighten(points, np.tan(np.radians(15.0)), 1.0)
    known = np.nonzero(np.isfinite(straight.width))[0]
    missing = ~np.isfinite(straight.width)
    missing[: known[0]] = missing[known[-1] :] = False
    assert missing.sum() * straight.step == pytest.approx(40 / np.cos(np.radians(15.0)), abs=8)
    middle = (points[:, 79, :] + points[:, 120, :]).mean(axis=0) / 2
    along = middle[0] * np.cos(np.radians(15.0)) + middle[1] * np.sin(np.radians(15.0))
    assert missing[np.argmin(np.abs(straight.s - along))]


def test_grid_keeps_the_rows_own_interval_along_the_line() -> None:
    straight = straighten(edge_points(30.0, 20.0, np.zeros_like, ROWS), np.tan(np.radians(30.0)), 1.0)
    assert straight.step == pytest.approx(1 / np.cos(np.radians(30.0)))
    np.testing.assert_allclose(np.diff(straight.s), straight.step)


def test_rows_of_an_upright_line_are_taken_as_they_are() -> None:
    rng = np.random.default_rng(1)
    points = edge_points(0.0, 20.0, np.zeros_like, ROWS)
    points[..., 1] += rng.normal(0, 0.1, points.shape[:2])
    straight = straighten(points, 0.0, 1.0)
    np.testing.assert_allclose(straight.left, points[0, :, 1], atol=1e-12)
    np.testing.assert_allclose(straight.width_transfer, 1.0)


# Truth: white noise brought onto the grid, its spectrum over that of the noise as it was.
@pytest.mark.parametrize("tilt", [3.0, 25.0])
def test_stated_transfer_is_what_happens_to_white_noise(tilt: float) -> None:
    rng = np.random.default_rng(2)
    slope = np.tan(np.radians(tilt))
    rows = np.arange(2000.0)
    power, stated = 0.0, 0.0
    for _ in range(40):
        points = np.stack([np.column_stack([rows, slope * rows + side]) for side in (-10, 10)])
        points[..., 1] += rng.normal(0, 0.05, points.shape[:2])
        straight = straighten(points, slope, 1.0)
        left = straight.left[np.isfinite(straight.left)]
        left = left[len(left) % 2 :][:1990]
        left = left - left.mean()
        power = power + np.abs(np.fft.rfft(left)) ** 2 / len(left) / 40
        stated = stated + straight.transfer[0] ** 2 / 40
    noise = (0.05 * np.cos(np.radians(tilt))) ** 2
    bands = np.array_split(np.arange(10, len(power)), 10)
    for band in bands:
        assert power[band].mean() / noise == pytest.approx(stated[band].mean(), abs=0.04)  # 40 x 98 ordinates: 1.6 %
