"""A region of lines as a whole: names, counts, events, flags, and refusals."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from pydantic import ValidationError

from printmetrics.errors import FeatureError
from printmetrics.flags import Flag
from printmetrics.measure.lines import LinesOptions, expected_items
from printmetrics.quantities import CATALOGUE
from printmetrics.scale import Scale
from printmetrics.synth import camera
from printmetrics.synth.scene import Defect, Line, Scene

Fixture = Any  # a function from the tests' conftest
PAIR_QUANTITIES = {"pitch", "space_mean", "space_min", "bridge_count"}


def test_every_quantity_of_every_item_has_a_reading(take: Fixture, read: Fixture, lines: Fixture) -> None:
    seen = read(take(lines(-40.0, 40.0))[0])
    single = set(CATALOGUE["lines"]) - PAIR_QUANTITIES - {"line_count"}
    for item, names in (("L1", single), ("L2", single), ("L1..L2", PAIR_QUANTITIES), ("all", {"line_count"})):
        assert {name for of, name in seen.readings if of == item} == names
    assert len(seen.measured.readings) == len(seen.readings)


def test_good_picture_has_no_flag_and_no_event(take: Fixture, read: Fixture, lines: Fixture) -> None:
    scene = lines(-40.0, 40.0, shape=(600, 180), edge_sd=0.5, correlation_length=8.0, exponent=0.7)
    seen = read(take(scene)[0], {"na": 0.28, "wavelength_um": 0.55, "scale": Scale(x=0.5, y=0.5, u_relative=0.0)})
    assert {r.flags for r in seen.measured.readings} == {Flag.NONE}
    assert seen.events == []


# --- names and counts


@pytest.mark.parametrize("direction", ["vertical", "horizontal"])
def test_lines_are_named_from_left_to_right_or_top_to_bottom(take: Fixture, read: Fixture, direction: str) -> None:
    of = [Line(offset=x, width=w) for x, w in ((-60.0, 12.0), (0.0, 20.0), (60.0, 28.0))]
    seen = read(take(Scene(shape=(200, 200), lines=tuple(of), blur=1.3, direction=direction))[0])
    assert [seen.value("width_mean", f"L{k}") for k in (1, 2, 3)] == pytest.approx([12, 20, 28], abs=0.05)
    assert seen.value("line_count", "all") == 3


def test_centres_keep_the_names_when_a_line_is_missing(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(-60.0, 60.0))
    half = {"scale": Scale(x=0.5, y=0.5, u_relative=0.0)}
    seen = read(image, half, centres=[20.0, 50.0, 79.0])  # of the picture's 99.5 um: lines at 19.75 and 79.75
    assert {item for item, name in seen.readings if name == "width_mean"} == {"L1", "L3"}
    assert not [item for item, _ in seen.readings if ".." in item]
    assert seen.value("line_count", "all") == 2
    assert seen.flags("width_mean", "L3") == Flag.NONE


def test_line_beyond_the_centres_is_named_after_them(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(-60.0, 0.0, 60.0))
    seen = read(image, centres=[39.0, 160.0])
    assert {item for item, name in seen.readings if name == "width_mean"} == {"L1", "L2", "L3"}
    assert seen.value("pitch", "L1..L2") == pytest.approx(120.0, abs=0.05)
    assert Flag.COUNT_DIFFERS in seen.flags("width_mean", "L3")
    assert Flag.COUNT_DIFFERS not in seen.flags("width_mean", "L2")


def test_centres_are_counted_from_the_picture_not_the_region(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(-60.0, 0.0, 60.0))
    seen = read(image, centres=[39.5, 99.5, 159.5], region=[70.0, 0.0, 130.0, 300.0])
    assert {item for item, name in seen.readings if name == "width_mean"} == {"L2", "L3"}


def test_other_count_than_promised_flags_every_line(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(-40.0, 40.0))
    assert Flag.COUNT_DIFFERS in read(image, count=3).flags("width_mean", "L1")
    assert Flag.COUNT_DIFFERS not in read(image, count=2).flags("width_mean", "L1")


def test_expected_lines_are_a_limit_of_their_count() -> None:
    options = LinesOptions(name="bus", kind="lines", ink="bright", count=3)
    assert (options.limits["line_count"].lower, options.limits["line_count"].upper) == (3, 3)
    own = LinesOptions(name="bus", kind="lines", ink="bright", count=3, limits={"line_count": {"lower": 1}})
    assert (own.limits["line_count"].lower, own.limits["line_count"].upper) == (1, None)
    by_centres = LinesOptions(name="bus", kind="lines", ink="bright", centres=[1.0, 2.0])
    assert by_centres.limits["line_count"].upper == 2


def test_promised_items_are_those_measured(take: Fixture, read: Fixture, lines: Fixture) -> None:
    seen = read(take(lines(-40.0, 40.0))[0])
    promised = expected_items(LinesOptions(name="bus", kind="lines", ink="bright", count=2))
    assert {(item, name) for item, names in promised.items() for name in names} == set(seen.readings)


@pytest.mark.parametrize(
    ("keys", "message"),
    [
        ({"centres": [2.0, 1.0]}, "centres must rise"),
        ({"centres": [1.0, 2.0], "count": 3}, "count is 3 but 2 centres"),
        ({"direction": 45.0}, "within 30 degrees"),
        ({"edge_level": 0.95}, "less than or equal to 0.9"),
        ({"neck_length": 0.0}, "greater than 0"),
    ],
)
def test_options_that_contradict_are_refused(keys: dict[str, Any], message: str) -> None:
    with pytest.raises(ValidationError, match=message):
        LinesOptions(**({"name": "bus", "kind": "lines", "ink": "bright"} | keys))


# --- region and direction


def test_region_leaves_out_what_lies_beside_it(take: Fixture, read: Fixture) -> None:
    of = (Line(offset=-60.0, width=12.0), Line(offset=40.0, width=20.0))
    image, _ = take(Scene(shape=(200, 200), lines=of, blur=1.3))
    seen = read(image, {"scale": Scale(x=0.5, y=0.5, u_relative=0.0)}, region=[40.0, 10.0, 60.0, 80.0])
    assert seen.value("line_count", "all") == 1
    assert seen.value("width_mean") == pytest.approx(10.0, abs=0.03)
    assert seen.value("length") == pytest.approx(80.0, abs=1.0)
    shape = next(s for s in seen.measured.shapes if s.role == "edge")  # drawn in the whole picture
    assert np.nanmean(shape.points_px, axis=0) == pytest.approx([99.5 + 40 - 10, 99.5], abs=1.0)


def test_grid_needs_its_direction_given(take: Fixture, read: Fixture, lines: Fixture) -> None:
    upright = take(lines(-50.0, 50.0, shape=(200, 200), width=10.0))[0]
    lying = take(lines(-60.0, 60.0, shape=(200, 200), width=10.0, direction="horizontal"))[0]
    grid = np.maximum(upright, lying)
    with pytest.raises(FeatureError, match=r"direction is open.*direction = "):
        read(grid)
    for direction, count, pitch in (("vertical", 2, 100.0), ("horizontal", 2, 120.0)):
        seen = read(grid, direction=direction)
        assert seen.value("line_count", "all") == count
        assert seen.value("pitch", "L1..L2") == pytest.approx(pitch, abs=0.1)
        assert seen.value("width_mean") == pytest.approx(10.0, abs=0.1)


@pytest.mark.parametrize(("direction", "angle"), [("vertical", 90.0), ("horizontal", 0.0), ("vertical", -90.0)])
def test_direction_may_be_given_in_degrees(
    take: Fixture, read: Fixture, lines: Fixture, direction: str, angle: float
) -> None:
    image, _ = take(lines(0.0, shape=(240, 240), tilt_deg=10.0, direction=direction))
    seen = read(image, direction=angle + 10.0)
    assert seen.value("tilt") == pytest.approx(10.0, abs=0.05)
    assert seen.value("width_mean") == pytest.approx(20.0, abs=0.03)


@pytest.mark.parametrize("direction", ["auto", "vertical", "horizontal"])
@pytest.mark.parametrize("kind", ["noise", "flat", "ramp"])
def test_nothing_printed_is_said_so(read: Fixture, kind: str, direction: str) -> None:
    blank = np.full((200, 200), 100.0)
    image = {
        "noise": blank + np.random.default_rng(1).normal(0, 5, blank.shape),
        "flat": blank,
        "ramp": blank + np.linspace(0, 60, 200) + np.random.default_rng(1).normal(0, 1, blank.shape),
    }[kind]
    with pytest.raises(FeatureError, match="no line") as error:
        read(image.astype(np.float32), direction=direction)
    assert error.value.count == 0


@pytest.mark.parametrize("region", [[0.0, 0.0, 10.0, 200.0], [150.0, 0.0, 100.0, 8.0]])
def test_region_too_small_for_lines_is_refused(take: Fixture, read: Fixture, lines: Fixture, region: list) -> None:
    with pytest.raises(FeatureError, match="at least 16 x 16 px"):
        read(take(lines(0.0))[0], region=region)


def test_picture_is_not_written_to(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(-40.0, 40.0))
    image.flags.writeable = False
    assert read(image).value("line_count", "all") == 2


@pytest.mark.parametrize("kind", [np.uint8, np.uint16])
def test_whole_codes_give_the_same_widths(take: Fixture, read: Fixture, lines: Fixture, kind: type) -> None:
    image, _ = take(lines(-40.0, 40.0))
    codes = np.rint(image * (1 if kind is np.uint8 else 100)).astype(kind)
    assert read(codes).value("width_mean") == pytest.approx(read(image).value("width_mean"), abs=0.01)


# --- events

EVENTS = {
    "open": ({"line": 0, "size": 16.0}, "L1"),
    "bridge": ({"line": 0, "size": 16.0, "depth": 5.0}, "L1..L2"),
    "neck": ({"line": 1, "size": 20.0, "depth": 9.0, "side": "left"}, "L2"),
    "bulge": ({"line": 0, "size": 20.0, "depth": 9.0, "side": "left"}, "L1"),
    "void": ({"line": 1, "size": 12.0, "offset": 1.0}, "L2"),
    "satellite": ({"line": 0, "size": 14.0, "offset": 35.0}, "L1..L2"),
}


@pytest.mark.parametrize("tilt", [0.0, 12.0])
@pytest.mark.parametrize("levels", [{}, {"substrate": 200.0, "ink": 50.0}])
@pytest.mark.parametrize("kind", list(EVENTS))
def test_defect_is_one_event_at_its_place_and_spares_the_rest(
    take: Fixture, read: Fixture, lines: Fixture, kind: str, levels: dict, tilt: float
) -> None:
    keys, item = EVENTS[kind]
    scene = lines(-35.0, 35.0, shape=(300, 260), width=24.0, tilt_deg=tilt, **levels)
    image, truth = take(replace(scene, defects=(Defect(event=kind, at=20.0, **keys),)))
    seen = read(image, {"scale": Scale(x=0.5, y=0.5, u_relative=0.0)}, ink="dark" if levels else "bright")
    (event,) = seen.events
    true = truth.defects[0]
    assert (event.event, event.item) == (kind, item)
    reach = 2.0 if kind in ("open", "bridge", "void", "satellite") else 6.0  # dents: truth is at the edge as moved
    assert np.hypot(event.x_px - true.x, event.y_px - true.y) < reach
    if kind in ("open", "bridge", "void", "satellite"):
        assert event.size == pytest.approx(0.5 * true.size, abs=1.5)
    if kind in ("bridge", "void", "satellite"):
        assert event.area == pytest.approx(0.25 * true.area, rel=0.2)
    for name in ("L1", "L2"):
        width = seen.reading("width_mean", name)
        assert abs(width.value - 12.0) < 3 * width.u


@pytest.mark.parametrize(("depth", "size"), [(12.0, 20.0), (14.0, 30.0), (16.0, 30.0)])
def test_deep_neck_does_not_lose_its_line(
    take: Fixture, read: Fixture, lines: Fixture, depth: float, size: float
) -> None:
    neck = Defect(event="neck", line=1, at=20.0, size=size, depth=depth, side="left")
    seen = read(take(replace(lines(-35.0, 35.0, width=24.0), defects=(neck,)))[0])
    assert seen.value("line_count", "all") == 2
    assert [(e.event, e.item) for e in seen.events] == [("neck", "L2")]


def test_clean_rough_lines_have_no_event(take: Fixture, read: Fixture, lines: Fixture) -> None:
    for seed in range(4):
        scene = lines(-40.0, 40.0, edge_sd=1.0, correlation_length=10.0 + 5 * seed, exponent=0.7)
        assert read(take(scene, cnr=20, seed=seed)[0]).events == []


def test_satellite_that_touches_its_line_is_a_bulge(take: Fixture, read: Fixture, lines: Fixture) -> None:
    scene = lines(0.0)
    scene = replace(scene, defects=(Defect(event="satellite", line=0, at=10.0, size=14.0, offset=14.0),))
    assert [(e.event, e.item) for e in read(take(scene)[0]).events] == [("bulge", "L1")]


def test_line_that_leaves_by_the_side_is_cut_and_has_no_event(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(0.0, 60.0, tilt_deg=20.0))
    seen = read(image)
    assert seen.events == []
    assert Flag.CUT_BY_BORDER in seen.flags("width_mean", "L2")
    assert seen.value("width_mean", "L2") == pytest.approx(20.0, abs=0.03)


def test_several_defects_leave_the_rest_measured(take: Fixture, read: Fixture, lines: Fixture) -> None:
    defects = (
        Defect(event="open", line=0, at=-80.0, size=12.0),
        Defect(event="bridge", line=1, at=0.0, size=12.0, depth=4.0),
        Defect(event="satellite", line=0, at=60.0, size=10.0, offset=25.0),
    )
    seen = read(take(replace(lines(-55.0, 0.0, 55.0, shape=(400, 200)), defects=defects))[0])
    assert [(e.event, e.item) for e in seen.events] == [
        ("open", "L1"), ("bridge", "L2..L3"), ("satellite", "L1..L2"),
    ]  # fmt: skip
    assert [seen.value("open_count", f"L{k}") for k in (1, 2, 3)] == [1, 0, 0]
    for k in (1, 2, 3):
        width = seen.reading("width_mean", f"L{k}")
        assert abs(width.value - 20.0) < 3 * width.u


# --- flags, each at its criterion


def test_saturated_pixels_at_the_edges_are_flagged(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(-40.0, 40.0))
    clipped = np.minimum(image, 190.0)
    seen = read(clipped, {"saturated": clipped >= 190.0})
    assert Flag.SATURATED in seen.flags()
    one_pixel = np.zeros(image.shape, bool)
    one_pixel[5, 5] = True
    assert Flag.SATURATED not in read(image, {"saturated": one_pixel}).flags()


def test_contrast_below_4_noise_is_low(take: Fixture, read: Fixture, lines: Fixture) -> None:
    scene = lines(0.0, shape=(600, 100))
    assert Flag.LOW_CONTRAST in read(take(scene, cnr=3.5)[0]).flags()
    assert Flag.LOW_CONTRAST not in read(take(scene, cnr=4.6)[0]).flags()


# Source: edge sigma of an aberration-free objective 0.235 wavelength / NA; derived. NA 0.28, 0.55 um: 0.4616 um.
def test_twice_the_blur_of_the_optics_is_defocused(take: Fixture, read: Fixture, lines: Fixture) -> None:
    optics = {"na": 0.28, "wavelength_um": 0.55, "scale": Scale(x=0.3, y=0.3, u_relative=0.0)}
    sharpest = 2 * np.hypot(0.4616, 0.3 / np.sqrt(12)) / 0.3  # with the pixel's own aperture, in px
    for share, flagged in ((0.9, False), (1.1, True)):
        blur = float(np.sqrt((share * sharpest) ** 2 - 1 / 12))
        image, _ = take(lines(0.0, width=40.0, blur=blur))
        assert (Flag.DEFOCUSED in read(image, optics).flags()) == flagged
        assert Flag.DEFOCUSED not in read(image).flags()  # nothing is known of the optics


# Source: Rayleigh distance 0.61 wavelength / NA = 1.198 um at 0.55 um, NA 0.28.
def test_width_below_the_rayleigh_distance_is_not_resolved(take: Fixture, read: Fixture, lines: Fixture) -> None:
    for width, flagged in ((1.1, True), (1.3, False)):
        image, _ = take(lines(0.0, width=width / 0.1, blur=1.0))
        seen = read(image, {"na": 0.28, "wavelength_um": 0.55, "scale": Scale(x=0.1, y=0.1, u_relative=0.0)})
        assert (Flag.NOT_RESOLVED in seen.flags()) == flagged


def test_width_below_its_blur_is_not_resolved(take: Fixture, read: Fixture, lines: Fixture) -> None:
    assert Flag.NOT_RESOLVED in read(take(lines(0.0, width=4.0, blur=2.0))[0]).flags()
    assert Flag.NOT_RESOLVED not in read(take(lines(0.0, width=7.0, blur=2.0))[0]).flags()


def test_space_below_its_blur_leaves_levels_unresolved(take: Fixture, read: Fixture, lines: Fixture) -> None:
    for space, flagged in ((5.5, True), (10.0, False)):
        image, _ = take(lines(-(30 + space) / 2, (30 + space) / 2, width=30.0, blur=2.0))
        assert (Flag.LEVELS_UNRESOLVED in read(image).flags()) == flagged


@pytest.mark.parametrize("amount", [2.0, 1.0])
def test_overshoot_beside_the_edges_is_sharpening(take: Fixture, read: Fixture, lines: Fixture, amount: float) -> None:
    image, _ = take(lines(-40.0, 40.0), cnr=200)
    assert Flag.SHARPENED not in read(image).flags()
    sharp = camera.sharpen(image.astype(np.float64), amount, 1.5)  # overshoot 12 % and 5 % of the step
    assert Flag.SHARPENED in read(sharp.astype(np.float32)).flags()


def test_strong_overshoot_is_no_line(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(-40.0, 40.0), cnr=200)
    seen = read(camera.sharpen(image.astype(np.float64), 1.5, 2.5).astype(np.float32))
    assert seen.value("line_count", "all") == 2
    assert Flag.SHARPENED in seen.flags()


def test_light_that_varies_by_a_quarter_of_the_contrast_is_uneven(take: Fixture, read: Fixture, lines: Fixture) -> None:
    image, _ = take(lines(0.0, shape=(400, 100), substrate=150.0, ink=50.0))
    for along, flagged in ((0.08, False), (0.3, True)):  # bare web from 144 to 156, and 127 to 173, over 100
        seen = read((image * camera.light(image.shape, along=along)).astype(np.float32), ink="dark")
        assert (Flag.UNEVEN_LIGHT in seen.flags()) == flagged
        assert seen.value("width_mean") == pytest.approx(20.0, abs=0.03)


def test_piece_shorter_than_20_correlation_lengths_is_short(take: Fixture, read: Fixture, lines: Fixture) -> None:
    rough = {"edge_sd": 0.8, "exponent": 0.7}
    short = read(take(lines(0.0, shape=(150, 100), correlation_length=20.0, **rough))[0])
    long = read(take(lines(0.0, shape=(600, 60), correlation_length=6.0, **rough))[0])
    assert Flag.SHORT_SAMPLING in short.flags("lwr_3sigma")
    assert Flag.SHORT_SAMPLING not in long.flags("lwr_3sigma")


# --- crowded and small


# Truth: neighbours down to a space of 4 blurs are promised; here they fill the picture.
@pytest.mark.parametrize(
    ("width", "space", "blur"),
    [
        (8.0, 8.0, 1.0),
        (12.0, 8.0, 2.0),
        (6.0, 4.0, 0.9),
        (4.0, 4.0, 0.9),
    ],
)
def test_grating_that_fills_the_picture(
    take: Fixture, read: Fixture, lines: Fixture, width: float, space: float, blur: float
) -> None:
    pitch = width + space
    count = int(190 // pitch)
    offsets = [(k - (count - 1) / 2) * pitch for k in range(count)]
    seen = read(take(lines(*offsets, shape=(200, 200), width=width, blur=blur))[0])
    assert seen.value("line_count", "all") == count
    assert seen.values("width_mean") == pytest.approx(np.full(count, width), abs=0.06)
    assert np.mean(seen.values("width_mean")) == pytest.approx(width, abs=0.015)
    assert seen.values("pitch") == pytest.approx(np.full(count - 1, pitch), abs=0.06)
    assert seen.events == []


# Common practice, no source: press features of 50 to 100 um, printed electronics down to a few um, plated lines about
# a um; with a microscope of NA 0.28 for the small ones.
@pytest.mark.parametrize(
    ("width_um", "um_per_px", "sigma_um"),
    [(100.0, 2.0, 3.0), (50.0, 2.0, 3.0), (20.0, 0.5, 0.8), (5.0, 0.25, 0.47), (1.2, 0.25, 0.47)],
)
def test_features_of_the_trade_are_read_or_flagged(
    take: Fixture, read: Fixture, lines: Fixture, width_um: float, um_per_px: float, sigma_um: float
) -> None:
    width, blur = width_um / um_per_px, sigma_um / um_per_px
    pitch = max(2 * width, 30.0)
    scene = lines(-pitch / 2, pitch / 2, width=width, blur=blur, edge_sd=0.1, shape=(300, round(2 * pitch + 20)))
    optics = {} if um_per_px > 1 else {"na": 0.28, "wavelength_um": 0.55}
    seen = read(take(scene)[0], {"scale": Scale(x=um_per_px, y=um_per_px, u_relative=0.0)} | optics)
    assert seen.value("line_count", "all") == 2
    resolved = width_um > 2.6 * float(np.hypot(sigma_um, um_per_px / np.sqrt(12)))
    assert (Flag.NOT_RESOLVED in seen.flags()) == (not resolved)
    assert seen.value("pitch", "L1..L2") == pytest.approx(pitch * um_per_px, rel=0.005)
    if resolved:
        reading = seen.reading("width_mean")
        assert abs(reading.value - width_um) < 4 * reading.u
        assert reading.u < 0.02 * width_um
