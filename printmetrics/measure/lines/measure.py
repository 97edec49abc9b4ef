"""Measure printed lines: from what was seen to readings with uncertainty."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from printmetrics.errors import FeatureError
from printmetrics.flags import Flag
from printmetrics.measure.lines.line import LineFigures, line_figures, line_readings
from printmetrics.measure.lines.neighbours import neighbour_readings
from printmetrics.measure.lines.seeing import Seen, see_lines
from printmetrics.measure.readings import Event, Measured, Reading, Shape
from printmetrics.quantities import CATALOGUE

if TYPE_CHECKING:
    from printmetrics.analysis.defects import Defect
    from printmetrics.measure.lines.options import LinesOptions
    from printmetrics.measure.sight import Sight

_PAIR = ("pitch", "space_mean", "space_min", "bridge_count")
_ALL = ("line_count",)
_SINGLE = tuple(name for name in CATALOGUE["lines"] if name not in _PAIR + _ALL)
_FEWEST_PLACES = 8


def expected_items(options: LinesOptions) -> dict[str, tuple[str, ...]]:
    """Return the items which the recipe promises, with the quantities each has.

    Parameters
    ----------
    options : LinesOptions
        What the recipe says.

    Returns
    -------
    dict of str to tuple of str
        Quantities by item; all under ``all`` where neither count nor centres are given.
    """
    count = options.expected
    if count is None:
        return {"all": tuple(CATALOGUE["lines"])}
    items = {f"L{k}": _SINGLE for k in range(1, count + 1)}
    items |= {f"L{k}..L{k + 1}": _PAIR for k in range(1, count)}
    return items | {"all": _ALL}


def measure_lines(sight: Sight, options: LinesOptions) -> Measured:
    """Measure all lines of a region: width, roughness, spaces, defects.

    Parameters
    ----------
    sight : Sight
        One picture in linear light, with its scale.
    options : LinesOptions
        Region, ink, direction, expected lines, edge level.

    Returns
    -------
    Measured
        Readings per line and per pair of neighbours, events, and the edges to draw.

    Raises
    ------
    FeatureError
        When there is nothing to measure; it says how many lines were found.

    Notes
    -----
    Definitions and sources stand in `printmetrics.quantities`. Edges are paired along each line's normal. What a
    reading's uncertainty holds: `u_noise` pixel noise, levels and blur; `u_sampling` the sampling of a rough line,
    from the fitted process at zero frequency; `u_common` the scale and how far the edge's shape is from the model.
    """
    seen = see_lines(sight, options)
    result = Measured()
    figures = line_figures(seen, sight, options)
    names = {name: k for k, name in enumerate(seen.names) if figures[k].count >= _FEWEST_PLACES}
    if not names:
        msg = f"{seen.count} lines were found, but none has both edges in {_FEWEST_PLACES} places; look at the picture"
        raise FeatureError(msg, Flag.LEVELS_UNRESOLVED, count=seen.count)
    for k in names.values():
        result.readings.extend(line_readings(figures[k], seen, sight, options))
        result.shapes.extend(_edge_shapes(seen, k))
    for name, k in names.items():
        follower = names.get(f"L{int(name[1:]) + 1}")
        if follower is not None:
            result.readings.extend(neighbour_readings(figures[k], figures[follower], seen, sight, options))
    for name in [*seen.lost, *(name for name in seen.names if name not in names)]:
        result.readings.extend(_lost(name, sight))
    result.readings.append(Reading(item="all", quantity="line_count", value=float(seen.count), unit="1"))
    for defect in seen.defects:
        event = _event(defect, seen, figures, sight)
        result.events.append(event)
        outline = seen.to_picture(defect.outline[:, 1], defect.outline[:, 0])
        result.shapes.append(Shape(item=event.item, role=f"event:{event.event}", points_px=outline))
    return result


def missing_lines(options: LinesOptions, found: set[str], shapes: list[Shape], sight: Sight) -> list[Shape]:
    """Return where the lines should run that were not found, as far as the recipe tells.

    Parameters
    ----------
    options : LinesOptions
        What the recipe says.
    found : set of str
        Names of the lines that were found.
    shapes : list of Shape
        What is drawn of those; their course is taken where no direction is given.
    sight : Sight
        For the scale and the picture's size.

    Returns
    -------
    list of Shape
        One for each line missing; none where the recipe gives no centres.
    """
    if options.centres is None:
        return []
    edges = [shape.points_px[np.isfinite(shape.points_px).all(axis=1)] for shape in shapes if shape.role == "edge"]
    course = sum((edge[-1] - edge[0] for edge in edges), np.zeros(2))
    if not course.any():
        if options.direction == "auto":
            return []
        named = {"horizontal": 0.0, "vertical": 90.0}
        angle = math.radians(
            named.get(options.direction, 0.0) if isinstance(options.direction, str) else options.direction
        )
        course = sight.scale.to_px((math.cos(angle), math.sin(angle)))
    along = int(abs(course[1]) > abs(course[0]))
    height, width = sight.image.shape
    x, y, w, h = options.region or (0.0, 0.0, *sight.scale.to_length([width - 1, height - 1]))
    corners = sight.scale.to_px([(x, y), (x + w, y + h)])
    places = sight.scale.to_px(np.repeat(np.array(options.centres)[:, None], 2, axis=1))
    lines = []
    for k, place in enumerate(places, 1):
        if f"L{k}" not in found:
            place[along] = corners[:, along].mean()
            steps = (corners[:, along] - place[along]) / course[along]
            lines.append(Shape(item=f"L{k}", role="missing", points_px=place + steps[:, None] * course))
    return lines


def _lost(name: str, sight: Sight) -> list[Reading]:
    """Withhold every reading of a line that was found but could not be measured."""
    return [
        Reading(
            item=name,
            quantity=quantity,
            value=None,
            unit=CATALOGUE["lines"][quantity].unit(sight.scale.unit),
            flags=Flag.LEVELS_UNRESOLVED,
        )
        for quantity in _SINGLE
    ]


def _edge_shapes(seen: Seen, k: int) -> list[Shape]:
    """Edges as measured, and where they were left out."""
    trace = seen.traces[k]
    rows = np.arange(trace.edges.shape[1], dtype=np.float64)
    shapes = []
    for side in (0, 1):
        used = np.isfinite(trace.edges[side]) & ~seen.hit[k, side]
        for role, where, edge in (
            ("edge", used, trace.edges[side]),
            (
                "left_out",
                ~used & trace.way,
                np.where(np.isfinite(trace.edges[side]), trace.edges[side], trace.course[side]),
            ),
        ):
            if where.any():
                points = seen.to_picture(rows, np.where(where, edge, np.nan))
                shapes.append(Shape(item=seen.names[k], role=role, points_px=points))
    return shapes


def _event(defect: Defect, seen: Seen, figures: list[LineFigures], sight: Sight) -> Event:
    """Turn a defect into an event with lengths."""
    single = defect.kind in ("open", "neck", "void")
    inner = [j for j in (defect.line, defect.line + 1) if 0 <= j < len(seen.names)]
    if not single and defect.kind == "bulge":
        inner = [defect.line if defect.left else defect.line + 1]
    items = [seen.names[defect.line]] if single else [seen.names[j] for j in inner]
    x, y = seen.to_picture(np.array([defect.y]), np.array([defect.x]))[0]
    line = figures[defect.line if single else inner[0]]
    along = sight.scale.y if seen.direction.vertical else sight.scale.x
    return Event(
        item="..".join(items),
        event=defect.kind,
        x_px=float(x),
        y_px=float(y),
        size=defect.extent * seen.row_step * along * math.hypot(1.0, line.straight.slope),
        area=defect.area * seen.row_step * sight.scale.x * sight.scale.y,
    )
