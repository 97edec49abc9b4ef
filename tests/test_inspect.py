"""One picture, one recipe: nothing with a limit passes in silence. Pictures are invented."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest
from scipy.stats import t as student

from printmetrics.errors import FeatureError, PictureError
from printmetrics.flags import Flag
from printmetrics.inspect import Inspection, failed_inspection, inspect_picture
from printmetrics.io.pictures import Picture
from printmetrics.measure.kinds import KINDS
from printmetrics.measure.readings import Event, Measured, Reading, Shape
from printmetrics.recipe import load_recipe

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from printmetrics.measure.options import FeatureOptions
    from printmetrics.measure.sight import Sight
    from printmetrics.recipe import Recipe

SCALE = "um_per_px = 0.5\nu_um_per_px = 0.0"
LIMITS = (
    "width_mean = { lower = 18.0, upper = 22.0 }\nlwr_3sigma = { upper = 1.5 }\n"
    "space_mean = { lower = 5.0 }\nline_count = { lower = 2 }"
)


@pytest.fixture
def recipe(tmp_path: Path) -> Callable[..., Recipe]:
    def write(*, scale: str = SCALE, feature: str = "", limits: str = LIMITS, more: str = "", web: str = "") -> Recipe:
        (tmp_path / "recipe.toml").write_text(
            f'schema = 1\nname = "r"\n[scale]\n{scale}\n{web}\n'
            f'[[feature]]\nname = "bus"\nkind = "lines"\nink = "bright"\n{feature}\n[feature.limits]\n{limits}\n{more}'
        )
        return load_recipe(tmp_path / "recipe.toml")

    return write


def _picture(height: int = 80, width: int = 100, **columns: Any) -> Picture:  # noqa: ANN401
    pixels = np.full((height, width), 50, np.uint8)
    return Picture(pixels=pixels, bits=8, full_scale=255.0, sha256="ab", **columns)


def _pretend(
    monkeypatch: pytest.MonkeyPatch,
    measure: Callable[[Sight, FeatureOptions], Measured],
    expected: dict[str, tuple[str, ...]],
) -> None:
    """Put a kind that gives what the test says in place of the real one."""
    monkeypatch.setitem(KINDS, "lines", replace(KINDS["lines"], measure=measure, expected_items=lambda _: expected))


TWO_LINES = {
    "L1": ("width_mean", "lwr_3sigma"),
    "L2": ("width_mean", "lwr_3sigma"),
    "L1..L2": ("space_mean",),
    "all": ("line_count",),
}
UNKNOWN_LINES = {"all": ("width_mean", "lwr_3sigma", "space_mean", "line_count")}


def _reading(item: str, quantity: str, value: float | None = 20.0, **columns: Any) -> Reading:  # noqa: ANN401
    return Reading(item=item, quantity=quantity, value=value, unit="um", **({"u_noise": 0.1} | columns))


def _gives(*readings: Reading, events: tuple[Event, ...] = ()) -> Callable[[Sight, FeatureOptions], Measured]:
    return lambda _sight, _options: Measured(readings=list(readings), events=list(events))


def _raises(error: FeatureError) -> Callable[[Sight, FeatureOptions], Measured]:
    def measure(_sight: Sight, _options: FeatureOptions) -> Measured:
        raise error

    return measure


def _cells(inspection: Inspection, *columns: str) -> dict[tuple[str, str], Any]:
    return {
        (row["item"], row["quantity"]): row[columns[0]] if len(columns) == 1 else tuple(row[c] for c in columns)
        for row in inspection.rows
    }


def test_reading_becomes_a_row_with_limits_and_verdict(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    _pretend(monkeypatch, _gives(_reading("L1", "width_mean", 21.0)), {})
    (row,) = inspect_picture(_picture(), recipe(limits="width_mean = { lower = 18.0, upper = 22.0 }")).rows
    assert row["feature"] == "bus"
    assert row["kind"] == "lines"
    assert (row["value"], row["unit"], row["u"], row["lower"], row["upper"]) == (21.0, "um", 0.1, 18.0, 22.0)
    assert row["verdict"] == "conforming"


def test_expanded_uncertainty_uses_student_and_the_degrees_of_freedom(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    parts = {"u_noise": 0.3, "u_common": 0.4, "dof": 7.5}
    _pretend(monkeypatch, _gives(_reading("L1", "width_mean", **parts)), {})
    (row,) = inspect_picture(_picture(), recipe(limits="width_mean = { upper = 22.0 }")).rows
    assert row["u"] == pytest.approx(0.5)
    assert row["expanded_u"] == pytest.approx(0.5 * student.ppf(0.975, 7.5))


def test_every_limited_quantity_of_every_expected_item_has_a_row_when_the_feature_fails(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    _pretend(monkeypatch, _raises(FeatureError("the ink cannot be told from the web", Flag.LOW_CONTRAST)), TWO_LINES)
    inspection = inspect_picture(_picture(), recipe())
    assert _cells(inspection, "value", "flags", "verdict") == {
        (item, quantity): (None, Flag.LOW_CONTRAST, "undecided")
        for item, quantities in TWO_LINES.items()
        for quantity in quantities
    }
    assert inspection.status == "failed"
    assert inspection.reason == "bus: the ink cannot be told from the web"


def test_unprinted_web_counts_no_lines_and_does_not_conform(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    _pretend(monkeypatch, _raises(FeatureError("no line in the region", Flag.COUNT_DIFFERS, count=0)), TWO_LINES)
    cells = _cells(inspect_picture(_picture(), recipe()), "value", "verdict")
    assert cells["all", "line_count"] == (0.0, "nonconforming")
    assert set(cells.values()) == {(0.0, "nonconforming"), (None, "undecided")}


def test_feature_that_fails_with_unknown_items_leaves_rows_for_all(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    _pretend(monkeypatch, _raises(FeatureError("no line", Flag.COUNT_DIFFERS)), UNKNOWN_LINES)
    cells = _cells(inspect_picture(_picture(), recipe()), "verdict")
    assert cells == {("all", quantity): "undecided" for quantity in UNKNOWN_LINES["all"]}


def test_feature_without_limits_that_fails_still_leaves_its_count(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    _pretend(monkeypatch, _raises(FeatureError("no line", Flag.COUNT_DIFFERS)), UNKNOWN_LINES)
    assert _cells(inspect_picture(_picture(), recipe(limits="")), "value", "verdict") == {
        ("all", "line_count"): (None, "")
    }


def test_missing_line_leaves_undecided_rows(monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]) -> None:
    found = [_reading("L1", "width_mean"), _reading("L1", "lwr_3sigma", 1.0), _reading("all", "line_count", 1.0)]
    _pretend(monkeypatch, _gives(*found), TWO_LINES)
    cells = _cells(inspect_picture(_picture(), recipe()), "value", "flags", "verdict")
    gone = (None, Flag.COUNT_DIFFERS, "undecided")
    assert cells["L2", "width_mean"] == cells["L2", "lwr_3sigma"] == cells["L1..L2", "space_mean"] == gone
    assert cells["all", "line_count"] == (1.0, Flag.NONE, "nonconforming")
    assert cells["L1", "width_mean"][2] == "conforming"


def test_quantity_that_a_found_line_lacks_is_withheld(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    found = [_reading("L1", "width_mean"), _reading("L2", "width_mean"), _reading("L2", "lwr_3sigma", 1.0)]
    _pretend(monkeypatch, _gives(*found), TWO_LINES)
    cells = _cells(inspect_picture(_picture(), recipe()), "value", "flags", "verdict")
    assert cells["L1", "lwr_3sigma"] == (None, Flag.OUTSIDE_VALIDITY, "undecided")


def test_quantity_that_one_line_of_unknown_lines_lacks_is_withheld(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    found = [_reading("L1", "width_mean"), _reading("L2", "width_mean"), _reading("L2", "lwr_3sigma", 1.0)]
    _pretend(monkeypatch, _gives(*found, _reading("all", "line_count", 2.0)), UNKNOWN_LINES)
    cells = _cells(inspect_picture(_picture(), recipe()), "value", "verdict")
    assert cells["L1", "lwr_3sigma"] == (None, "undecided")
    assert cells["all", "space_mean"] == (None, "undecided")
    assert ("all", "width_mean") not in cells
    assert len(cells) == 6


def test_withheld_reading_with_a_limit_is_undecided_and_not_doubled(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    withheld = _reading("L1", "width_mean", None, u_noise=None, flags=Flag.NOT_RESOLVED)
    _pretend(monkeypatch, _gives(withheld), {"L1": ("width_mean",)})
    (row,) = inspect_picture(_picture(), recipe(limits="width_mean = { upper = 22.0 }")).rows
    assert (row["value"], row["u"], row["expanded_u"], row["verdict"]) == (None, None, None, "undecided")


CENTRES = "centres = [10.0, 25.0, 40.0]\nregion = [5.0, 10.0, 40.0, 20.0]"


def _edges_of(*lines: tuple[str, float], slope: float = 0.0) -> Callable[[Sight, FeatureOptions], Measured]:
    """Pretend that lines were found whose edges run down the picture through x at row 40. [px]."""
    rows = np.arange(20.0, 61.0)
    shapes = [
        Shape(item=item, role="edge", points_px=np.stack([x + slope * (rows - 40.0), rows], axis=1))
        for item, x in lines
    ]
    readings = [_reading(item, "width_mean") for item, _ in lines]
    return lambda _sight, _options: Measured(readings=readings, shapes=shapes)


# Truth by hand: at 0.5 um per px the middle of the region is row 40, and its ends are rows 20 and 60.
def test_missing_line_runs_through_its_centre_beside_the_others(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    _pretend(monkeypatch, _edges_of(("L1", 20.0), ("L3", 80.0), slope=0.1), {})
    inspection = inspect_picture(_picture(), recipe(feature=CENTRES))
    (line,) = (shape for _, shape in inspection.shapes if shape.role == "missing")
    assert line.item == "L2"
    np.testing.assert_allclose(line.points_px, [(48.0, 20.0), (52.0, 60.0)])


@pytest.mark.parametrize(
    ("direction", "ends"),
    [
        ('"vertical"', [(20.0, 20.0), (20.0, 60.0)]),
        ('"horizontal"', [(10.0, 20.0), (90.0, 20.0)]),
        ("90", [(20.0, 20.0), (20.0, 60.0)]),
        ("-10", [(10.0, 20.0 + 40.0 * math.tan(math.radians(10))), (90.0, 20.0 - 40.0 * math.tan(math.radians(10)))]),
    ],
)
def test_where_no_line_is_found_the_recipe_tells_how_they_run(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe], direction: str, ends: list[tuple[float, float]]
) -> None:
    _pretend(monkeypatch, _raises(FeatureError("no line", Flag.COUNT_DIFFERS, count=0)), {})
    inspection = inspect_picture(_picture(), recipe(feature=f"{CENTRES}\ndirection = {direction}"))
    missing = {shape.item: shape.points_px for _, shape in inspection.shapes if shape.role == "missing"}
    assert list(missing) == ["L1", "L2", "L3"]
    np.testing.assert_allclose(missing["L1"], ends, atol=1e-9)


@pytest.mark.parametrize(
    ("measure", "feature"),
    [
        (_raises(FeatureError("no line", Flag.COUNT_DIFFERS, count=0)), CENTRES),  # which way they run is unknown
        (_raises(FeatureError("too dark", Flag.LEVELS_UNRESOLVED)), f'{CENTRES}\ndirection = "vertical"'),
        (_edges_of(("L1", 20.0)), 'count = 3\ndirection = "vertical"'),
        (_edges_of(("L1", 20.0), ("L2", 50.0), ("L3", 80.0)), CENTRES),
    ],
    ids=["direction unknown", "not known to be missing", "place unknown", "all found"],
)
def test_no_line_is_called_missing_where_that_or_its_place_is_unknown(
    monkeypatch: pytest.MonkeyPatch,
    recipe: Callable[..., Recipe],
    measure: Callable[[Sight, FeatureOptions], Measured],
    feature: str,
) -> None:
    _pretend(monkeypatch, measure, {})
    inspection = inspect_picture(_picture(), recipe(feature=feature))
    assert "missing" not in {shape.role for _, shape in inspection.shapes}


def test_one_failed_feature_of_two_leaves_the_picture_measured(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    def measure(_sight: Sight, options: FeatureOptions) -> Measured:
        if options.name == "bus":
            msg = "no line"
            raise FeatureError(msg)
        return Measured(readings=[_reading("L1", "width_mean")])

    _pretend(monkeypatch, measure, {"L1": ("width_mean",)})
    more = '[[feature]]\nname = "grid"\nkind = "lines"\nink = "bright"'
    inspection = inspect_picture(_picture(), recipe(more=more, limits="width_mean = { upper = 22.0 }"))
    assert (inspection.status, inspection.reason) == ("measured", "bus: no line")
    assert [(row["feature"], row["value"]) for row in inspection.rows] == [("bus", None), ("bus", None), ("grid", 20.0)]


def test_picture_that_cannot_be_read_leaves_undecided_rows(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    _pretend(monkeypatch, _gives(), TWO_LINES)
    inspection = failed_inspection(recipe(), "it is empty")
    assert (inspection.status, inspection.reason) == ("failed", "it is empty")
    assert set(_cells(inspection, "verdict").values()) == {"undecided"}
    assert len(inspection.rows) == 6


def test_bug_is_not_caught(monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]) -> None:
    def measure(_sight: Sight, _options: FeatureOptions) -> Measured:
        msg = "index 7"
        raise IndexError(msg)

    _pretend(monkeypatch, measure, TWO_LINES)
    with pytest.raises(IndexError, match="index 7"):
        inspect_picture(_picture(), recipe())


@pytest.mark.parametrize(
    ("region", "where"),
    [("[60, 0, 10, 10]", "outside"), ("[0, -20, 10, 10]", "outside"), ("[40, 0, 20, 10]", "partly outside")],
)
def test_region_that_leaves_the_picture_is_refused_with_value_and_remedy(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe], region: str, where: str
) -> None:
    _pretend(monkeypatch, _gives(), {})
    inspection = inspect_picture(_picture(), recipe(feature=f"region = {region}"))
    assert f"lies {where} the picture, which covers 50 x 40 um (100 x 80 px); correct" in inspection.reason


def test_region_as_large_as_the_picture_is_inside(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    _pretend(monkeypatch, _gives(), {})
    assert not inspect_picture(_picture(), recipe(feature="region = [0, 0, 50, 40]")).failures


def test_region_is_drawn_where_it_lies(monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]) -> None:
    _pretend(monkeypatch, _gives(), {})
    ((feature, shape),) = inspect_picture(_picture(), recipe(feature="region = [10, 5, 20, 30]")).shapes
    assert (feature, shape.role) == ("bus", "region")
    assert shape.points_px.min(axis=0).tolist() == [20.0, 10.0]
    assert shape.points_px.max(axis=0).tolist() == [60.0, 70.0]


@pytest.mark.parametrize(
    ("machine", "cross", "md", "cd"),
    [("+y", "+x", 20.0, 5.0), ("-y", "-x", -20.0, -5.0), ("+x", "-y", 5.0, -20.0), ("-x", "+y", -5.0, 20.0)],
)
def test_event_has_its_place_along_and_across_the_web(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe], machine: str, cross: str, md: float, cd: float
) -> None:
    event = Event(item="L1", event="neck", x_px=10.0, y_px=40.0, size=3.0, area=2.0)
    _pretend(monkeypatch, _gives(events=(event,)), {})
    web = f'[web]\nmachine_direction = "{machine}"\ncross_direction = "{cross}"'
    (row,) = inspect_picture(_picture(), recipe(web=web, limits="")).events
    assert (row["x"], row["y"], row["md"], row["cd"], row["unit"]) == (5.0, 20.0, md, cd, "um")


def test_event_without_a_web_has_no_place_along_it(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    event = Event(item="L1", event="neck", x_px=10.0, y_px=40.0, size=3.0, area=2.0)
    _pretend(monkeypatch, _gives(events=(event,)), {})
    (row,) = inspect_picture(_picture(), recipe(limits="")).events
    assert (row["md"], row["cd"]) == (None, None)


def test_unknown_scale_leaves_lengths_in_pixels_without_verdict(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    readings = (
        Reading(item="L1", quantity="width_mean", value=99.0, unit="{px}", u_noise=0.1),
        _reading("all", "line_count", 1.0),
    )
    _pretend(monkeypatch, _gives(*readings), {})
    cells = _cells(inspect_picture(_picture(), recipe(scale="pixels = true")), "unit", "verdict", "upper")
    assert cells["L1", "width_mean"] == ("{px}", "", None)
    assert cells["all", "line_count"][1] == "nonconforming"


def test_scale_of_the_picture_is_used_where_the_recipe_asks_for_it(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    seen: list[float] = []

    def measure(sight: Sight, _options: FeatureOptions) -> Measured:
        seen.append(sight.scale.x)
        return Measured()

    _pretend(monkeypatch, measure, {})
    asking = recipe(scale="from_image = true\nu_um_per_px = 0.001")
    inspect_picture(_picture(hint_um_per_px=(0.25, 0.25)), asking)
    assert seen == [0.25]
    with pytest.raises(PictureError, match="scale from the picture, but only 72 dpi; give"):
        inspect_picture(_picture(hint_origin="only 72 dpi"), asking)


def test_expired_scale_flags_every_reading_and_leaves_it_undecided(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe], tmp_path: Path
) -> None:
    (tmp_path / "s.scale.json").write_text(
        '{"format": "printmetrics-scale", "version": 1, "um_per_px": [0.5, 0.5], "u_um_per_px": [0.0, 0.0], '
        '"picture_size_px": null, "made_at": "2020-01-01T00:00:00Z", "valid_until": "2021-01-01T00:00:00Z", '
        '"target": null, "certificate": null, "camera": null, "objective": null, "magnification": null, '
        '"temperature_c": null, "software": null}'
    )
    _pretend(monkeypatch, _gives(_reading("L1", "width_mean")), {})
    expiring = recipe(scale='file = "s.scale.json"', limits="width_mean = { upper = 22.0 }")
    (late,) = inspect_picture(_picture(), expiring).rows
    assert (late["flags"], late["verdict"]) == (Flag.SCALE_EXPIRED, "undecided")
    (early,) = inspect_picture(_picture(), expiring, "2020-06-01T00:00:00+00:00").rows
    assert (early["flags"], early["verdict"]) == (Flag.NONE, "conforming")


def test_value_exactly_known_has_no_infinite_uncertainty(
    monkeypatch: pytest.MonkeyPatch, recipe: Callable[..., Recipe]
) -> None:
    _pretend(monkeypatch, _gives(_reading("all", "line_count", 2.0, u_noise=0.0)), {})
    (row,) = inspect_picture(_picture(), recipe(limits="line_count = { lower = 2 }")).rows
    assert (row["expanded_u"], row["dof"], row["verdict"]) == (0.0, math.inf, "conforming")
