"""Trace every line of a picture: both edges in each row, to a fraction of a pixel, and what they say of the picture."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy.special import ndtr

from printmetrics.analysis.edges import EdgeFit, Window, first_crossing, fit_edges, gather, window_half

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from printmetrics.analysis.finding import CoarseLine

_APART = 8.0  # blurs between two edges from which on each is fitted alone
_SEARCH_PX, _SEARCH_MOST = 6, 100  # a rough edge is looked for this far, plus 3 blurs, beside its coarse course,
_AT_END = 0.003  # and further where more than this part of it is found at the ends
_KNOWN_BLUR = 5.0  # narrower than this many blurs, a line takes its blur from wider ones where there are any
_PASSES = 5  # fits of one line, at most
_SETTLED = 0.15  # a fit stands when it changes the blur by less than this part
_SHAPE_ROWS = 256  # the edge's shape is judged on so many rows


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
    overshoot : float
        How far the levels beside the edge go beyond the plateaus, over the step; sharpening makes it positive.
    shape_shift : ndarray of float, shape (2,)
        How far the middle of the edge seen lies from that of the edge fitted. [px]
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
    overshoot: float
    shape_shift: NDArray[np.float64]

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
    """Pixels of one fit, with the edges (line, side) it moves, and those of them it is made for."""

    edges: tuple[tuple[int, int], ...]
    own: tuple[tuple[int, int], ...]
    rows: NDArray[np.intp]
    first: NDArray[np.intp]
    pixels: NDArray[np.float32]
    window: Window | None = None
    fit: EdgeFit | None = None


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
    near edges of close neighbours; the light of edges further off is taken off. A line narrower than 5 blurs takes its blur
    from wider lines of the picture where there are any, since its own width hides it.
    """
    return _Tracer(image, lines).traces()


class _Tracer:
    def __init__(self, image: NDArray[Any], lines: Sequence[CoarseLine]) -> None:
        self.image = image
        height, self.width = image.shape
        self.all_rows = np.arange(height)
        self.course = np.array([[_course(line.rows, edge, height) for edge in (line.left, line.right)] for line in lines])
        self.usable = [_near_seen(line, height) for line in lines]
        self.line_width = [max(float(np.median(line.right - line.left)), 1.0) for line in lines]
        self.space = self._spaces()
        self.levels = [self._first_levels(k) for k in range(len(lines))]
        self.blur = self._first_blur()

    def _spaces(self) -> NDArray[np.float64]:
        """Space left and right of each line."""
        gaps = np.full((len(self.course), 2), float(self.width))
        for k in range(len(self.course) - 1):
            gap = float(np.median(self.course[k + 1, 0] - self.course[k, 1]))
            gaps[k, 1] = gaps[k + 1, 0] = max(gap, 1.0)
        return gaps

    def _first_levels(self, k: int) -> NDArray[np.float64]:
        """Bare, ink, bare levels as first guessed."""
        rows = self.all_rows[self.usable[k]]
        rows = rows[:: max(1, len(rows) // 256)]
        left, right = self.course[k][:, rows]
        away = np.minimum(self.space[k] / 2, 6.0)
        places = [left - away[0], (left + right) / 2, right + away[1]]
        return np.array([
            float(np.median(self.image[rows, np.clip(np.rint(p), 0, self.width - 1).astype(int)])) for p in places
        ])

    def _search(self, blur: float, only: tuple[int, int] | None = None, every: int = 1) -> NDArray[np.float64]:
        """Return all edges, or only one, to a fraction of a pixel, by their first crossing beside the coarse course."""
        edges = np.full_like(self.course, np.nan)
        todo = {edge: math.ceil(3 * blur) + _SEARCH_PX for edge in np.ndindex(edges.shape[:2]) if only in (None, edge)}
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
                    start = np.rint(self.course[edge]).astype(np.intp) - before
                    # Too near the border to look around, the coarse course is the first guess.
                    edges[edge] = np.where((start > -before) & (start < self.width - before), self.course[edge], np.nan)
                    rows.append(np.nonzero((start >= 0) & (start <= self.width - n))[0][::every])
                    first.append(start[rows[-1]])
                size = [len(r) for r in rows]
                levels = np.array([self.levels[k][side : side + 2] for k, side in group])
                pixels = gather(self.image, np.concatenate(rows), np.concatenate(first), n)
                found = np.split(first_crossing(pixels, np.repeat(levels, size, axis=0)), np.cumsum(size)[:-1])
                for edge, r, f, x in zip(group, rows, first, found, strict=True):
                    edges[edge][r] = f + x
                    # A very rough edge strays to the ends of where it was looked for.
                    at_end = float(np.mean((x < 1) | (x > n - 3))) if len(x) else 0.0
                    if at_end > _AT_END and todo[edge] < _SEARCH_MOST:
                        again[edge] = 2 * todo[edge]
            todo = {e: far for e, far in again.items() if self._room(e) > todo[e]}
        return edges

    def _room(self, edge: tuple[int, int]) -> float:
        return max(self.line_width[edge[0]], float(self.space[edge])) / 2

    def _first_blur(self) -> float:
        """Blur from the mean profile of the widest line's edge, aligned to a pixel."""
        k = int(np.argmax(self.line_width))
        guess = 2.0
        for _ in range(3):
            x = self._search(guess, (k, 0), max(1, len(self.all_rows) // _SHAPE_ROWS))[k, 0]
            rows = np.nonzero(np.isfinite(x) & self.usable[k])[0]
            if not len(rows):
                return guess
            n = min(2 * math.ceil(4 * guess + 4) + 1, self.width)
            first = np.clip(np.rint(x[rows]).astype(np.intp) - n // 2, 0, self.width - n)
            pixels = gather(self.image, rows, first, n)
            offset = np.rint(np.arange(n) + (first - x[rows])[:, None]).astype(int)
            base = offset.min()
            count = np.bincount((offset - base).ravel())
            mean = np.bincount((offset - base).ravel(), weights=pixels.ravel()) / np.maximum(count, 1)
            mean = mean[count > 0.5 * count.max()]
            slope = float(np.abs(np.diff(mean)).max())
            new = abs(self.levels[k][1] - self.levels[k][0]) / max(slope, 1e-9) / math.sqrt(2 * math.pi)
            new = min(max(new, 0.5), 20.0)
            if abs(new - guess) < 0.2 * guess:
                break
            guess = new
        return new

    def _cut(self, own: tuple[tuple[int, int], ...], edges: NDArray[np.float64], blur: float) -> _Cut:
        """Cut the pixels of a fit out of the picture, centred on the edges it is made for."""
        half = window_half(blur)
        outer = np.array([edges[own[0]], edges[own[-1]]])
        rows = np.nonzero(np.isfinite(outer).all(axis=0))[0]
        outer = outer[:, rows]
        n = 2 * half + 1 + (math.ceil(float(np.median(outer[1] - outer[0]))) if len(rows) else 0)
        n = min(n, self.width)
        first = np.clip(np.rint(outer.mean(axis=0) - (n - 1) / 2).astype(np.intp), 0, self.width - n)
        inside = (outer[0] - first > 2 * blur) & (first + n - 1 - outer[1] > 2 * blur)
        rows, first = rows[inside], first[inside]
        held = list(own)
        (k, side), (last, last_side) = own[0], own[-1]
        if side == 0 and k > 0 and self.space[k, 0] < half:
            held.insert(0, (k - 1, 1))
        if last_side == 1 and last + 1 < len(edges) and self.space[last, 1] < half:
            held.append((last + 1, 0))
        return _Cut(tuple(held), own, rows, first, gather(self.image, rows, first, n))

    def traces(self) -> list[Trace | None]:
        """Fit all lines until the windows suit the blur: first those wide enough to tell it, then the narrow ones."""
        lines = range(len(self.course))
        edges = self._search(self.blur)
        fits: list[list[_Cut]] = [[] for _ in lines]
        blurs = np.full((len(self.course), 2), np.nan)
        due = set(lines)
        for turn in range(_PASSES):
            fitted = [k for k in lines if np.isfinite(blurs[k]).all()]
            wide = [blurs[k].mean() for k in fitted if self.line_width[k] > _KNOWN_BLUR * blurs[k].max()]
            common = float(np.median(wide)) if wide else self.blur
            narrow = {k for k in due if self.line_width[k] < _KNOWN_BLUR * common}
            if turn == 0 and len(narrow) < len(due):
                narrow, late = set(), narrow
            else:
                late = set()
            for k in due - late:
                blur = float(blurs[k].max()) if k in fitted and not (wide and k in narrow) else common
                together = self.line_width[k] < _APART * blur + 2
                sides = (((k, 0), (k, 1)),) if together else (((k, 0),), ((k, 1),))
                fits[k] = [self._cut(own, edges, blur) for own in sides]
                for cut in fits[k]:
                    cut.window = self._window(cut, edges, blurs, blur, known=bool(wide) and k in narrow)
            self._fit([cut for k in due - late for cut in fits[k]])
            for k in sorted(due - late):
                if any(cut.fit is None for cut in fits[k]):
                    blurs[k] = np.nan
                    due.discard(k)
                    continue
                settled = turn > 0 or not self.space[k].min() < 2 * window_half(self.blur)
                for cut in fits[k]:
                    assert cut.fit is not None
                    assert cut.window is not None
                    settled &= abs(cut.fit.blur - cut.window.blur) < _SETTLED * cut.window.blur
                    median = np.median(cut.fit.levels, axis=0)
                    for own in cut.own:
                        at = cut.edges.index(own)
                        edges[own] = np.nan
                        edges[own][cut.rows] = cut.first + cut.fit.position[:, at]
                        blurs[own] = cut.fit.blur
                        self.levels[own[0]][own[1] : own[1] + 2] = median[at : at + 2]
                if settled:
                    due.discard(k)
            if not due:
                break
        return [self._trace(k, edges[k], fits[k], blurs[k]) for k in lines]

    def _window(
        self, cut: _Cut, edges: NDArray[np.float64], blurs: NDArray[np.float64], blur: float, *, known: bool
    ) -> Window | None:
        """Make a cut ready to be fitted; None where too few rows or no step at all are left."""
        usable = self.usable[cut.own[0][0]][cut.rows]
        levels = [self.levels[cut.edges[0][0]][cut.edges[0][1]]]
        levels += [self.levels[k][side + 1] for k, side in cut.edges]
        if usable.sum() < _FEWEST_ROWS or np.ptp(levels) == 0:
            return None
        start = np.stack([self._place(e, edges)[cut.rows] for e in cut.edges], axis=1) - cut.first[:, None]
        others = self._others(cut, edges, blurs, blur)
        return Window(
            pixels=cut.pixels - others if np.ndim(others) else cut.pixels, start=start, levels=np.array(levels), blur=blur,
            usable=usable, fixed_blur=known,
        )

    def _fit(self, cuts: list[_Cut]) -> None:
        """Fit cuts of one shape side by side."""
        alike: dict[tuple[int, int], list[_Cut]] = {}
        for cut in cuts:
            cut.fit = None
            if cut.window is not None:
                alike.setdefault((cut.pixels.shape[1], len(cut.edges)), []).append(cut)
        for group in alike.values():
            for cut, fit in zip(group, fit_edges([cut.window for cut in group if cut.window]), strict=True):
                cut.fit = fit

    def _place(self, edge: tuple[int, int], edges: NDArray[np.float64]) -> NDArray[np.float64]:
        """Where an edge is in each row, as far as known."""
        return np.where(np.isfinite(edges[edge]), edges[edge], self.course[edge])

    def _others(
        self, cut: _Cut, edges: NDArray[np.float64], blurs: NDArray[np.float64], blur: float
    ) -> NDArray[np.float32] | float:
        """Light that edges near by, which the fit doesn't hold, bring into its window beyond the plateau next to it."""
        n = cut.pixels.shape[1]
        (k, side), (last, last_side) = cut.own[0], cut.own[-1]
        outer, inner = 2 * (n + 5 * blur), n + 5 * blur
        alone = self.space[k, 0] > outer and self.space[last, 1] > outer
        if alone and (side != last_side or self.line_width[k] > inner):
            return 0.0
        extra: NDArray[np.float64] | float = 0.0
        columns = np.arange(n)
        first, last = cut.edges[0], cut.edges[-1]
        for k in range(max(first[0] - 1, 0), min(last[0] + 2, len(edges))):
            for side in (0, 1):
                edge = (k, side)
                if first <= edge <= last:
                    continue
                place = self._place(edge, edges)[cut.rows] - cut.first
                to_right = edge > last
                middle = float(np.median(place))
                if middle > n + 5 * blur if to_right else middle < -5 * blur:
                    continue
                step = self.levels[k][side + 1] - self.levels[k][side]
                part = ndtr((columns - place[:, None]) / (blurs[edge] if np.isfinite(blurs[edge]) else blur))
                extra = extra + step * (part if to_right else part - 1.0)
        return np.asarray(extra, dtype=np.float32) if np.ndim(extra) else 0.0

    def _trace(
        self, k: int, edges: NDArray[np.float64], cuts: list[_Cut], blurs: NDArray[np.float64]
    ) -> Trace | None:
        if any(w.fit is None for w in cuts) or np.isfinite(edges).all(axis=0).sum() < _FEWEST_ROWS:
            return None
        covariance, u_row, u_blur, shift = np.zeros((2, 2)), np.zeros(2), np.zeros(2), np.zeros(2)
        over, bare, ink, noise = [], [], [], []
        for cut in cuts:
            fit = cut.fit
            assert fit is not None
            at = [cut.edges.index(own) for own in cut.own]
            sides = [side for _, side in cut.own]
            covariance[np.ix_(sides, sides)] = fit.mean_covariance[np.ix_(at, at)]
            u_row[sides] = fit.u_row[at]
            u_blur[sides] = fit.u_blur
            beyond, shift[sides] = self._shape(cut, fit, at)
            over.append(beyond)
            noise.append(fit.noise)
            for j, side in zip(at, sides, strict=True):
                bare.append(fit.levels[:, j + side])
                ink.append(fit.levels[:, j + 1 - side])
        return Trace(
            way=((self.course[k] > 0) & (self.course[k] < self.width - 1)).all(axis=0),
            course=self.course[k], edges=edges, u_row=u_row, covariance=covariance, blur=blurs, u_blur=u_blur,
            ink=float(np.median(np.concatenate(ink))), bare=float(np.median(np.concatenate(bare))),
            bare_range=float(np.ptp(np.concatenate(bare))),
            middle_level=(ink[0] + bare[0]) / 2, noise=float(np.mean(noise)),
            overshoot=float(np.mean(over)), shape_shift=shift,
        )

    def _shape(self, cut: _Cut, fit: EdgeFit, own: list[int]) -> tuple[float, list[float]]:
        """Compare the mean edge seen with the one fitted: overshoot beside it, shift of its middle."""
        rows = np.nonzero(np.isfinite(fit.position).all(axis=1))[0]
        if len(rows) < _FEWEST_ROWS:
            return 0.0, [0.0 for _ in own]
        rows = rows[:: max(1, len(rows) // _SHAPE_ROWS)]
        levels = np.median(fit.levels, axis=0)
        columns = np.arange(cut.pixels.shape[1])
        u = [(columns - fit.position[rows, j, None]) / fit.blur for j in range(len(cut.edges))]
        model = levels[0] + sum((levels[j + 1] - levels[j]) * ndtr(u[j]) for j in range(len(u)))
        residual = cut.pixels[rows] - model
        over, shift = [], []
        for j in own:
            step = levels[j + 1] - levels[j]
            beside = (1.3 < np.abs(u[j])) & (np.abs(u[j]) < 2.6)  # noqa: PLR2004  (blurs: where overshoot peaks)
            over.append(float(np.mean((residual * np.sign(u[j]))[beside])) / step if beside.any() else 0.0)
            core = np.abs(u[j]) < 0.6  # noqa: PLR2004  (blurs: the middle of the edge)
            slope = step / (math.sqrt(2 * math.pi) * fit.blur)
            shift.append(-float(np.mean(residual[core])) / slope if core.any() else 0.0)
        return float(np.mean(over)), shift


_FEWEST_ROWS = 16


def _course(rows: NDArray[np.float64], edge: NDArray[np.float64], height: int) -> NDArray[np.float64]:
    """Extend an edge known in blocks to all rows, straight on beyond its ends."""
    r = np.arange(height)
    course = np.interp(r, rows, edge)
    if len(rows) > 1:
        n = min(len(rows), 8)
        head, tail = _slope(rows[:n], edge[:n]), _slope(rows[-n:], edge[-n:])
        before, after = r < rows[0], r > rows[-1]
        course[before] = edge[0] + head * (r[before] - rows[0])
        course[after] = edge[-1] + tail * (r[after] - rows[-1])
    return course


def _slope(x: NDArray[np.float64], y: NDArray[np.float64]) -> float:
    off = x - x.mean()
    return float(off @ y / (off @ off))


def _near_seen(line: CoarseLine, height: int) -> NDArray[np.bool_]:
    """Rows of blocks in which the line was seen."""
    step = float(np.min(np.diff(line.rows))) if len(line.rows) > 1 else 1.0
    rows = np.arange(height)
    at = np.clip(np.searchsorted(line.rows, rows), 1, len(line.rows) - 1) if len(line.rows) > 1 else np.zeros(height, int)
    distance = np.minimum(np.abs(rows - line.rows[at]), np.abs(rows - line.rows[at - 1]))
    return np.asarray(distance <= step / 2)

