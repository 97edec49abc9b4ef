"""Which way lines run and how many there are: truth from invented scenes."""

from __future__ import annotations

from typing import TYPE_CHECKING

import cv2
import numpy as np
import pytest

from printmetrics.analysis.finding import SMOOTH_PX, block_profiles, find_direction, find_lines
from printmetrics.synth import camera
from printmetrics.synth.scene import Line, Scene, render

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from printmetrics.analysis.finding import CoarseLine


def picture(
    offsets: list[float], width: float, *, tilt: float = 0.0, direction: str = "vertical", dark: bool = False,
    cnr: float = 20.0, blur: float = 1.3, shape: tuple[int, int] = (200, 300), light: dict[str, float] | None = None,
) -> NDArray[np.float32]:  # fmt: skip
    levels = {"substrate": 180.0, "ink": 60.0} if dark else {"substrate": 60.0, "ink": 180.0}
    lines = tuple(Line(offset=offset, width=width, edge_sd=0.3) for offset in offsets)
    scene = Scene(shape=shape, lines=lines, blur=blur, tilt_deg=tilt, direction=direction, **levels)
    rng = np.random.default_rng(1)
    image = render(scene, rng)[0] * camera.light(shape, **(light or {}))
    return camera.white_noise(image, 120.0 / cnr, rng).astype(np.float32)


def found(image: NDArray[np.float32], *, bright: bool = True, vertical: bool | None = True) -> list[CoarseLine]:
    return find_lines(image, find_direction(image, vertical=vertical).slope, bright=bright)


@pytest.mark.parametrize("tilt", [-30, -17, -5, 0, 2, 12, 30])
@pytest.mark.parametrize(("direction", "dark"), [("vertical", False), ("horizontal", True)])
def test_direction_is_found_within_a_degree(tilt: float, direction: str, dark: bool) -> None:
    image = picture([-45.0, 0.0, 45.0], 15.0, tilt=tilt, direction=direction, dark=dark)
    seen = find_direction(image)
    assert seen.vertical == (direction == "vertical")
    # A vertical line with positive tilt runs to smaller x as y grows.
    angle = np.degrees(np.arctan(seen.slope)) * (-1 if seen.vertical else 1)
    assert angle == pytest.approx(tilt, abs=1.0)


def test_direction_may_be_given_where_both_axes_hold_lines() -> None:
    upright = picture([-60.0, 60.0], 15.0, shape=(240, 240))
    lying = picture([-60.0, 60.0], 15.0, shape=(240, 240), direction="horizontal")
    grid = np.maximum(upright, lying)
    assert find_direction(grid).rival > 0.7
    assert find_direction(grid, vertical=True).vertical
    assert not find_direction(grid, vertical=False).vertical
    assert find_direction(upright).rival < 0.2


@pytest.mark.parametrize("count", [1, 2, 5, 12])
@pytest.mark.parametrize(("width", "dark"), [(4.0, True), (10.0, False)])
def test_every_line_is_found_where_it_is(count: int, width: float, dark: bool) -> None:
    offsets = [24.0 * (k - (count - 1) / 2) for k in range(count)]
    lines = found(picture(offsets, width, dark=dark), bright=not dark)
    assert len(lines) == count
    for offset, line in zip(offsets, lines, strict=True):
        assert np.median(line.left) == pytest.approx(149.5 + offset - width / 2, abs=1.0)
        assert np.median(line.right) == pytest.approx(149.5 + offset + width / 2, abs=1.0)


def test_wide_and_narrow_lines_are_found_side_by_side() -> None:
    image = np.maximum(picture([-80.0], 80.0), picture([40.0, 70.0], 4.0))
    assert [np.median(c.right - c.left) for c in found(image)] == pytest.approx([80, 4, 4], abs=1.5)


@pytest.mark.parametrize("tilt", [-30.0, 30.0])
def test_tilted_lines_are_found_though_some_leave_by_the_side(tilt: float) -> None:
    assert len(found(picture([-60.0, 0.0, 60.0], 15.0, tilt=tilt))) == 3


# Truth: lines down to a space of 4 blurs are in the promised range; here they fill the picture.


@pytest.mark.parametrize(
    ("width", "space", "blur"),
    [
        (8.0, 8.0, 1.0),
        (12.0, 8.0, 2.0),
        (6.0, 4.0, 1.0),
        (4.0, 4.0, 1.0),
    ],
)
def test_grating_is_found_line_by_line(width: float, space: float, blur: float) -> None:
    count = int(240 // (width + space))
    offsets = [(width + space) * (k - (count - 1) / 2) for k in range(count)]
    assert len(found(picture(offsets, width, cnr=50, blur=blur))) == count


@pytest.mark.parametrize("light", [{"across": 1.2}, {"along": 1.2}, {"vignette": 0.8}])
def test_uneven_light_hides_no_line_and_makes_none(light: dict[str, float]) -> None:
    assert len(found(picture([-100.0, -50.0, 0.0, 50.0, 100.0], 15.0, light=light))) == 5


def test_weak_lines_are_found_in_strong_noise_by_a_softer_look() -> None:
    assert len(find_lines(picture([-60.0, 0.0, 60.0], 20.0, cnr=3.0), 0.0, bright=True, smooth=SMOOTH_PX[1])) == 3


def test_line_is_found_over_its_gaps() -> None:
    image = picture([-50.0, 50.0], 15.0, cnr=50)
    image[60:90, 85:115] = 60.0
    image[140:160, 85:115] = 60.0
    lines = found(image)
    assert len(lines) == 2
    assert lines[0].rows.min() < 20
    assert lines[0].rows.max() > 180
    assert not ((lines[0].rows > 64) & (lines[0].rows < 86)).any()


def test_letters_and_drops_are_no_lines() -> None:
    image = picture([-90.0, 90.0], 15.0, cnr=50).astype(np.uint8)
    for row, text in ((60, "R7 L"), (130, "H1M"), (185, "2.5")):
        cv2.putText(image, text, (105, row), cv2.FONT_HERSHEY_SIMPLEX, 1.2, 180, 4, cv2.LINE_AA)
    cv2.circle(image, (120, 100), 14, 180, -1)
    assert len(found(image)) == 2


@pytest.mark.parametrize("seed", range(3))
def test_noise_alone_holds_no_line(seed: int) -> None:
    image = np.random.default_rng(seed).normal(100, 10, (200, 300)).astype(np.float32)
    for vertical in (True, False):
        assert found(image if vertical else np.ascontiguousarray(image.T)) == []


def test_flat_picture_holds_no_line() -> None:
    flat = np.full((200, 300), 100.0, np.float32)
    assert find_lines(flat, 0.0, bright=True) == []
    assert find_lines(flat + np.linspace(0, 50, 300, dtype=np.float32), 0.0, bright=True) == []


def test_space_between_bright_lines_is_a_dark_line() -> None:
    assert len(found(picture([-45.0, 0.0, 45.0], 15.0), bright=False)) == 2


def test_block_profiles_keep_a_tilted_line_upright() -> None:
    rows, columns = np.mgrid[:64, :80]
    image = (np.abs(columns - 40 - 0.25 * (rows - 31.5)) < 5).astype(np.float32)
    profiles, centre = block_profiles(image, 0.25, 16)
    assert profiles.shape == (4, 80)
    np.testing.assert_allclose(centre, [7.5, 23.5, 39.5, 55.5])
    middle = (profiles * np.arange(80)).sum(axis=1) / profiles.sum(axis=1)
    np.testing.assert_allclose(middle, 40 + 0.25 * (centre - 31.5), atol=0.3)
    assert profiles.max(axis=1) == pytest.approx(np.ones(4))
