"""The marked-up picture. Scenes are invented."""

from typing import Any

import cv2
import numpy as np
import pytest
from numpy.typing import NDArray

from printmetrics.batch.draw import LONGEST_PX, STYLE, _labels, draw_picture, encode, value_words
from printmetrics.flags import Flag
from printmetrics.inspect import Inspection
from printmetrics.measure.readings import Shape
from printmetrics.scale import Scale

SCALE = Scale(x=0.5, y=0.5, u_relative=0.0)


def _row(item: str, verdict: str, **columns: Any) -> dict[str, Any]:  # noqa: ANN401
    return {
        "feature": "bus", "item": item, "quantity": "width_mean", "value": 20.0, "expanded_u": 0.05, "unit": "um",
        "verdict": verdict, "flags": Flag.NONE, "lower": 18.0, "target": None, "upper": 22.0, **columns,
    }  # fmt: skip


def _edge(item: str, x: float, height: int) -> tuple[str, Shape]:
    rows = np.arange(height, dtype=float)
    return "bus", Shape(item=item, role="edge", points_px=np.stack([np.full(height, x), rows], axis=1))


def _coloured(drawing: NDArray[np.uint8], colour: tuple[int, int, int]) -> NDArray[np.bool_]:
    return np.asarray((np.abs(drawing.astype(int) - colour) < 40).all(axis=2))


def test_edge_is_drawn_on_the_pixel_it_was_measured_on() -> None:
    image = np.zeros((300, 300), np.uint8)
    image[:, 100] = 255
    inspection = Inspection(rows=[_row("L1", "nonconforming")], shapes=[_edge("L1", 100.0, 300)], scale=SCALE)
    drawing = draw_picture(image, inspection, "x")
    # The picture is enlarged threefold: the bright column is three wide, the edge must lie on its middle.
    magenta = _coloured(drawing, STYLE["nonconforming"][1])
    column = int(np.bincount(np.nonzero(magenta)[1]).argmax())
    middle = drawing.shape[0] // 2
    np.testing.assert_array_less(180, drawing[middle, [column - 1, column + 1]].min(axis=1))
    assert drawing[middle, [column - 2, column + 2]].max() < 120


@pytest.mark.parametrize("verdict", ["conforming", "undecided", "nonconforming"])
def test_verdict_shows_by_colour_and_by_sign(verdict: str) -> None:
    inspection = Inspection(rows=[_row("L1", verdict)], shapes=[_edge("L1", 50.0, 100)], scale=SCALE)
    (label,) = _labels(inspection, 1.0, 0.4)
    sign, colour = STYLE[verdict]
    assert label.text == f"L1 20.000 +/- 0.050 um {sign}"
    assert label.colour == colour


# Verdict of the width, and of what else was read of the line; what the label says after the name.
WORSE = {
    "open at width": ("conforming", {"width_min": "nonconforming", "open_count": "nonconforming"},
                      " 20.000 +/- 0.050 um ok, X open_count"),
    "too wide and rough": ("nonconforming", {"lwr_3sigma": "undecided"}, " 20.000 +/- 0.050 um X"),
    "width without limits": ("", {"lwr_3sigma": "undecided"}, " 20.000 +/- 0.050 um, ? lwr_3sigma"),
    "nothing worse": ("", {"lwr_3sigma": "conforming"}, " 20.000 +/- 0.050 um"),
}  # fmt: skip


@pytest.mark.parametrize("what", WORSE)
def test_sign_beside_the_width_is_its_own_and_what_is_worse_is_named(what: str) -> None:
    verdict, others, words = WORSE[what]
    rows = [_row("L1", verdict)]
    rows += [_row("L1", v, quantity=q, unit="1" if q == "open_count" else "um") for q, v in others.items()]
    (label,) = _labels(Inspection(rows=rows, shapes=[_edge("L1", 50.0, 100)], scale=SCALE), 1.0, 0.4)
    assert label.text == f"L1{words}"


def test_withheld_width_is_named_with_its_sign() -> None:
    rows = [_row("L1", "undecided", value=None, expanded_u=None)]
    (label,) = _labels(Inspection(rows=rows, shapes=[_edge("L1", 50.0, 100)], scale=SCALE), 1.0, 0.4)
    assert label.text == "L1 ? width_mean"


def test_missing_line_is_dashed_and_named() -> None:
    ends = Shape(item="L2", role="missing", points_px=np.array([(150.0, 20.0), (150.0, 280.0)]))
    rows = [_row("L2", "undecided", value=None)]
    inspection = Inspection(rows=rows, shapes=[("bus", ends)], scale=SCALE)
    (label,) = _labels(inspection, 3.0, 0.4)
    assert label.text == "L2 missing"
    drawing = draw_picture(np.zeros((300, 300), np.uint8), inspection, "x")
    lit = _coloured(drawing, STYLE["undecided"][1])[-880:-40, :].any(axis=1)  # without the header and the footer
    dashes = np.count_nonzero(np.diff(lit.astype(int)) == 1)
    assert 20 < dashes < 50
    assert 0.4 < lit[100:700].mean() < 0.65


def test_label_at_the_right_border_is_whole() -> None:
    image = np.zeros((300, 1200), np.uint8)
    inked = []
    for x in (600.0, 1195.0):
        inspection = Inspection(rows=[_row("L1", "nonconforming")], shapes=[_edge("L1", x, 10)], scale=SCALE)
        inked.append(_coloured(draw_picture(image, inspection, "x"), STYLE["nonconforming"][1]).sum())
    assert inked[1] == pytest.approx(inked[0], rel=0.02)


def test_verdict_colours_differ_in_lightness_too() -> None:
    colours = np.array([[STYLE[verdict][1] for verdict in ("nonconforming", "undecided", "conforming")]], np.uint8)
    light = np.sort(cv2.cvtColor(colours, cv2.COLOR_BGR2LAB)[0, :, 0].astype(int))
    assert np.diff(light).min() >= 10


def test_of_lines_too_dense_to_label_the_one_that_does_not_conform_is_labelled() -> None:
    rows = [_row(f"L{n}", "nonconforming" if n == 57 else "conforming") for n in range(100)]
    shapes = [_edge(f"L{n}", 4.0 * n, 100) for n in range(100)]
    labels = _labels(Inspection(rows=rows, shapes=shapes, scale=SCALE), 1.0, 0.42)
    assert labels[0].text.startswith("L57")
    assert 10 < len(labels) < 100


@pytest.mark.parametrize("shape", [(1, 1), (3, 4000), (4000, 3), (200, 150)])
def test_any_size_of_picture_gives_a_drawing_of_bounded_size(shape: tuple[int, int]) -> None:
    drawing = draw_picture(
        np.zeros(shape, np.uint16), Inspection(rows=[_row("all", "undecided", value=None)]), "x" * 500
    )
    assert max(drawing.shape) < 1.5 * LONGEST_PX


def test_float_picture_without_a_single_finite_pixel_is_drawn() -> None:
    assert draw_picture(np.full((50, 50), np.nan, np.float32), Inspection(), "x").dtype == np.uint8


def test_names_in_any_script_are_drawn_with_a_question_mark_for_each_foreign_letter() -> None:
    failed = Inspection(failures={"линия": "не найдена \n"}, scale=Scale.pixels())
    event = {"feature": "f", "item": "L1", "event": "新", "x_px": 5.0, "y_px": 5.0, "area": 1.0}
    image = np.zeros((60, 60), np.uint8)
    named = draw_picture(image, Inspection(events=[event], failures=failed.failures), "図.png")
    assert np.array_equal(named, draw_picture(image, Inspection(events=[event], failures=failed.failures), "?.png"))


def test_event_is_outlined_and_named() -> None:
    image = np.full((400, 400), 90, np.uint8)
    turn = np.linspace(0, 2 * np.pi, 30)
    outline = Shape(
        item="L1", role="event:neck", points_px=np.stack([200 + 20 * np.cos(turn), 200 + 20 * np.sin(turn)], 1)
    )
    event = {"feature": "bus", "item": "L1", "event": "neck", "x_px": 200.0, "y_px": 200.0, "area": 1.0}
    plain = draw_picture(image, Inspection(scale=SCALE), "x")
    drawn = draw_picture(image, Inspection(shapes=[("bus", outline)], events=[event], scale=SCALE), "x")
    white = _coloured(drawn, (255, 255, 255)) & ~_coloured(plain, (255, 255, 255))
    assert 100 < np.count_nonzero(white) < 3000


def test_of_very_many_events_the_largest_are_named() -> None:
    image = np.zeros((900, 900), np.uint8)
    drop = {"feature": "bus", "item": "L1", "event": "satellite"}
    events = [drop | {"x_px": 30.0 * (n % 30), "y_px": 30.0 * (n // 30), "area": float(n)} for n in range(900)]
    many = draw_picture(image, Inspection(events=events, scale=SCALE), "x")
    few = draw_picture(image, Inspection(events=events[-20:], scale=SCALE), "x")
    assert np.array_equal(many[100:], few[100:])


def test_shapes_broken_by_nan_are_drawn_in_pieces() -> None:
    points = np.array([(10.0, 10.0), (10.0, 40.0), (np.nan, np.nan), (90.0, 60.0), (90.0, 90.0)])
    inspection = Inspection(
        rows=[_row("L1", "conforming")], shapes=[("bus", Shape(item="L1", role="edge", points_px=points))]
    )
    blue = _coloured(draw_picture(np.zeros((100, 100), np.uint8), inspection, "x")[60:], STYLE["conforming"][1])
    diagonal = blue[:, blue.shape[1] // 3 : blue.shape[1] // 2]
    assert blue.any()
    assert not diagonal[200:700].any()


@pytest.mark.parametrize(("shape", "suffix"), [((100, 100, 3), ".png"), ((1500, 1500, 3), ".jpg")])
def test_large_drawings_become_jpeg(shape: tuple[int, int, int], suffix: str) -> None:
    name, data = encode(np.zeros(shape, np.uint8))
    assert name == suffix
    assert cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_COLOR).shape == shape


def test_drawing_leaves_the_picture_as_it_is() -> None:
    image = np.full((50, 50), 7, np.uint8)
    image.flags.writeable = False
    draw_picture(image, Inspection(shapes=[_edge("L1", 20.0, 50)]), "x")


def test_value_is_rounded_to_its_uncertainty() -> None:
    # Two digits of the uncertainty: JCGM 100:2008, 7.2.6.
    assert value_words(20.12345, 0.0123, "um") == "20.123 +/- 0.012 um"
    assert value_words(3.0, None, "1") == "3"


def test_value_known_exactly_stands_alone() -> None:
    assert value_words(0.0, 0.0, "um") == "0 um"
