"""Pitch and space between neighbours: truth from invented scenes."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from printmetrics.scale import Scale
from printmetrics.synth.scene import Defect

Fixture = Any  # a function from the tests' conftest
PAIR = "L1..L2"


@pytest.mark.parametrize("levels", [{}, {"substrate": 200.0, "ink": 50.0}])
@pytest.mark.parametrize(("tilt", "direction"), [(0.0, "vertical"), (-20.0, "vertical"), (15.0, "horizontal")])
def test_pitch_and_space_are_normal_to_the_lines(
    take: Fixture, read: Fixture, lines: Fixture, levels: dict, tilt: float, direction: str
) -> None:
    image, _ = take(lines(-22.0, 18.0, shape=(240, 240), tilt_deg=tilt, direction=direction, **levels))
    seen = read(image, ink="dark" if levels else "bright")
    for name, true in (("pitch", 40.0), ("space_mean", 20.0)):
        reading = seen.reading(name, PAIR)
        assert abs(reading.value - true) < 4 * reading.u + 0.002
        assert reading.u < 0.03
    assert seen.value("space_min", PAIR) == pytest.approx(20.0, abs=0.1)
    assert seen.value("bridge_count", PAIR) == 0


def test_pitch_under_a_scale_that_differs_in_x_and_y(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(-20.0, 20.0, shape=(240, 240), tilt_deg=20.0))
    seen = read(image, {"scale": Scale(x=0.5, y=0.6, u_relative=0.0)})
    shrink = np.hypot(np.cos(np.radians(20.0)) / 0.5, np.sin(np.radians(20.0)) / 0.6)  # as for a width
    assert seen.value("pitch", PAIR) == pytest.approx(40.0 / shrink, abs=0.01)
    assert seen.value("space_mean", PAIR) == pytest.approx(20.0 / shrink, abs=0.01)


def test_space_between_rough_lines(take: Fixture, read: Fixture, lines: Fixture) -> None:
    scene = lines(-20.0, 20.0, edge_sd=0.8, correlation_length=15.0, exponent=0.8)
    image, truth = take(scene, cnr=100)
    seen = read(image, neck_length=5.0)
    mean, least = truth.spaces(0, 5.0)
    assert seen.value("space_mean", PAIR) == pytest.approx(mean, abs=0.02)
    assert seen.value("space_min", PAIR) == pytest.approx(least, abs=0.2)
    reading = seen.reading("space_mean", PAIR)
    assert abs(reading.value - 20.0) < 3 * reading.u


def test_noise_does_not_make_the_least_space_small(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(-20.0, 20.0, shape=(600, 100)), cnr=5)
    assert read(image).value("space_min", PAIR) == pytest.approx(20.0, abs=0.2)


def test_space_moves_against_the_width_with_the_edge_level(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(-20.0, 20.0))
    seen = read(image, edge_level=0.3)
    assert seen.value("width_mean") > 21
    assert seen.value("width_mean") + seen.value("space_mean", PAIR) == pytest.approx(40.0, abs=0.02)
    assert seen.value("pitch", PAIR) == pytest.approx(40.0, abs=0.02)


def test_bridge_leaves_no_space(take: Fixture, read: Fixture, lines: Fixture) -> None:
    scene = replace(lines(-30.0, 30.0), defects=(Defect(event="bridge", line=0, at=10.0, size=14.0, depth=6.0),))
    seen = read(take(scene)[0])
    assert seen.value("bridge_count", PAIR) == 1
    assert seen.value("space_min", PAIR) == 0
    mean = seen.reading("space_mean", PAIR)
    assert abs(mean.value - 40.0) < 3 * mean.u
    assert seen.value("pitch", PAIR) == pytest.approx(60.0, abs=3 * seen.reading("pitch", PAIR).u)


def test_bulge_narrows_the_least_space(take: Fixture, read: Fixture, lines: Fixture) -> None:
    scene = replace(lines(-20.0, 20.0), defects=(Defect(event="bulge", line=0, at=10.0, size=20.0, depth=8.0),))
    image, truth = take(scene)
    seen = read(image, neck_length=4.0)
    assert seen.value("space_min", PAIR) == pytest.approx(truth.spaces(0, 4.0)[1], abs=0.6)
    assert seen.value("space_mean", PAIR) == pytest.approx(20.0, abs=0.05)


def test_each_pair_of_neighbours_has_its_readings(take: Fixture, read: Fixture, lines: Fixture) -> None:
    seen = read(take(lines(-60.0, -10.0, 50.0))[0])
    assert {item for item, name in seen.readings if name == "pitch"} == {"L1..L2", "L2..L3"}
    assert seen.value("pitch", "L1..L2") == pytest.approx(50.0, abs=0.02)
    assert seen.value("pitch", "L2..L3") == pytest.approx(60.0, abs=0.02)
