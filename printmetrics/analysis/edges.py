"""Sub-pixel edges: one position a row, by least squares on an error-function edge.

The levels on both sides and the blur are shared by many rows; only the position is a row's own. The step is
Gauss-Newton with the shared terms eliminated (variable projection), so it reaches the Cramer-Rao bound.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy.special import ndtr

if TYPE_CHECKING:
    from numpy.typing import NDArray

PHASES = 64  # positions are linearised about the nearest 1/64 px, exact to the second order of that
ROWS_PER_BLOCK = 96  # the levels are constant over this many rows, and interpolated between
MIN_BLUR_PX, MAX_BLUR_PX = 0.35, 40.0
_REACH = 4.0  # window beyond the edge, in blurs
_SCOUT_STRIDE, _SCOUT_ROWS = 8, 256  # levels and blur are settled on so many of the rows
_SCOUT_STEPS, _FULL_STEPS = (3, 8), (3, 6)  # for one edge alone, and for edges that share their light
_SETTLED_BLUR = 0.05
_SHORT_STEP = (0.2, 0.02)  # all rows are stepped again while the rms step is this many blurs or more
_FEWEST_ROWS = 8  # a block with fewer good rows has no levels of its own
_MISFIT_SIGMAS = 6.0  # a row is a defect's when its residual stands out of the noise by this much,
_MISFIT_STEP = 0.1  # and its rms is this part of the step: a rough edge alone leaves less


def position_bound(blur_px: float, contrast: float, noise: float) -> float:
    """Return the Cramer-Rao bound of one row's edge position, levels and blur known.

    Parameters
    ----------
    blur_px : float
        Gaussian sigma of the edge, pixel aperture included. [px]
    contrast, noise : float
        Step height and noise sd of a pixel. [counts]

    Returns
    -------
    float
        Standard deviation. [px]

    Notes
    -----
    Var x0 >= 2 sqrt(pi) sigma noise^2 / contrast^2: the Fisher information of the row, summed over its pixels.

    References
    ----------
    .. [1] A. Gatherer and T. Meng, CSL-TR-93-560: bound of an edge's position.

    Examples
    --------
    >>> round(position_bound(2.0, 1.0, 0.02), 4)
    0.0533
    """
    return math.sqrt(2.0 * math.sqrt(math.pi) * blur_px) * noise / contrast


def first_crossing(rows: NDArray[np.float32], levels: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return where each row steps from one level to the other.

    The sum of differences to mid-level is least there: the maximum-likelihood place of a sharp step in white
    noise, so it holds where a threshold would cross many times. The crossing is then interpolated.

    Parameters
    ----------
    rows : ndarray of float32, shape (M, N)
        Pixels across the edge. [counts]
    levels : ndarray of float, shape (M, 2)
        Levels left and right of it. [counts]

    Returns
    -------
    ndarray of float, shape (M,)
        Column. [px]
    """
    middle = levels.mean(axis=1).astype(np.float32)
    above = (rows - middle[:, None]) * np.where(levels[:, 1] > levels[:, 0], np.float32(1), np.float32(-1))[:, None]
    last = np.argmin(np.cumsum(above, axis=1), axis=1)
    each = np.arange(len(rows))
    before, after = above[each, last], above[each, np.minimum(last + 1, rows.shape[1] - 1)]
    rise = after - before
    return np.asarray(last + np.clip(-before / np.where(rise > 0, rise, np.inf), 0.0, 1.0) * (rise > 0))


@dataclass(frozen=True, slots=True, kw_only=True)
class EdgeFit:
    """Edges found in the rows of one window.

    Parameters
    ----------
    position : ndarray of float, shape (M, K)
        Column of each of the K edges in each row; NaN where it was rejected. [px]
    u_row : ndarray of float, shape (K,)
        Standard uncertainty of one row's position from pixel noise. [px]
    mean_covariance : ndarray of float, shape (K, K)
        Covariance of the edges' mean positions from pixel noise, shared terms included. [px^2]
    blur, u_blur : float
        Gaussian sigma along the row, pixel aperture included, and its standard uncertainty from pixel noise. [px]
    levels : ndarray of float, shape (B, K + 1)
        Levels between the edges, left to right, in blocks of rows. [counts]
    noise : float
        sd of a pixel. [counts]
    """

    position: NDArray[np.float64]
    u_row: NDArray[np.float64]
    mean_covariance: NDArray[np.float64]
    blur: float
    u_blur: float
    levels: NDArray[np.float64]
    noise: float


def window_half(blur: float) -> int:
    """Return how far beyond an edge its fit looks.

    Parameters
    ----------
    blur : float
        Gaussian sigma along the row. [px]

    Returns
    -------
    int
        Half width. [px]
    """
    return math.ceil(_REACH * blur + 1.5)


def gather(image: NDArray[Any], rows: NDArray[np.intp], first: NDArray[np.intp], n: int) -> NDArray[np.float32]:
    """Return `n` pixels of each row from its own first column on.

    Parameters
    ----------
    image : ndarray, shape (P, Q)
        Picture, contiguous. [counts]
    rows, first : ndarray of int, shape (M,)
        Row and first column; must lie inside.
    n : int
        Number of columns.

    Returns
    -------
    ndarray of float32, shape (M, n)
        Pixels. [counts]
    """
    runs = np.lib.stride_tricks.sliding_window_view(image.reshape(-1), n)
    return runs[rows * image.shape[1] + first].astype(np.float32)


@dataclass(slots=True, kw_only=True)
class Window:
    """Rows of pixels across the edges of one fit, with its first guess.

    Parameters
    ----------
    pixels : ndarray of float32, shape (M, n)
        Rows across the edges, each from its own first column. [counts]
    start : ndarray of float, shape (M, K)
        First guess of the edges, in columns of `pixels`. [px]
    levels : ndarray of float, shape (K + 1,)
        First guess of the levels, left to right. [counts]
    blur : float
        First guess of the Gaussian sigma. [px]
    usable : ndarray of bool, shape (M,)
        Rows that may be used for the shared terms.
    fixed_blur : bool
        Keep the blur as given: for lines too narrow to tell it from their width.
    """

    pixels: NDArray[np.float32]
    start: NDArray[np.float64]
    levels: NDArray[np.float64]
    blur: float
    usable: NDArray[np.bool_]
    fixed_blur: bool


def fit_edges(windows: list[Window]) -> list[EdgeFit]:
    """Fit K error-function edges in each row, with levels and blur shared by the rows of a window.

    Parameters
    ----------
    windows : list of Window
        All with the same number of columns and of edges: they are computed side by side.

    Returns
    -------
    list of EdgeFit
        Positions in columns of each window's pixels.

    Notes
    -----
    Gauss-Newton. Levels and blur are settled on a part of the rows first; then all rows are stepped once, and again
    where noise made the step a long one.
    """
    together = int(windows[0].start.shape[1] > 1)
    scout = _Stack(windows, stride=_SCOUT_STRIDE)
    for _ in range(_SCOUT_STEPS[together]):
        before = scout.blur
        scout.step()
        if not together and np.abs(scout.blur - before).max() < _SETTLED_BLUR * before.min():
            break
    stack = _Stack(windows, stride=1)
    stack.blur, stack.shared = scout.blur, scout.shared
    for _ in range(_FULL_STEPS[together]):
        stack.step()
        if stack.longest < _SHORT_STEP[together]:
            break
    return stack.fits()


class _Functions:
    """The edge's step, slope and slope times offset at multiples of 1/PHASES px, and their inner products.

    Function 0 is 1; functions 3j+1, 3j+2, 3j+3 are the step, the slope, and the slope times (x - x0) / blur of
    edge j. Every model term is a short combination of these, so a row's normal equations are looked up, not summed.
    """

    def __init__(self, n: int, nearest: NDArray[np.int32], blur: NDArray[np.float64], group: NDArray[np.intp]) -> None:
        k = len(nearest)
        self.rows: list[NDArray[np.float32]] = []
        self._gram: dict[tuple[int, int], Any] = {(0, 0): float(n)}
        for j in range(k):
            first, last = int(nearest[j].min()), int(nearest[j].max())
            entry = group * (last - first + 1) + (nearest[j] - first)
            offset = np.arange(n) * PHASES - np.arange(first, last + 1)[:, None]
            u = (offset / (PHASES * blur[:, None, None])).reshape(-1, n)
            slope = np.exp(-0.5 * u * u) * np.repeat(1.0 / (math.sqrt(2 * math.pi) * blur), last - first + 1)[:, None]
            own = [ndtr(u), slope, slope * u]
            self.rows += [f.astype(np.float32)[entry] for f in own]
            for a in range(3):
                self._gram[0, 3 * j + a + 1] = own[a].sum(axis=1)[entry]
                for b in range(a, 3):
                    self._gram[3 * j + a + 1, 3 * j + b + 1] = np.einsum("ij,ij->i", own[a], own[b])[entry]
        for i in range(k):
            for j in range(i + 1, k):
                for a in range(3 * i + 1, 3 * i + 4):
                    for b in range(3 * j + 1, 3 * j + 4):
                        self._gram[a, b] = np.einsum("ij,ij->i", self.rows[a - 1], self.rows[b - 1])

    def dots(self, residual: NDArray[np.float32]) -> list[NDArray[np.float64]]:
        """Return the inner product of each function with each row."""
        return [residual.sum(axis=1), *[np.einsum("ij,ij->i", f, residual) for f in self.rows]]

    def product(self, one: _Term, other: _Term) -> Any:  # noqa: ANN401  (an array, or a number that stands for one)
        """Return the inner product of two combinations of functions in each row."""
        return sum(wa * wb * self._gram[min(a, b), max(a, b)] for a, wa in one for b, wb in other)


_Term = list[tuple[int, Any]]


class _Stack:
    """Windows computed side by side: their rows follow each other, window by window."""

    def __init__(self, windows: list[Window], *, stride: int) -> None:
        self.k = windows[0].start.shape[1]
        self.sizes = [len(w.pixels[::_few(len(w.pixels), stride)]) for w in windows]
        every = [_few(len(w.pixels), stride) for w in windows]
        self.pixels = np.concatenate([w.pixels[::e] for w, e in zip(windows, every, strict=True)])
        self.x = np.concatenate([w.start[::e] for w, e in zip(windows, every, strict=True)]).T.copy()
        self.usable = np.concatenate([w.usable[::e] for w, e in zip(windows, every, strict=True)])
        self.group = np.repeat(np.arange(len(windows)), self.sizes)
        self.starts = np.concatenate([[0], np.cumsum(self.sizes)])
        self.blur = np.array([w.blur for w in windows])
        self.free = np.array([not w.fixed_blur for w in windows])
        self.span = np.array([np.ptp(w.levels) for w in windows])
        self._block_rows([len(w.pixels) for w in windows])
        self.shared = np.repeat(np.array([w.levels for w in windows], dtype=np.float64), self.blocks, axis=0)

    def _block_rows(self, full: list[int]) -> None:
        """Cut each window into blocks, and know between which two blocks' middles each row lies."""
        self.blocks = [max(1, round(size / ROWS_PER_BLOCK)) for size in full]
        first = np.concatenate([[0], np.cumsum(self.blocks)])
        block, low, high, part = [], [], [], []
        for size, count, start in zip(self.sizes, self.blocks, first, strict=False):
            at = np.arange(size)
            block.append((at * count) // size + start)
            place = np.clip((at + 0.5) * count / size - 0.5, 0.0, count - 1.0)
            below = np.minimum(place.astype(np.intp), max(count - 2, 0))
            low.append(below + start)
            high.append(np.minimum(below + 1, count - 1) + start)
            part.append(place - below)
        self.block = np.concatenate(block)
        self.low, self.high = np.concatenate(low), np.concatenate(high)
        self.part = np.concatenate(part).astype(np.float32)
        self.block_group = np.repeat(np.arange(len(full)), self.blocks)
        self.bounds = np.searchsorted(self.block, np.arange(first[-1]))

    def _row_levels(self) -> NDArray[np.float32]:
        levels = self.shared.astype(np.float32)
        return np.asarray(levels[self.low] + self.part[:, None] * (levels[self.high] - levels[self.low])).T

    def _per_window(self, values: NDArray[np.float64], chosen: NDArray[np.bool_]) -> NDArray[np.float64]:
        """Median of the chosen rows of each window."""
        result = np.empty(len(self.sizes))
        for g in range(len(self.sizes)):
            part = slice(self.starts[g], self.starts[g + 1])
            own = values[part][chosen[part]]
            result[g] = np.median(own if len(own) else values[part])
        return result

    def step(self) -> None:
        """Take one Gauss-Newton step, and keep what the results need."""
        k, n, group = self.k, self.pixels.shape[1], self.group
        nearest = np.clip(np.rint(self.x * PHASES), -PHASES, (n + 1) * PHASES).astype(np.int32)
        functions = _Functions(n, nearest, self.blur, group)
        levels = self._row_levels()
        steps = np.diff(levels, axis=0)
        residual = self.pixels - levels[0][:, None]
        for j in range(k):
            residual -= steps[j][:, None] * functions.rows[3 * j]
        dots = functions.dots(residual)
        place: list[_Term] = [[(3 * j + 2, -steps[j])] for j in range(k)]
        terms: list[_Term] = [[(0, 1.0), (1, -1.0)]]
        terms += [[(3 * j + 1, 1.0), (3 * j + 4, -1.0)] for j in range(k - 1)]
        terms += [[(3 * k - 2, 1.0)], [(3 * j + 3, -steps[j]) for j in range(k)]]
        self.inverse = _inverse([[functions.product(a, b) for b in place] for a in place])
        score = np.array([sum(w * dots[f] for f, w in a) for a in place])
        move = np.einsum("ijm,jm->im", self.inverse, score)
        # The positions are eliminated: what is left of the shared terms' normal equations is summed over rows.
        cross = np.array([[functions.product(a, b) for b in terms] for a in place])
        self.gain = np.einsum("ijm,jam->iam", self.inverse, cross)
        squares = np.einsum("ij,ij->i", residual, residual) - (move * score).sum(axis=0)
        dof = max(n - k, 1)
        typical = self._per_window(squares, self.usable)
        self.noise = np.sqrt(np.maximum(typical, 1e-12) / (dof * (1 - 2 / (9 * dof)) ** 3))
        blur = self.blur[group]
        # A row hit by a defect has no say in what is shared.
        largest = np.maximum((1 + _MISFIT_SIGMAS * math.sqrt(2 / dof)) * self.noise**2, (_MISFIT_STEP * self.span) ** 2)
        self.good = (squares / dof < largest[group]) & (np.abs(move) < 2 * blur + 1).all(axis=0)
        enough = np.bincount(group, weights=self.usable & self.good) > np.bincount(group) / 4
        self.weight = (self.usable & (self.good | ~enough[group])).astype(np.float64)
        big = np.empty((len(self.bounds), k + 2, k + 2))
        for a in range(k + 2):
            for b in range(a, k + 2):
                each = functions.product(terms[a], terms[b]) - (cross[:, a] * self.gain[:, b]).sum(axis=0)
                big[:, a, b] = big[:, b, a] = np.add.reduceat(each * self.weight, self.bounds)
        pull = np.stack(
            [sum(v * dots[f] for f, v in a) - (self.gain[:, j] * score).sum(axis=0) for j, a in enumerate(terms)]
        )
        rows = np.add.reduceat(self.weight, self.bounds)
        self.fit = _SharedFit(big, rows, self.block_group, self.free)
        d_levels, d_blur = self.fit.solve(np.add.reduceat(pull * self.weight, self.bounds, axis=1).T)
        d_blur = np.clip(d_blur, np.maximum(-0.4 * self.blur, MIN_BLUR_PX - self.blur),
                         np.minimum(0.6 * self.blur, MAX_BLUR_PX - self.blur))
        change = np.vstack([d_levels.T[:, self.block], d_blur[group]])
        move = np.clip(move - np.einsum("iam,am->im", self.gain, change), -1.5 * blur, 1.5 * blur)
        self.x = nearest / PHASES + move
        self.shared = self.shared + d_levels
        self.blur = self.blur + d_blur
        self.steps = steps
        rms = np.sqrt(np.bincount(group, weights=(move**2).max(axis=0) * self.good) / np.maximum(
            np.bincount(group, weights=self.good), 1.0))
        self.longest = float((rms / self.blur).max())

    def fits(self) -> list[EdgeFit]:
        """Return each window's edges after the last step."""
        n = self.pixels.shape[1]
        inside = ((self.x > -0.5) & (self.x < n - 0.5)).all(axis=0)  # noqa: PLR2004  (pixel borders)
        keep = self.good & inside & (np.abs(self.steps).min(axis=0) > 0.05 * self.span[self.group])
        position = np.where(keep, self.x, np.nan)
        used = self.weight * keep
        total = np.maximum(np.bincount(self.group, weights=used, minlength=len(self.sizes)), 1.0)
        own = np.add.reduceat(self.inverse * used, self.starts[:-1], axis=2) / total**2
        mean_gain = np.add.reduceat(self.gain * used, self.bounds, axis=2) / total[self.block_group]
        carried = self.fit.carried(mean_gain)
        fits = []
        for g in range(len(self.sizes)):
            part = slice(self.starts[g], self.starts[g + 1])
            noise = float(self.noise[g])
            u_row = np.sqrt(np.median(self.inverse[range(self.k), range(self.k), part], axis=1)) * noise
            # Each row's position follows its noise, which makes the aligned edge look sharper by just that variance.
            blur = math.hypot(self.blur[g], float(u_row.mean())) if self.free[g] else float(self.blur[g])
            fits.append(
                EdgeFit(
                    position=position[:, part].T, u_row=u_row, blur=blur, noise=noise,
                    u_blur=math.sqrt(self.fit.blur_var[g]) * noise,
                    mean_covariance=(own[:, :, g] + carried[g]) * noise**2,
                    levels=self.shared[self.block_group == g],
                )
            )
        return fits


def _few(rows: int, stride: int) -> int:
    """Stride that leaves enough rows of a window for its levels and blur."""
    return max(1, min(stride, rows // _SCOUT_ROWS))


def _inverse(matrix: list[list[Any]]) -> NDArray[np.float64]:
    """Invert a small matrix of arrays, shape (k, k, m); a singular one gives small numbers, not infinite ones."""
    floor = 1e-4 * np.median(matrix[0][0]) + 1e-12
    k = len(matrix)
    if k == 1:
        return np.asarray(1.0 / (matrix[0][0] + floor))[None, None]
    full = np.stack([np.stack(row) for row in matrix])
    full[range(k), range(k)] += floor
    return np.moveaxis(np.linalg.inv(np.moveaxis(full, 2, 0)), 0, 2)


class _SharedFit:
    """Normal equations of the levels of each block and the one blur of each window, the positions eliminated."""

    def __init__(
        self, big: NDArray[np.float64], rows: NDArray[np.float64], group: NDArray[np.intp], free: NDArray[np.bool_]
    ) -> None:
        n_levels = big.shape[1] - 1
        self.group = group
        scale = np.trace(big[:, :-1, :-1], axis1=1, axis2=2)[:, None, None]
        self.levels_cov = np.linalg.inv(big[:, :-1, :-1] + np.eye(n_levels) * (1e-9 * scale + 1e-12))
        self.levels_cov[rows < _FEWEST_ROWS] = 0.0
        self.to_blur = np.einsum("bac,bc->ba", self.levels_cov, big[:, :-1, -1])
        info = np.bincount(group, weights=big[:, -1, -1] - np.einsum("ba,ba->b", big[:, :-1, -1], self.to_blur))
        self.blur_var = np.where(free & (info > 0), 1.0 / np.where(info > 0, info, 1.0), 0.0)

    def solve(self, pull: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return the change of each block's levels, and of each window's blur."""
        left = pull[:, -1] - np.einsum("ba,ba->b", pull[:, :-1], self.to_blur)
        change = self.blur_var * np.bincount(self.group, weights=left)
        levels = np.einsum("bac,bc->ba", self.levels_cov, pull[:, :-1]) - self.to_blur * change[self.group][:, None]
        return levels, change

    def carried(self, gain: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the covariance of the mean positions that comes from the shared terms, by window."""
        starts = np.searchsorted(self.group, np.arange(len(self.blur_var)))
        from_levels = np.add.reduceat(
            np.einsum("iab,bac,jcb->bij", gain[:, :-1], self.levels_cov, gain[:, :-1]), starts, axis=0
        )
        each = gain[:, -1] - np.einsum("iab,ba->ib", gain[:, :-1], self.to_blur)
        slope = np.add.reduceat(each, starts, axis=1)
        return np.asarray(from_levels + np.einsum("ig,jg,g->gij", slope, slope, self.blur_var))
