"""Quantities of one line: closed forms, rendered truth, and what must not change them."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from skimage.measure import find_contours

from printmetrics.measure.lines.line import level_shift
from printmetrics.scale import Scale
from printmetrics.synth.scene import Defect

if TYPE_CHECKING:
    from collections.abc import Callable

    from printmetrics.synth.scene import Scene

Fixture = Any  # a function from the tests' conftest
BLUR = np.hypot(1.3, 1 / np.sqrt(12))  # the pixel's aperture is part of the blur seen
few = settings(max_examples=4, deadline=None, derandomize=True)


def sine(amplitude: float, period: float) -> Callable[[Any], Any]:
    return lambda s: amplitude * np.sin(2 * np.pi * s / period)


def kept(period: float) -> float:
    """Share of a small sine along an edge that a Gaussian blur leaves: exp(-2 pi^2 sigma^2 f^2)."""
    return float(np.exp(-2 * (np.pi * BLUR / period) ** 2))


# Source: the level p of a Gaussian edge lies sigma Phi^-1(p) from its middle; derived. 40 %: 0.50669 sigma for two.
@pytest.mark.parametrize(("bright", "shift"), [(False, -0.50669), (True, 0.50669)])
def test_level_shift_at_40_percent(bright: bool, shift: float) -> None:
    assert level_shift(np.array([1.0, 1.0]), 0.4, bright=bright) == pytest.approx(shift, abs=5e-6)
    assert level_shift(np.array([1.0, 1.0]), 0.5, bright=bright) == 0.0


# Source: 10-90 % distance of a Gaussian edge is 2.56310 sigma; derived.
def test_levels_of_10_and_90_percent_are_apart_by_the_edge_distance() -> None:
    low, high = (level_shift(np.array([1.0, 1.0]), p, bright=True) for p in (0.1, 0.9))
    assert (low - high) / 2 == pytest.approx(2.56310, abs=5e-6)


@pytest.mark.parametrize("levels", [{}, {"substrate": 200.0, "ink": 50.0}])
@pytest.mark.parametrize("width", [6.0, 20.0, 60.0])
def test_width_of_a_straight_line(take: Fixture, read: Fixture, lines: Fixture, levels: dict, width: float) -> None:
    image, _ = take(lines(0.0, width=width, **levels))
    seen = read(image, ink="dark" if levels else "bright")
    mean = seen.reading("width_mean")
    assert abs(mean.value - width) < 4 * mean.u_noise
    assert mean.u_noise < 0.02
    assert seen.value("edge_blur") == pytest.approx(BLUR, rel=0.03)
    sign = -1 if levels else 1
    assert seen.value("width_r40") - mean.value == pytest.approx(sign * 0.50669 * seen.value("edge_blur"), rel=1e-4)


def test_edge_level_moves_the_width_by_the_levels_place(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(0.0))
    middle, low = read(image), read(image, edge_level=0.25)
    assert low.value("width_mean") - middle.value("width_mean") == pytest.approx(2 * 0.67449 * BLUR, rel=0.02)
    assert low.value("width_r40") == pytest.approx(middle.value("width_r40"))


@pytest.mark.parametrize(("tilt", "direction"), [(12.0, "vertical"), (-25.0, "vertical"), (25.0, "horizontal")])
def test_width_of_a_tilted_line_is_normal_to_it(
    take: Fixture, read: Fixture, lines: Fixture, tilt: float, direction: str
) -> None:
    image, truth = take(lines(0.0, shape=(240, 240), tilt_deg=tilt, direction=direction))
    seen = read(image)
    assert seen.value("width_mean") == pytest.approx(20.0, abs=0.02)
    assert seen.value("tilt") == pytest.approx(tilt, abs=4 * seen.reading("tilt").u + 0.005)
    assert seen.value("length") == pytest.approx(truth.lines[0].statistics().length, rel=0.1)
    assert seen.value("edge_blur") == pytest.approx(BLUR, rel=0.03)


# By hand: a line at angle a from +y, width w [px]: normal n = (cos a, sin a). Stretched by (X, Y), the two edges
# n . (x / X, y / Y) = +-w/2 lie w / |(cos a / X, sin a / Y)| apart; the angle from +y becomes atan(tan a X / Y).
def test_scale_that_differs_in_x_and_y(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(0.0, shape=(240, 240), tilt_deg=20.0))
    seen = read(image, {"scale": Scale(x=0.5, y=0.6, u_relative=0.0)})
    c, s = np.cos(np.radians(20.0)), np.sin(np.radians(20.0))
    assert seen.value("width_mean") == pytest.approx(20.0 / np.hypot(c / 0.5, s / 0.6), abs=0.01)
    assert seen.value("tilt") == pytest.approx(np.degrees(np.arctan(s / c * 0.5 / 0.6)), abs=0.02)
    assert seen.reading("width_mean").unit == "um"


def test_uncertain_scale_is_the_common_part(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(0.0))
    exact, unsure = (read(image, {"scale": Scale(x=0.5, y=0.5, u_relative=u)}) for u in (0.0, 0.01))
    for name in ("width_mean", "width_r40"):
        one, other = exact.reading(name), unsure.reading(name)
        assert (one.u_noise, one.u_sampling) == (other.u_noise, other.u_sampling)
        assert other.u_common == pytest.approx(np.hypot(one.u_common, 0.01 * one.value))


# Source: a sinusoidal edge of amplitude a over whole periods: 1 sigma a / sqrt(2), 3 sigma 2.12132 a.
def test_sinusoidal_edge_has_its_closed_form_roughness(take: Fixture, read: Fixture, lines: Fixture) -> None:
    amplitude, period, periods = 1.5, 50.0, 6  # so long that blur leaves 98.6 % of it
    image, _ = take(lines(0.0, left_departure=sine(amplitude, period)))
    seen = read(image)
    # The best straight line takes 6 / (pi k)^2 of the variance of k whole periods about the middle; derived.
    about_line = np.sqrt(1 - 6 / (np.pi * periods) ** 2)
    noise = seen.value("ler_right_3sigma_raw") / 3
    seen_left = amplitude / np.sqrt(2) * kept(period) * about_line
    assert seen.value("raggedness_left") == pytest.approx(np.hypot(seen_left, noise), rel=0.01)
    assert seen.value("ler_left_3sigma_raw") == pytest.approx(3 * seen.value("raggedness_left"))
    # What blur takes from a single sine cannot be told: the correction knows a process.
    assert seen.value("ler_left_3sigma") == pytest.approx(2.12132 * amplitude * about_line, rel=0.02)
    assert seen.value("lwr_3sigma") == pytest.approx(2.12132 * amplitude, rel=0.02)
    assert seen.value("raggedness_right") == pytest.approx(0.05, rel=0.3)  # noise alone
    assert seen.value("ler_right_3sigma") < 0.2 * amplitude


# Source: width w0 + a sin: R / R0 = w0 / sqrt(w0^2 - a^2); 20 and 5 give 1.03280.
def test_harmonic_width_of_a_sinusoidal_edge(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(0.0, right_departure=sine(5.0, 100.0)))
    seen = read(image)
    assert 20.0 / seen.value("width_harmonic") == pytest.approx(1.03280, abs=0.001)
    assert seen.value("width_mean") == pytest.approx(20.0, abs=0.03)


def test_extremes_of_a_sinusoidal_edge(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, truth = take(lines(0.0, right_departure=sine(4.0, 60.0)))
    seen = read(image, neck_length=6.0)
    true = truth.lines[0].statistics(6.0)
    assert seen.value("width_min") == pytest.approx(true.width_min, abs=0.1)
    assert seen.value("width_max") == pytest.approx(true.width_max, abs=0.1)


def test_wiggle_at_30_degrees_is_no_width_roughness(take: Fixture, read: Fixture, lines: Fixture) -> None:
    scene = lines(0.0, shape=(240, 300), tilt_deg=30.0, edge_sd=1.0, correlation_length=15.0, exponent=0.8, rho=1.0)
    image, truth = take(scene, cnr=100)
    seen = read(image)
    left = 3 * truth.lines[0].statistics().left_sd
    assert seen.value("ler_left_3sigma") == pytest.approx(left, rel=0.15)
    assert seen.value("lwr_3sigma") < 0.15 * left
    assert seen.value("lwr_3sigma_raw") < 0.25 * left


def test_roughness_is_freed_of_noise_and_blur(take: Fixture, read: Fixture, lines: Fixture) -> None:
    true, freed, raw = [], [], []
    for seed in range(4):
        scene = lines(0.0, shape=(600, 60), edge_sd=0.6, correlation_length=15.0, exponent=0.7)
        image, truth = take(scene, cnr=8, seed=seed)
        seen = read(image)
        true.append(3 * truth.lines[0].statistics().width_sd)
        freed.append(seen.value("lwr_3sigma"))
        raw.append(seen.value("lwr_3sigma_raw"))
    assert np.mean(freed) == pytest.approx(np.mean(true), rel=0.04)
    assert np.mean(raw) > 1.05 * np.mean(true)


# Truth: 20 px all along; the least of many noisy widths lies 0.8 px below without a correction.
def test_straight_line_in_noise_has_no_neck(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(0.0, shape=(600, 100)), cnr=5)
    seen = read(image)
    assert seen.value("width_min") == pytest.approx(20.0, abs=0.2)
    assert seen.value("width_max") == pytest.approx(20.0, abs=0.2)
    assert seen.value("width_harmonic") == pytest.approx(20.0, abs=0.1)
    roughness = seen.reading("lwr_3sigma")
    assert roughness.value < 2 * roughness.u + 0.1
    assert seen.value("lwr_3sigma_raw") > 1.5


def test_single_neck_is_not_taken_for_noise(take: Fixture, read: Fixture, lines: Fixture) -> None:
    scene = lines(0.0, shape=(400, 100))
    scene = replace(scene, defects=(Defect(event="neck", line=0, at=30.0, size=16.0, depth=6.0),))
    image, truth = take(scene)
    seen = read(image, neck_length=4.0)
    assert seen.value("width_min") == pytest.approx(truth.lines[0].statistics(4.0).width_min, abs=0.5)
    assert seen.value("width_mean") == pytest.approx(20.0, abs=0.03)


def test_open_leaves_no_least_and_no_harmonic_width(take: Fixture, read: Fixture, lines: Fixture) -> None:
    scene = replace(lines(0.0), defects=(Defect(event="open", line=0, at=20.0, size=12.0),))
    image, _ = take(scene)
    seen = read(image)
    assert seen.value("open_count") == 1
    assert seen.value("width_min") == 0
    assert seen.value("width_harmonic") == 0
    mean = seen.reading("width_mean")
    assert abs(mean.value - 20.0) < 3 * mean.u


def test_short_line_withholds_the_process(take: Fixture, read: Fixture, lines: Fixture) -> None:
    scene = lines(0.0, shape=(120, 100), edge_sd=1.0, correlation_length=20.0, exponent=0.7)
    image, _ = take(scene)
    seen = read(image)
    for name in ("lwr_3sigma_long", "correlation_length", "roughness_exponent", "edge_noise"):
        assert seen.reading(name).value is None
        assert "short_sampling" in seen.flags(name).words()
    assert "short_sampling" in seen.flags("lwr_3sigma").words()


def test_long_line_tells_its_process(take: Fixture, read: Fixture, lines: Fixture) -> None:
    scene = lines(0.0, shape=(2000, 60), edge_sd=0.8, correlation_length=12.0, exponent=0.7)
    image, truth = take(scene)
    seen = read(image)
    long = seen.reading("lwr_3sigma_long")
    assert long.value == pytest.approx(3 * truth.lines[0].line.width_sd, abs=3 * long.u)
    xi = seen.reading("correlation_length")
    assert xi.value == pytest.approx(12.0, abs=3 * xi.u)
    assert xi.u < 6.0
    # The bound of one row, over the rows that make an edge point.
    predicted = np.sqrt(2 * np.sqrt(np.pi) * BLUR / round(seen.reading("edge_noise").sampling)) / 50
    assert seen.value("edge_noise") == pytest.approx(predicted, rel=0.15)
    mean = seen.reading("width_mean")
    assert abs(mean.value - 20.0) < 3 * mean.u
    # This picture's own piece is known far better than the process behind it.
    assert abs(mean.value - truth.lines[0].statistics().width_mean) < 4 * mean.u_noise
    assert mean.u_sampling > 5 * mean.u_noise


# Independent code on the same picture: contours at mid-level, and the area they enclose over the length.
@pytest.mark.parametrize("edge_sd", [0.0, 0.7])
def test_contours_at_mid_level_agree_on_the_mean_width(
    take: Fixture, read: Fixture, lines: Fixture, edge_sd: float
) -> None:
    image, _ = take(lines(0.0, edge_sd=edge_sd, correlation_length=15.0, exponent=0.8), cnr=100)
    seen = read(image)
    edges = sorted((c for c in find_contours(image, 125.0) if len(c) > 250), key=lambda c: c[:, 1].mean())
    assert len(edges) == 2
    rows = np.arange(5, 295)
    left, right = (np.interp(rows, *c[np.argsort(c[:, 0])].T) for c in edges)
    assert seen.value("width_mean") == pytest.approx(np.mean(right - left), abs=0.05)


SAME = ("width_mean", "width_min", "width_max", "width_harmonic", "lwr_3sigma", "ler_left_3sigma", "edge_blur")


def rough_scene(lines: Callable[..., Scene]) -> Scene:
    return lines(-40.0, 40.0, shape=(200, 180), edge_sd=0.6, correlation_length=12.0, exponent=0.8)


@given(shift=st.floats(-3.0, 3.0))
@few
def test_readings_do_not_depend_on_position(take: Fixture, read: Fixture, lines: Fixture, shift: float) -> None:
    scene = rough_scene(lines)
    moved = replace(scene, lines=tuple(replace(line, offset=line.offset + shift) for line in scene.lines))
    one, other = (read(take(s, cnr=1000)[0]) for s in (scene, moved))
    for name in SAME:
        assert other.value(name) == pytest.approx(one.value(name), abs=0.01, rel=0.01)
    assert other.value("pitch", "L1..L2") == pytest.approx(one.value("pitch", "L1..L2"), abs=0.005)


@given(gain=st.floats(0.2, 20.0), offset=st.floats(-100.0, 1000.0))
@few
def test_readings_do_not_depend_on_brightness(
    take: Fixture, read: Fixture, lines: Fixture, gain: float, offset: float
) -> None:
    image, _ = take(rough_scene(lines))
    one, other = read(image), read((gain * image + offset).astype(np.float32))
    for name in SAME:
        assert other.value(name) == pytest.approx(one.value(name), rel=2e-3)


def test_ink_may_be_bright_or_dark(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(rough_scene(lines))
    one, other = read(image), read(250.0 - image, ink="dark")
    for name in SAME:
        assert other.value(name) == pytest.approx(one.value(name), rel=2e-3)
    assert one.value("width_r40") > one.value("width_mean")
    assert other.value("width_r40") < other.value("width_mean")


def test_picture_on_its_side_gives_the_same_readings(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(rough_scene(lines))
    one, other = read(image), read(np.ascontiguousarray(image.T))
    assert one.readings.keys() == other.readings.keys()
    for name in SAME:
        assert other.value(name) == pytest.approx(one.value(name), rel=1e-6)


def test_line_upside_down_swaps_nothing_but_the_sides(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(rough_scene(lines))
    one, other = read(image), read(np.ascontiguousarray(image[:, ::-1]))
    assert other.value("width_mean", "L2") == pytest.approx(one.value("width_mean", "L1"), abs=2e-3)
    assert other.value("ler_right_3sigma", "L2") == pytest.approx(one.value("ler_left_3sigma", "L1"), rel=0.01)
