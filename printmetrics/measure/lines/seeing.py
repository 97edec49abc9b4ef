"""From a picture to traced lines: region, direction, names, traces and defects, in pixels."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import cv2
import numpy as np

from printmetrics.analysis.defects import Defect, find_defects, ink_mask, smooth_courses, smoothing
from printmetrics.analysis.edges import window_half
from printmetrics.analysis.finding import MAX_TILT_DEG, SMOOTH_PX, CoarseLine, Direction, find_direction, find_lines
from printmetrics.analysis.tracing import Trace, trace_lines
from printmetrics.errors import FeatureError
from printmetrics.flags import Flag

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from printmetrics.measure.lines.options import LinesOptions
    from printmetrics.measure.sight import Sight

_SMALLEST_PX = 16
_WIDE_BLURS = 8.0
_TALL_PX, _UPRIGHT = 2000, 0.1  # from so many rows on, and up to this slope, pairs of rows are added up
_SPOILING = ("open", "bridge", "satellite")  # a neck or a bulge is still the line's width
_LINE_ALIKE = 0.7  # share of its way over which a line that can't be fitted must have been seen to count
_RIVAL = 0.7  # edges along the other axis this strong leave the direction open
_SLACK_ROWS, _SLACK_SD = 512, 4.5  # an edge this many sd off its course is a defect's, not rough
_UNEVEN = 0.1  # a bare level that varies by this part of the contrast takes a threshold that follows it


@dataclass(frozen=True, slots=True, kw_only=True)
class Seen:
    """What was seen of a set of lines.

    Parameters
    ----------
    direction : Direction
        Axis and slope.
    origin : tuple of int
        Column and row of the region in the picture. [px]
    row_step : int
        Rows of the picture in one row of the turned region: 2 where pairs of rows were added up.
    saturated : ndarray of bool, shape (M, N), or None
        Saturated pixels of the region, turned so that the lines run along its columns.
    names : list of str
        Name of each line traced, in order of place.
    lost : list of str
        Names of lines that were found, but whose edges could not be fitted.
    traces : list of Trace
        The lines.
    defects : list of Defect
        In the turned region's pixels.
    hit, spoiled : ndarray of bool, shape (K, 2, M)
        Rows in which the left or right edge of each line is a defect's; of these, those in which it isn't the line's
        edge at all.
    count : int
        Lines found.
    expected : int or None
        Lines promised by the recipe.
    """

    direction: Direction
    origin: tuple[int, int]
    row_step: int
    saturated: NDArray[np.bool_] | None
    names: list[str]
    lost: list[str]
    traces: list[Trace]
    defects: list[Defect]
    hit: NDArray[np.bool_]
    spoiled: NDArray[np.bool_]
    count: int
    expected: int | None

    def to_picture(self, along: NDArray[np.float64], across: NDArray[np.float64]) -> NDArray[np.float64]:
        """Turn places in the turned region into places in the picture.

        Parameters
        ----------
        along, across : ndarray of float, shape (n,)
            Rows and columns of the turned region.

        Returns
        -------
        ndarray of float, shape (n, 2)
            x and y. [px]
        """
        along = self.to_rows(along)
        x, y = (across, along) if self.direction.vertical else (along, across)
        return np.column_stack([x + self.origin[0], y + self.origin[1]])

    def to_rows(self, along: NDArray[np.float64]) -> NDArray[np.float64]:
        """Turn rows of the turned region into rows of the region.

        Parameters
        ----------
        along : ndarray of float, shape (n,)
            Rows of the turned region.

        Returns
        -------
        ndarray of float, shape (n,)
            Rows of the region, or its columns where the lines lie. [px]
        """
        return along * self.row_step + (self.row_step - 1) / 2


def see_lines(sight: Sight, options: LinesOptions) -> Seen:
    """Find and trace the lines of a region.

    Parameters
    ----------
    sight : Sight
        The picture.
    options : LinesOptions
        What the recipe says.

    Returns
    -------
    Seen
        Lines from left to right, or top to bottom.

    Raises
    ------
    FeatureError
        When there is nothing to measure: region too small or flat, direction ambiguous, no line found.
    """
    origin, part = _region(sight, options)
    saturated = None
    if sight.saturated is not None:
        rows = slice(origin[1], origin[1] + part.shape[0])
        saturated = sight.saturated[rows, origin[0] : origin[0] + part.shape[1]]
    direction, image, found, row_step = _find(part, options)
    if saturated is not None:
        saturated = saturated if direction.vertical else saturated.T
        if row_step > 1:
            saturated = saturated[: 2 * len(image) : 2] | saturated[1 : 2 * len(image) : 2]
    tried = trace_lines(image, found)
    # What shows edges over half its way and can't be fitted is a letter or a drop rather than a line.
    real = [trace is not None or line.covered > _LINE_ALIKE for line, trace in zip(found, tried, strict=True)]
    found = [line for line, keep in zip(found, real, strict=True) if keep]
    tried = [trace for trace, keep in zip(tried, real, strict=True) if keep]
    middle = len(image) // 2
    places = [float(np.interp(middle, line.rows, (line.left + line.right) / 2)) for line in found]
    names = _names(places, direction, origin, sight, options)
    lost = [name for name, trace in zip(names, tried, strict=True) if trace is None]
    names = [name for name, trace in zip(names, tried, strict=True) if trace is not None]
    traces = [trace for trace in tried if trace is not None]
    if not traces:
        msg = f"no line can be measured: {len(found)} found, but their edges could not be fitted; look at the picture"
        raise FeatureError(msg, Flag.LEVELS_UNRESOLVED, count=len(found))
    edges, coarse = np.concatenate([t.edges for t in traces]), np.concatenate([t.course for t in traces])
    course = smooth_courses(edges, coarse).reshape(len(traces), 2, -1)
    ink = _ink(image, traces, bright=options.ink == "bright")
    defects, hit, spoiled = _defects(ink, course, traces, row_step)
    return Seen(
        direction=direction,
        origin=origin,
        row_step=row_step,
        saturated=saturated,
        names=names,
        traces=traces,
        defects=defects,
        hit=hit,
        spoiled=spoiled,
        lost=lost,
        count=len(found),
        expected=options.expected,
    )


def _region(sight: Sight, options: LinesOptions) -> tuple[tuple[int, int], NDArray[Any]]:
    """Cut the region out of the picture: pixels whose centres lie in it."""
    height, width = sight.image.shape
    x0, y0, x1, y1 = 0, 0, width, height
    if options.region is not None:
        x, y, w, h = options.region
        (left, top), (right, bottom) = sight.scale.to_px([[x, y], [x + w, y + h]])
        x0, y0, x1, y1 = (math.ceil(v - 1e-9) for v in (left, top, right, bottom))
        x0, y0, x1, y1 = max(x0, 0), max(y0, 0), min(x1, width), min(y1, height)
    part = sight.image[y0:y1, x0:x1]
    if min(part.shape, default=0) < _SMALLEST_PX:
        msg = (
            f"the region is {x1 - x0} x {y1 - y0} px; lines need at least {_SMALLEST_PX} x {_SMALLEST_PX} px: "
            "check the region against the picture's size and scale"
        )
        raise FeatureError(msg, Flag.OUTSIDE_VALIDITY)
    return (x0, y0), part


def _find(part: NDArray[Any], options: LinesOptions) -> tuple[Direction, NDArray[Any], list[CoarseLine], int]:
    """Find direction and lines; where nothing is found, look again more softly."""
    low, high, _, _ = cv2.minMaxLoc(part)
    if low == high:
        raise _nothing(
            part, options, f"every pixel of the region has the value {low:g}; check lamp, exposure and lens cap"
        )
    given = _given_direction(options)
    for smooth in SMOOTH_PX:
        vertical = given.vertical if given is not None else None
        direction = find_direction(part, vertical=vertical, smooth=smooth)
        if given is not None and given.slope is not None:
            direction = Direction(given.vertical, given.slope, 0.0)
        elif given is None and direction.rival > _RIVAL:
            continue
        image = part if direction.vertical else np.ascontiguousarray(part.T)
        step = 2 if len(image) >= _TALL_PX and abs(direction.slope) <= _UPRIGHT else 1
        if step > 1:
            image = _pairs_of_rows(image)
        lines = find_lines(image, direction.slope * step, bright=options.ink == "bright", smooth=smooth)
        if lines:
            return direction, image, lines, step
    if given is None and direction.rival > _RIVAL:
        msg = (
            "edges run along both axes alike, so the lines' direction is open; "
            'set direction = "vertical" or "horizontal" for this feature, or a region that holds one direction only'
        )
        raise _nothing(part, options, msg)
    raise _nothing(part, options, "no line was found")


def _pairs_of_rows(image: NDArray[Any]) -> NDArray[Any]:
    """Add up pairs of rows: a tall picture has more rows along an edge than its blur lets differ."""
    even = len(image) // 2 * 2
    sums = {"uint8": np.uint16}.get(image.dtype.name, np.float32)
    return np.asarray(np.add(image[0:even:2], image[1:even:2], dtype=sums))


@dataclass(frozen=True, slots=True)
class _Given:
    vertical: bool
    slope: float | None


def _given_direction(options: LinesOptions) -> _Given | None:
    if options.direction == "auto":
        return None
    if isinstance(options.direction, str):
        return _Given(options.direction == "vertical", None)
    angle = (options.direction + 45.0) % 180.0 - 45.0
    if abs(angle) <= MAX_TILT_DEG:
        return _Given(vertical=False, slope=math.tan(math.radians(angle)))
    return _Given(vertical=True, slope=-math.tan(math.radians(angle - 90.0)))


def _nothing(part: NDArray[Any], options: LinesOptions, why: str) -> FeatureError:
    """Say what was looked for, and that it isn't there."""
    if why != "no line was found":
        return FeatureError(f"no line can be measured: {why}", Flag.LEVELS_UNRESOLVED, count=0)
    looks = "brighter" if options.ink == "bright" else "darker"
    msg = (
        f"no line was found in the region of {part.shape[1]} x {part.shape[0]} px: nothing {looks} than what lies "
        f"beside it runs through it {_way(options)}; check that the web is printed, that scale and region put the "
        "region where the lines are, and that ink and direction are set rightly"
    )
    return FeatureError(msg, Flag.COUNT_DIFFERS, count=0)


def _way(options: LinesOptions) -> str:
    """Say which way lines were looked for."""
    if options.direction == "auto":
        return f"within {MAX_TILT_DEG:g} degrees of an axis"
    way = options.direction if isinstance(options.direction, str) else f"at {options.direction:g} degrees"
    return f"({way}, as direction says)"


def _names(
    places: list[float], direction: Direction, origin: tuple[int, int], sight: Sight, options: LinesOptions
) -> list[str]:
    """Name the lines in order, or after the nearest designed centre."""
    if options.centres is None:
        return [f"L{k + 1}" for k in range(len(places))]
    scale, start = (sight.scale.x, origin[0]) if direction.vertical else (sight.scale.y, origin[1])
    place = (np.array(places) + start) * scale
    centres = np.array(options.centres)
    reach = float(np.diff(centres).min()) / 2 if len(centres) > 1 else np.inf
    off = np.abs(place[:, None] - centres)
    names = [""] * len(places)
    for k, j in sorted(np.ndindex(off.shape), key=lambda kj: off[kj]):
        if off[k, j] < reach and not names[k] and f"L{j + 1}" not in names:
            names[k] = f"L{j + 1}"
    extra = len(centres)
    for k, name in enumerate(names):
        if not name:
            extra += 1
            names[k] = f"L{extra}"
    return names


def _ink(image: NDArray[Any], traces: list[Trace], *, bright: bool) -> NDArray[Any]:
    """Return where ink is seen."""
    contrast = float(np.median([t.contrast for t in traces]))
    smooth = smoothing(contrast, float(np.median([t.noise for t in traces])))
    levels = [(t.ink + t.bare) / 2 for t in traces]
    uneven = max(t.bare_range for t in traces) > _UNEVEN * contrast or np.ptp(levels) > _UNEVEN * contrast
    threshold: float | NDArray[np.float32] = float(np.median(levels))
    if uneven:
        threshold = _threshold_map(image.shape, traces)
    return ink_mask(image, threshold, smooth, bright=bright)


def _slack(course: NDArray[np.float64], traces: list[Trace]) -> NDArray[np.float64]:
    """How far rough edges may stray from their course, shape (K, 2)."""
    slack = np.empty((len(traces), 2))
    for k, trace in enumerate(traces):
        for side in (0, 1):
            off = np.abs(trace.edges[side] - course[k, side])[:: max(1, trace.edges.shape[1] // _SLACK_ROWS)]
            sd = 1.4826 * float(np.median(off[np.isfinite(off)]))
            slack[k, side] = max(2.0, 1.5 * float(trace.blur[side]), _SLACK_SD * sd)
        slack[k] = np.minimum(slack[k], float(np.median(course[k, 1] - course[k, 0])) / 3)
    for k in range(len(traces) - 1):
        space = max(float(np.median(course[k + 1, 0] - course[k, 1])), 0.0)
        slack[k, 1], slack[k + 1, 0] = min(slack[k, 1], space / 3), min(slack[k + 1, 0], space / 3)
    return slack


def _threshold_map(shape: tuple[int, ...], traces: list[Trace]) -> NDArray[np.float32]:
    """Middle level over the picture, from the levels of each line along its way, as a small picture."""
    rows = np.linspace(0, shape[0] - 1, 33)
    columns = np.linspace(0, shape[1] - 1, 65)
    place, level = [], []
    for trace in traces:
        middle = trace.course.mean(axis=0)
        place.append(np.interp(rows, np.arange(shape[0]), middle))
        blocks = len(trace.middle_level)
        level.append(np.interp(rows, (np.arange(blocks) + 0.5) * shape[0] / blocks, trace.middle_level))
    at, value = np.array(place), np.array(level)
    return np.array([np.interp(columns, at[:, r], value[:, r]) for r in range(len(rows))], dtype=np.float32)


def _defects(
    ink: NDArray[Any], course: NDArray[np.float64], traces: list[Trace], row_step: int
) -> tuple[list[Defect], NDArray[np.bool_], NDArray[np.bool_]]:
    """Find defects, the rows of each line that they hit, and those that they spoil."""
    way = np.array([t.way for t in traces])
    left, right = course[:, 0], course[:, 1]
    slack = _slack(course, traces)
    width = float(np.median(course[:, 1] - course[:, 0]))
    space = [float(np.median(course[k + 1, 0] - course[k, 1])) for k in range(len(traces) - 1)]
    blur = float(np.median([t.blur.mean() for t in traces]))
    margin = max(min([*space, 2 * width]), 0.0)
    found = find_defects(ink, left, right, way, slack, margin, max(6.0, 2.5 * blur * blur) / row_step)
    hit = np.zeros((len(traces), 2, ink.shape[0]), bool)
    spoiled = np.zeros_like(hit)
    for defect in found:
        reach = math.ceil(window_half(blur) / row_step)
        rows = slice(max(defect.rows[0] - reach, 0), defect.rows[1] + reach + 1)
        for k, side in _concerned(defect, left, right, blur):
            hit[k, side, rows] = True
            spoiled[k, side, rows] |= defect.kind in _SPOILING
    return found, hit, spoiled


def _concerned(
    defect: Defect, left: NDArray[np.float64], right: NDArray[np.float64], blur: float
) -> list[tuple[int, int]]:
    """Edges (line, side) that a defect spoils: those it touches, and those within its blur."""
    width = float(np.median(right - left))
    alike = width < _WIDE_BLURS * blur  # a narrow line's edges are fitted together
    if defect.kind in ("open", "neck", "void"):
        touched = [side for side, touches in ((0, defect.left), (1, defect.right)) if touches]
        return [(defect.line, side) for side in ((0, 1) if alike or not touched else touched)]
    rows = np.clip(np.rint(defect.outline[:, 1]).astype(int), 0, left.shape[1] - 1)
    reach = 4 * blur + 2
    near: list[tuple[int, int]] = []
    for k in (defect.line, defect.line + 1):
        if not 0 <= k < len(left):
            continue
        gap = defect.outline[:, 0] - right[k, rows] if k == defect.line else left[k, rows] - defect.outline[:, 0]
        if (defect.left if k == defect.line else defect.right) or float(gap.min()) < reach:
            side = int(k == defect.line)
            near += [(k, 0), (k, 1)] if alike else [(k, side)]
    return near
