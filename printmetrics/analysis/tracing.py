"""Trace every line of a picture: both edges in each row, to a fraction of a pixel, and what they say of the picture."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy.special import ndtr

from printmetrics.analysis.edges import (
    EdgeFit,
    Windows,
    first_crossing,
    fit_edges,
    gather,
    position_bound,
    window_half,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from printmetrics.analysis.finding import CoarseLine

_APART = 8.0  # blurs between two edges from which on each is fitted alone
_SEARCH_PX, _SEARCH_MOST = 6, 100  # a rough edge is looked for this far, plus 3 blurs, beside its coarse course,
_AT_END = 0.003  # and further where more than this part of it is found at the ends
_STRAYS = 5.0  # times the rms stray, and 2 blurs, is how far an edge known to be rough is looked for
_SMOOTH_EDGE = 0.12  # an edge that strays less from its coarse course, in blurs, is not looked for row by row
_KNOWN_BLUR = 5.0  # narrower than this many blurs, a line takes its blur from wider ones where there are any
_PASSES = 8  # fits of one line, at most
_SETTLED = 0.15  # a fit stands when it changes the blur by less than this part
_SHAPE_ROWS_TOTAL = 3072  # of all edges together, on which their shapes are judged
_SHAPE_ROWS = 256  # the edge's shape and other typical values are judged on so many rows
_UNCORRELATED = 0.06  # correlation of neighbouring residuals that the fit itself and chance may leave
_SURE, _STEADY = 4.0, 4.0  # standard errors by which the edge's shape must stand out of the noise
_BESIDE, _CORE, _CLEAR_OF = (
    (1.3, 2.6),
    0.6,
    4.0,
)  # blurs from the edge's middle: where sharpening overshoots, and its core
_FEWEST_ROWS = 16


@dataclass(frozen=True, slots=True)
class EdgeShape:
    """How the mean edge seen differs from the model.

    Parameters
    ----------
    overshoot : float
        How far the levels beside the edge go beyond the plateaus, over the step; sharpening makes it positive.
    shift : float
        How far the middle of the edge seen lies from that of the edge fitted. [px]
    skew, u_skew : float
        Mean residual of the core minus that of the flanks, over the step, and its standard uncertainty; a camera's
        gamma left in makes one.
    steady : float
        How far a pattern fixed to the picture's columns may shift the edge. [px]
    """

    overshoot: float = 0.0
    shift: float = 0.0
    skew: float = 0.0
    u_skew: float = 0.0
    steady: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Trace:
    """One line, traced.

    Parameters
    ----------
    way : ndarray of bool, shape (M,)
        Rows of the picture in which the line should be.
    course : ndarray of float, shape (2, M)
        Coarse course of the left and right edge. [px]
    edges : ndarray of float, shape (2, M)
        Column of the left and right edge in each row; NaN where not measured. [px]
    u_row : ndarray of float, shape (2,)
        Standard uncertainty of one edge point from pixel noise. [px]
    covariance : ndarray of float, shape (2, 2)
        Covariance of the two mean edge positions from pixel noise, levels and blur included. [px^2]
    blur, u_blur : ndarray of float, shape (2,)
        Gaussian sigma along the row of either edge, and its standard uncertainty from pixel noise. [px]
    ink, bare : float
        Median levels. [counts]
    bare_range : float
        Range of the bare level along and across the line. [counts]
    middle_level : ndarray of float, shape (B,)
        Middle between ink and bare in blocks along the line. [counts]
    noise : float
        sd of a pixel. [counts]
    shapes : list of EdgeShape
        How either mean edge differs from the model.
    """

    way: NDArray[np.bool_]
    course: NDArray[np.float64]
    edges: NDArray[np.float64]
    u_row: NDArray[np.float64]
    covariance: NDArray[np.float64]
    blur: NDArray[np.float64]
    u_blur: NDArray[np.float64]
    ink: float
    bare: float
    bare_range: float
    middle_level: NDArray[np.float64]
    noise: float
    shapes: list[EdgeShape]

    @property
    def width(self) -> float:
        """Median width along the row. [px]"""
        return float(np.nanmedian(self.edges[1] - self.edges[0]))

    @property
    def contrast(self) -> float:
        """Step from bare to ink. [counts]"""
        return abs(self.ink - self.bare)


@dataclass(slots=True)
class _Cut:
    """One fit: the edges (line, side) it moves, those of them it is made for, its rows and first columns."""

    edges: tuple[tuple[int, int], ...]
    own: tuple[tuple[int, int], ...]
    rows: NDArray[np.intp]
    first: NDArray[np.intp]
    n: int
    blur: float
    known: bool
    fit: EdgeFit | None = None
    shape: tuple[list[EdgeShape], float] = field(default_factory=lambda: ([], 1.0))


def trace_lines(image: NDArray[Any], lines: Sequence[CoarseLine]) -> list[Trace | None]:
    """Trace lines that were found.

    Parameters
    ----------
    image : ndarray, shape (M, N)
        Picture with lines along the columns. [counts]
    lines : sequence of CoarseLine
        From left to right.

    Returns
    -------
    list of Trace or None
        None for a line whose edges could not be fitted in enough rows.

    Notes
    -----
    Edges further than 8 blurs from any other are fitted alone; the two edges of a narrower line together, with the
    near edges of close neighbours; the light of edges further off is taken off. A line narrower than 5 blurs takes
    its blur from wider lines of the picture where there are any, since its own width hides it.
    """
    return _Tracer(image, lines).traces()


class _Tracer:
    def __init__(self, image: NDArray[Any], lines: Sequence[CoarseLine]) -> None:
        self.image = image if image.flags.c_contiguous else np.ascontiguousarray(image)
        self.height, self.width = image.shape
        self.course = np.array([[_course(x.rows, edge, self.height) for edge in (x.left, x.right)] for x in lines])
        self.usable = np.array([_near_seen(line, self.height) for line in lines])
        self.line_width = np.array([max(float(np.median(line.right - line.left)), 1.0) for line in lines])
        self.space = self._spaces()
        self.levels = self._first_levels()
        self.edges = self.course.copy()
        self.blurs = np.full((len(lines), 2), np.nan)
        self.blur = self._first_blur()

    def _spaces(self) -> NDArray[np.float64]:
        """Space left and right of each line, to the next line or the border."""
        some = self.course[:, :, :: _sparse(self.height)]
        before = np.concatenate([np.full((1, some.shape[2]), -0.5), some[:-1, 1]])
        after = np.concatenate([some[1:, 0], np.full((1, some.shape[2]), self.width - 0.5)])
        gaps = np.stack([some[:, 0] - before, after - some[:, 1]], axis=1)
        return np.asarray(np.maximum(np.median(gaps, axis=2), 1.0))

    def _first_levels(self) -> NDArray[np.float64]:
        """Bare, ink, bare levels of each line as first guessed."""
        levels = np.empty((len(self.course), 3))
        for k, (left, right) in enumerate(self.course):
            rows = np.nonzero(self.usable[k])[0]
            rows = rows[:: _sparse(len(rows))]
            away = np.minimum(self.space[k] / 2, 6.0)
            places = np.stack([left[rows] - away[0], (left[rows] + right[rows]) / 2, right[rows] + away[1]])
            columns = np.clip(np.rint(places), 0, self.width - 1).astype(np.intp)
            levels[k] = np.median(self.image[rows, columns], axis=1)
        return levels

    def _search(
        self,
        wanted: list[tuple[int, int]],
        blur: float,
        every: int = 1,
        reach: dict[tuple[int, int], int] | None = None,
    ) -> dict[tuple[int, int], tuple[NDArray[np.intp], NDArray[np.float64]]]:
        """Return rows and columns of edges by their first crossing beside the coarse course."""
        todo = reach or {edge: math.ceil(3 * blur) + _SEARCH_PX for edge in wanted}
        found: dict[tuple[int, int], tuple[NDArray[np.intp], NDArray[np.float64]]] = {}
        while todo:
            alike: dict[tuple[int, int], list[tuple[int, int]]] = {}
            for (k, side), far in todo.items():
                inner = max(2, min(far, round(self.line_width[k] / 2)))
                outer = max(2, min(far, round(self.space[k, side] / 2)))
                alike.setdefault((outer, inner) if side == 0 else (inner, outer), []).append((k, side))
            again = {}
            for (before, after), group in alike.items():
                n = min(before + after + 1, self.width)
                rows, first = [], []
                for edge in group:
                    start = np.rint(self.course[edge][::every]).astype(np.intp) - before
                    inside = np.nonzero((start >= 0) & (start <= self.width - n))[0]
                    rows.append(inside * every)
                    first.append(start[inside])
                size = [len(r) for r in rows]
                pixels = gather(self.image, np.concatenate(rows), np.concatenate(first), n)
                levels = np.array([self.levels[k, side : side + 2] for k, side in group])
                crossing = first_crossing(pixels, np.repeat(levels, size, axis=0))
                for edge, r, f, x in zip(group, rows, first, np.split(crossing, np.cumsum(size)[:-1]), strict=True):
                    if edge not in found or len(r) > len(found[edge][0]) / 2:
                        found[edge] = r, f + x
                    # A very rough edge strays to the ends of where it was looked for.
                    at_end = float(np.mean((x < 1) | (x > n - 2))) if len(x) else 0.0
                    room = max(self.line_width[edge[0]], float(self.space[edge])) / 2
                    if at_end > _AT_END and todo[edge] < min(_SEARCH_MOST, room):
                        again[edge] = 2 * todo[edge]
            todo = again
        return found

    def _first_blur(self) -> float:
        """Blur from the mean profile of the widest line's edge, aligned to a pixel."""
        edge = (int(np.argmax(self.line_width)), 0)
        guess = 2.0
        for _ in range(3):
            rows, x = self._search([edge], guess, _sparse(self.height))[edge]
            use = self.usable[edge[0]][rows]
            if not use.any():
                return guess
            rows, x = rows[use], x[use]
            n = min(2 * math.ceil(4 * guess + 4) + 1, self.width)
            first = np.clip(np.rint(x).astype(np.intp) - n // 2, 0, self.width - n)
            offset = np.rint(np.arange(n) + (first - x)[:, None]).astype(int).ravel()
            offset -= offset.min()
            count = np.bincount(offset)
            mean = np.bincount(offset, weights=gather(self.image, rows, first, n).ravel()) / np.maximum(count, 1)
            slope = float(np.abs(np.diff(mean[count > 0.5 * count.max()])).max())
            new = float(np.abs(np.diff(self.levels[edge[0]])).max()) / max(slope, 1e-9) / math.sqrt(2 * math.pi)
            new = min(max(new, 0.5), 20.0)
            if abs(new - guess) < 0.2 * guess:
                break
            guess = new
        return new

    def _start(self, blur: float) -> None:
        """First guess of every edge in every row: its scout's course, or a search where it is rough."""
        lines = len(self.course)
        every = _sparse(self.height)
        rough = {}
        for edge, (rows, x) in self._search(list(np.ndindex(lines, 2)), blur, every).items():
            off = x - self.course[edge][rows]
            stray = float(np.sqrt(np.mean(off * off))) if len(off) >= _FEWEST_ROWS else blur
            if stray > _SMOOTH_EDGE * blur:
                rough[edge] = math.ceil(2 * blur + _STRAYS * stray) + 1
        for edge, (rows, x) in self._search(list(rough), blur, reach=rough).items():
            self.edges[edge][rows] = x

    def _cut(self, own: tuple[tuple[int, int], ...], blur: float, *, known: bool) -> _Cut:
        """Choose the window of a fit, centred on the edges it is made for."""
        half = window_half(blur)
        outer = self.edges[own[0]], self.edges[own[-1]]
        rows = np.nonzero(np.isfinite(outer[0] + outer[1]))[0]
        left, right = outer[0][rows], outer[1][rows]
        n = 2 * half + 1 + (math.ceil(float(np.median(right - left))) if len(rows) else 0)
        n = max(min(n, self.width), 1)
        first = np.clip(np.rint((left + right - (n - 1)) / 2).astype(np.intp), 0, self.width - n)
        inside = (left - first > 2 * blur) & (first + n - 1 - right > 2 * blur)
        held = list(own)
        (k, side), (last, last_side) = own[0], own[-1]
        if side == 0 and k > 0 and self.space[k, 0] < half:
            held.insert(0, (k - 1, 1))
        if last_side == 1 and last + 1 < len(self.course) and self.space[last, 1] < half:
            held.append((last + 1, 0))
        return _Cut(tuple(held), own, rows[inside], first[inside], n, blur, known)

    def traces(self) -> list[Trace | None]:
        """Fit all lines until the windows suit the blur: first those wide enough to tell it, then the narrow ones."""
        lines = range(len(self.course))
        self._start(self.blur)
        cuts: list[list[_Cut]] = [[] for _ in lines]
        due = set(lines)
        for turn in range(_PASSES):
            fitted = [k for k in lines if np.isfinite(self.blurs[k]).all()]
            wide = [self.blurs[k].mean() for k in fitted if self.line_width[k] > _KNOWN_BLUR * self.blurs[k].max()]
            common = float(np.median(wide)) if wide else self.blur
            narrow = {k for k in due if self.line_width[k] < _KNOWN_BLUR * common}
            now = sorted(due - narrow if turn == 0 and len(narrow) < len(due) else due)
            for k in now:
                known = bool(wide) and k in narrow
                blur = float(self.blurs[k].max()) if k in fitted and not known else common
                together = self.line_width[k] < _APART * blur + 2
                sides = (((k, 0), (k, 1)),) if together else (((k, 0),), ((k, 1),))
                cuts[k] = [self._cut(own, blur, known=known) for own in sides]
            self._fit([cut for k in now for cut in cuts[k]])
            for k in now:
                if any(cut.fit is None for cut in cuts[k]):
                    self.blurs[k] = np.nan
                    due.discard(k)
                    continue
                settled = turn >= self._turns(k)
                for cut in cuts[k]:
                    settled &= self._keep(cut)
                if settled:
                    due.discard(k)
            if not due:
                break
        return [self._trace(k, cuts[k]) for k in lines]

    def _turns(self, k: int) -> int:
        """Fits a line takes until its neighbours' light is settled: most where a neighbour just misses the window."""
        half, space = window_half(self.blur), self.space[k].min()
        return 0 if space > 2 * half else 1 if space < half else 5

    def _keep(self, cut: _Cut) -> bool:
        """Take over what a fit says of its own edges; tell whether its window suited its blur."""
        fit = cut.fit
        assert fit is not None  # noqa: S101  (its caller has looked)
        median = np.median(fit.levels, axis=0)
        for edge in cut.own:
            at = cut.edges.index(edge)
            self.edges[edge] = np.nan
            self.edges[edge][cut.rows] = cut.first + fit.position[at]
            self.blurs[edge] = fit.blur
            self.levels[edge[0], edge[1] : edge[1] + 2] = median[at : at + 2]
        return abs(fit.blur - cut.blur) < _SETTLED * cut.blur

    def _fit(self, cuts: list[_Cut]) -> None:
        """Fit cuts of one shape side by side."""
        alike: dict[tuple[int, int], list[_Cut]] = {}
        for cut in cuts:
            usable = self.usable[cut.own[0][0]][cut.rows]
            if usable.sum() >= _FEWEST_ROWS and np.ptp(self._levels_of(cut)) > 0:
                alike.setdefault((cut.n, len(cut.edges)), []).append(cut)
        for (n, _), group in alike.items():
            pixels = gather(
                self.image, np.concatenate([c.rows for c in group]), np.concatenate([c.first for c in group]), n
            )
            sizes = np.array([len(c.rows) for c in group])
            end = np.cumsum(sizes)
            for cut, last, size in zip(group, end, sizes, strict=True):
                others = self._others(cut)
                if others is not None:
                    pixels[last - size : last] -= others
            fits = fit_edges(
                Windows(
                    pixels=pixels,
                    start=np.concatenate(
                        [np.stack([self._place(e)[c.rows] for e in c.edges]) - c.first for c in group], axis=1
                    ),
                    usable=np.concatenate([self.usable[c.own[0][0]][c.rows] for c in group]),
                    sizes=sizes,
                    levels=np.array([self._levels_of(c) for c in group]),
                    blur=np.array([c.blur for c in group]),
                    fixed_blur=np.array([c.known for c in group]),
                )
            )
            for cut, fit, last, size in zip(group, fits, end, sizes, strict=True):
                cut.fit = fit
                cut.shape = self._shape(pixels[last - size : last], fit, [cut.edges.index(e) for e in cut.own])

    def _levels_of(self, cut: _Cut) -> NDArray[np.float64]:
        """Levels between the edges of a fit, left to right, as far as known."""
        first = self.levels[cut.edges[0]]
        return np.array([first, *[self.levels[k, side + 1] for k, side in cut.edges]])

    def _place(self, edge: tuple[int, int]) -> NDArray[np.float64]:
        """Where an edge is in each row, as far as known."""
        own = self.edges[edge]
        return np.asarray(np.where(np.isfinite(own), own, self.course[edge]))

    def _others(self, cut: _Cut) -> NDArray[np.float32] | None:
        """Light that edges near by, which the fit doesn't hold, bring into its window beyond the plateau next to it."""
        (k, side), (last, last_side) = cut.own[0], cut.own[-1]
        reach = cut.n + 5 * cut.blur
        if (
            self.space[k, 0] > reach
            and self.space[last, 1] > reach
            and (side != last_side or self.line_width[k] > reach)
        ):
            return None
        extra: NDArray[np.float64] | None = None
        columns = np.arange(cut.n)
        first, final = cut.edges[0], cut.edges[-1]
        for j in range(max(first[0] - 1, 0), min(final[0] + 2, len(self.course))):
            for edge in ((j, 0), (j, 1)):
                if first <= edge <= final:
                    continue
                place = self._place(edge)[cut.rows] - cut.first
                to_right = edge > final
                middle = float(np.median(place)) if len(place) else np.inf
                if middle > reach if to_right else middle < -5 * cut.blur:
                    continue
                step = self.levels[j, edge[1] + 1] - self.levels[j, edge[1]]
                blur = self.blurs[edge] if np.isfinite(self.blurs[edge]) else cut.blur
                part = ndtr((columns - place[:, None]) / blur)
                own = step * (part if to_right else part - 1.0)
                extra = own if extra is None else extra + own
        return None if extra is None else extra.astype(np.float32)

    def _trace(self, k: int, cuts: list[_Cut]) -> Trace | None:
        edges = self.edges[k]
        if any(c.fit is None for c in cuts) or np.isfinite(edges[0] + edges[1]).sum() < _FEWEST_ROWS:
            return None
        covariance, u_row, u_blur = np.zeros((2, 2)), np.zeros(2), np.zeros(2)
        shapes = [EdgeShape(), EdgeShape()]
        bare, ink, noise = [], [], []
        for cut in cuts:
            fit = cut.fit
            assert fit is not None  # noqa: S101  (looked at above)
            at = [cut.edges.index(own) for own in cut.own]
            sides = [side for _, side in cut.own]
            own_shapes, correlation = cut.shape
            covariance[np.ix_(sides, sides)] = fit.mean_covariance[np.ix_(at, at)] * correlation**2
            u_row[sides] = fit.u_row[at] * math.sqrt(correlation)
            u_blur[sides] = fit.u_blur
            for side, shape in zip(sides, own_shapes, strict=True):
                shapes[side] = shape
            noise.append(fit.noise)
            for j, side in zip(at, sides, strict=True):
                bare.append(fit.levels[:, j + side])
                ink.append(fit.levels[:, j + 1 - side])
        course = self.course[k]
        return Trace(
            way=(course[0] > 0) & (course[0] < self.width - 1) & (course[1] > 0) & (course[1] < self.width - 1),
            course=course,
            edges=edges,
            u_row=u_row,
            covariance=covariance,
            blur=self.blurs[k],
            u_blur=u_blur,
            ink=float(np.median(np.concatenate(ink))),
            bare=float(np.median(np.concatenate(bare))),
            bare_range=float(np.ptp(np.concatenate(bare))),
            middle_level=(ink[0] + bare[0]) / 2,
            noise=float(np.mean(noise)),
            shapes=shapes,
        )

    def _shape(self, pixels: NDArray[np.float32], fit: EdgeFit, own: list[int]) -> tuple[list[EdgeShape], float]:
        """Compare the mean edge seen with the one fitted; tell by how much correlated noise scatters a mean more."""
        wanted = max(_SHAPE_ROWS_TOTAL // self.blurs.size, _SHAPE_ROWS // 2)
        rows = np.arange(0, pixels.shape[0], max(1, pixels.shape[0] // wanted))
        rows = rows[np.isfinite(fit.position[:, rows].sum(axis=0))]
        if len(rows) < _FEWEST_ROWS:
            return [EdgeShape() for _ in own], 1.0
        levels = np.median(fit.levels, axis=0)
        columns = np.arange(pixels.shape[1])
        u = [(columns - position[rows, None]) / fit.blur for position in fit.position]
        model = levels[0] + sum((levels[j + 1] - levels[j]) * ndtr(u[j]) for j in range(len(u)))
        residual = pixels[rows] - model
        # A pattern that stays at its columns, row after row, moves every row's edge alike.
        chance = fit.noise**2 / len(rows)
        steady = float(np.mean(residual.mean(axis=0) ** 2)) - chance
        steady = math.sqrt(steady) if steady > _STEADY * chance * math.sqrt(2 / len(columns)) else 0.0
        shapes = []
        for j in own:
            step = levels[j + 1] - levels[j]
            away = np.abs(u[j])
            core, beside = away < _CORE, (away > _BESIDE[0]) & (away < _BESIDE[1])
            for other in (v for i, v in enumerate(u) if i != j):
                beside &= np.abs(other) > _CLEAR_OF
            if not core.any() or not beside.any():
                shapes.append(EdgeShape())
                continue
            flank = (away > _CORE) & (away < _BESIDE[1])
            noise = fit.noise / abs(step)
            overshoot = float((residual * np.sign(u[j]))[beside].mean()) / step
            overshoot = overshoot if abs(overshoot) > _SURE * noise / math.sqrt(beside.sum()) else 0.0
            middle = float(residual[core].mean()) / step
            # Light that isn't linear bends both edges of a line towards the same level, whichever way they step.
            skew = (float(residual[core].mean()) - float(residual[flank].mean())) / abs(step)
            u_skew = noise * math.sqrt(1 / core.sum() + 1 / max(flank.sum(), 1))
            if len(u) > 1:  # the other edges' light is in the flanks
                skew = u_skew = 0.0
            shift = -middle * math.sqrt(2 * math.pi) * fit.blur
            shift = shift if abs(middle) > _SURE / 2 * noise / math.sqrt(core.sum()) else 0.0
            steady_shift = position_bound(fit.blur, abs(step), steady)
            shapes.append(EdgeShape(overshoot, shift, skew, u_skew, steady_shift))
        return shapes, _correlation(residual - residual.mean(axis=0))


def _correlation(residual: NDArray[np.float64]) -> float:
    """Return how much more the mean of noisy edges scatters because pixels share their noise.

    From neighbours along the row; the same is taken to hold from row to row. White noise gives 1, a mean of
    3 x 3 pixels 3.
    """
    power = float(np.mean(residual * residual)) + 1e-30
    lags = [float(np.mean(residual[:, :-k] * residual[:, k:])) / power for k in (1, 2) if k < residual.shape[1]]
    return 1.0 + 2.0 * sum(max(lag - _UNCORRELATED, 0.0) for lag in lags)


def _sparse(rows: int) -> int:
    """Stride that leaves enough rows for a typical value."""
    return max(1, rows // _SHAPE_ROWS)


def _course(rows: NDArray[np.float64], edge: NDArray[np.float64], height: int) -> NDArray[np.float64]:
    """Extend an edge known in blocks to all rows, straight on beyond its ends."""
    n = min(len(rows), 8)
    slope = [_slope(rows[part], edge[part]) if n > 1 else 0.0 for part in (slice(n), slice(-n, None))]
    ends = [edge[0] - slope[0] * rows[0], edge[-1] + slope[1] * (height - 1 - rows[-1])]
    known = np.concatenate([[0.0], rows, [height - 1.0]]), np.concatenate([ends[:1], edge, ends[1:]])
    return np.asarray(np.interp(np.arange(height), *known))


def _slope(x: NDArray[np.float64], y: NDArray[np.float64]) -> float:
    off = x - x.mean()
    return float(off @ y / (off @ off))


def _near_seen(line: CoarseLine, height: int) -> NDArray[np.bool_]:
    """Rows of blocks in which the line was seen."""
    step = float(np.min(np.diff(line.rows))) if len(line.rows) > 1 else 1.0
    change = np.zeros(height + 1)
    np.add.at(change, np.clip(np.ceil(line.rows - step / 2), 0, height).astype(int), 1)
    np.add.at(change, np.clip(np.floor(line.rows + step / 2) + 1, 0, height).astype(int), -1)
    return np.asarray(np.cumsum(change[:-1]) > 0)
