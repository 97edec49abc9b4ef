"""Scenes and their truth."""

from functools import partial

import numpy as np
import pytest

from printmetrics.synth import Defect, Line, Scene, Truth, render


def lines_scene(
    count: int = 1,
    *,
    defects: tuple[Defect, ...] = (),
    shape: tuple[int, int] = (200, 240),
    blur: float = 1.0,
    **line: float,
) -> Scene:
    lines = tuple(Line(offset=60.0 * (k - (count - 1) / 2), width=20.0, **line) for k in range(count))
    return Scene(shape=shape, lines=lines, defects=defects, substrate=0.0, ink=1.0, blur=blur)


def shown(scene: Scene, seed: int = 1) -> tuple[np.ndarray, Truth]:
    return render(scene, np.random.default_rng(seed))


def test_line_stands_in_the_middle_of_the_picture_at_zero_offset() -> None:
    image, _ = shown(lines_scene(shape=(30, 61)))
    assert (image[15] * np.arange(61)).sum() / image[15].sum() == pytest.approx(30.0, abs=1e-6)


def test_vertical_line_with_positive_tilt_runs_to_smaller_x() -> None:
    scene = Scene(shape=(101, 201), lines=(Line(offset=0, width=20),), substrate=0, ink=1, tilt_deg=20)
    image, truth = shown(scene)
    centre = (image * np.arange(201)).sum(axis=1) / image.sum(axis=1)
    np.testing.assert_allclose(centre, 100 - np.tan(np.deg2rad(20)) * (np.arange(101) - 50), atol=1e-4)
    assert truth.edge_points(0, "left")[:, 0].max() > truth.edge_points(0, "left")[-1, 0]


def test_horizontal_line_with_positive_tilt_runs_to_larger_y() -> None:
    scene = Scene(
        shape=(201, 101), lines=(Line(offset=0, width=20),), substrate=0, ink=1, tilt_deg=20, direction="horizontal"
    )
    image, truth = shown(scene)
    centre = (image.T * np.arange(201)).sum(axis=1) / image.sum(axis=0)
    np.testing.assert_allclose(centre, 100 + np.tan(np.deg2rad(20)) * (np.arange(101) - 50), atol=1e-4)
    assert truth.edge_points(0, "left")[:, 1].mean() < truth.edge_points(0, "right")[:, 1].mean()


@pytest.mark.parametrize("tilt_deg", [0.0, 12.0])
def test_rough_edges_in_the_picture_are_those_of_the_truth(tilt_deg: float) -> None:
    line = Line(offset=3.0, width=20.0, edge_sd=0.8, correlation_length=15.0, exponent=0.8)
    scene = Scene(shape=(120, 160), lines=(line,), substrate=0, ink=1, blur=0.5, tilt_deg=tilt_deg)
    image, truth = shown(scene)
    left, right = (truth.edge_points(0, side) for side in ("left", "right"))
    fine = np.linspace(-0.5, 119.5, 120 * 16 + 1)
    fine = (fine[1:] + fine[:-1]) / 2
    across = np.interp(fine, right[:, 1], right[:, 0]) - np.interp(fine, left[:, 1], left[:, 0])
    # Blur along y only moves ink between rows: sums over many rows agree.
    assert image[20:100].sum() == pytest.approx(across.reshape(120, 16).mean(axis=1)[20:100].sum(), rel=2e-4)


def test_dark_ink_is_the_negative_of_bright_ink() -> None:
    bright = Scene(shape=(20, 60), lines=(Line(offset=0, width=20),), substrate=40, ink=200)
    dark = Scene(shape=(20, 60), lines=(Line(offset=0, width=20),), substrate=200, ink=40)
    np.testing.assert_allclose(shown(bright)[0] + shown(dark)[0], 240.0)


# Source: raggedness of a sinusoidal edge over whole periods is a / sqrt(2).
def test_sinusoidal_edge_has_its_closed_form_roughness() -> None:
    scene = lines_scene(left_departure=lambda s: 2.0 * np.sin(2 * np.pi * s / 20.0))
    stats = shown(scene)[1].lines[0].statistics(piece=(-60.0, 60.0 - 1e-6))
    assert stats.left_sd == pytest.approx(2 / np.sqrt(2), rel=1e-2)  # the best line takes a little of a sine
    assert stats.width_sd == pytest.approx(2 / np.sqrt(2), rel=1e-6)
    assert stats.right_sd == pytest.approx(0.0, abs=1e-9)


# Source: width w0 + a sin gives R / R0 = w0 / sqrt(w0^2 - a^2); 20 and 5 give 1.03280.
def test_harmonic_width_of_a_sine_is_its_closed_form() -> None:
    scene = lines_scene(right_departure=lambda s: 5.0 * np.sin(2 * np.pi * s / 20.0))
    stats = shown(scene)[1].lines[0].statistics(piece=(-60.0, 60.0 - 1e-6))
    assert 20.0 / stats.width_harmonic == pytest.approx(1.03280, abs=1e-5)


def test_wiggle_of_a_tilted_line_has_no_width_roughness() -> None:
    line = Line(offset=0, width=20, edge_sd=1.0, rho=1.0)
    stats = shown(Scene(shape=(200, 200), lines=(line,), tilt_deg=30))[1].lines[0].statistics()
    assert stats.width_sd == pytest.approx(0.0, abs=1e-9)
    assert stats.left_sd > 0.5


def test_piece_is_what_the_picture_holds_of_the_axis() -> None:
    scene = Scene(shape=(100, 300), lines=(Line(offset=20.0, width=10),), tilt_deg=30)
    assert shown(scene)[1].lines[0].statistics().length == pytest.approx(100 / np.cos(np.pi / 6))


def test_line_with_a_span_ends_in_the_picture() -> None:
    image, truth = shown(lines_scene(span=(-40.0, 50.0)))
    assert image.sum() == pytest.approx(20 * 90, rel=1e-4)
    assert truth.lines[0].statistics().length == pytest.approx(90.0)


DEFECTS = {
    "open": Defect(event="open", line=0, at=10.3, size=14.0),
    "neck": Defect(event="neck", line=1, at=-20.0, size=15.0, depth=8.0, side="left"),
    "bulge": Defect(event="bulge", line=1, at=-20.0, size=15.0, depth=8.0, side="right"),
    "bridge": Defect(event="bridge", line=0, at=5.2, size=12.0, depth=6.0),
    "void": Defect(event="void", line=0, at=0.0, size=9.0, offset=2.0),
    "satellite": Defect(event="satellite", line=0, at=0.0, size=11.0, offset=29.0),
    "touching satellite": Defect(event="satellite", line=0, at=0.0, size=15.0, offset=15.0),
}


@pytest.mark.parametrize("name", DEFECTS)
def test_defect_changes_the_ink_by_its_area_at_its_place(name: str) -> None:
    defect = DEFECTS[name]
    rough = {"edge_sd": 0.5, "correlation_length": 12.0}
    with_it, truth = shown(lines_scene(3, defects=(defect,), **rough))
    without, _ = shown(lines_scene(3, **rough))
    (found,) = truth.defects
    change = with_it - without
    sign = 1 if defect.event in ("bulge", "bridge", "satellite") else -1
    assert sign * change.sum() == pytest.approx(found.area, rel=1e-3)
    row, col = np.unravel_index(np.argmax(np.abs(change)), change.shape)
    assert np.hypot(row - found.y, col - found.x) < 20
    assert found.event == defect.event
    assert found.item == ("L1..L2" if name == "bridge" else f"L{defect.line + 1}")


def test_open_parts_the_line_by_its_size() -> None:
    image, truth = shown(lines_scene(defects=(Defect(event="open", line=0, at=0.0, size=20.0),), blur=0.5))
    axis = image[:, 119:121].mean(axis=1)
    assert np.sum(1 - axis) == pytest.approx(20.0, abs=0.3)  # the ends are round: two columns are not quite the axis
    stats = truth.lines[0].statistics(neck_length=4.0)
    assert (stats.width_min, stats.width_harmonic, stats.width_mean) == (0.0, 0.0, 20.0)


# Source: a gap of 14 between two half discs across the line of 20.
def test_ends_of_an_open_are_round() -> None:
    _, truth = shown(lines_scene(defects=(DEFECTS["open"],)))
    assert truth.defects[0].area == pytest.approx(14 * 20 + 20**2 * (1 - np.pi / 4), rel=1e-3)


def test_neck_takes_its_depth_from_the_width() -> None:
    stats = shown(lines_scene(3, defects=(DEFECTS["neck"],)))[1].lines[1].statistics()
    assert stats.width_min == pytest.approx(12.0, abs=1e-3)
    assert stats.width_mean == 20.0


def test_bridge_closes_the_space_and_leaves_the_widths() -> None:
    _, truth = shown(lines_scene(3, defects=(DEFECTS["bridge"],)))
    assert truth.spaces(0) == (40.0, 0.0)
    assert truth.spaces(1) == (40.0, 40.0)
    assert truth.lines[0].statistics().width_max == 20.0


def test_space_of_a_piece_is_that_of_the_edges_in_it() -> None:
    edge = partial(np.interp, xp=[-100.0, 100.0], fp=[-10.0, 10.0])  # the second line's left edge leaves the first
    lines = (Line(offset=-30.0, width=20.0), Line(offset=30.0, width=20.0, left_departure=edge))
    truth = shown(Scene(shape=(240, 160), lines=lines))[1]
    mean, smallest = truth.spaces(0, piece=(-60.0, 20.0))
    assert mean == pytest.approx(40.0 - 2.0, abs=0.01)
    assert smallest == pytest.approx(40.0 - 6.0, abs=0.01)


def test_bridge_beyond_a_piece_leaves_its_space_open() -> None:
    at = DEFECTS["bridge"].at
    truth = shown(lines_scene(2, defects=(DEFECTS["bridge"],)))[1]
    assert truth.spaces(0, piece=(at - 20.0, at + 20.0)) == (40.0, 0.0)
    assert truth.spaces(0, piece=(at + 30.0, at + 60.0)) == (40.0, 40.0)


def test_drop_that_reaches_another_line_is_refused() -> None:
    drop = Defect(event="satellite", line=0, at=0.0, size=20.0, offset=45.0)
    with pytest.raises(ValueError, match="outlines overlap"):
        shown(lines_scene(2, defects=(drop,)))


def test_same_seed_gives_the_same_picture() -> None:
    scene = lines_scene(2, edge_sd=0.5)
    np.testing.assert_array_equal(shown(scene, 7)[0], shown(scene, 7)[0])
    assert not np.allclose(shown(scene, 7)[0], shown(scene, 8)[0])
