"""Sub-pixel edges: one position a row, by least squares on an error-function edge.

The levels on both sides and the blur are shared by many rows; only the position is a row's own. The step is
Gauss-Newton with the shared terms eliminated (variable projection), so it reaches the Cramer-Rao bound.
"""

from __future__ import annotations

import itertools
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
_SCOUT_STRIDE, _SCOUT_ROWS = 8, 256  # levels and blur are settled on so many of the rows first
_MEDIAN_ROWS = 400  # enough for a typical value
_LONGEST_STEP = 0.5  # of the levels, over the step between them
_RUN = 2048  # rows whose tables stay in the processor's cache
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
    n = rows.shape[1]
    above = rows - ((levels[:, 0] + levels[:, 1]) / 2).astype(np.float32)[:, None]
    above *= np.where(levels[:, 1] > levels[:, 0], np.float32(1), np.float32(-1))[:, None]
    # The running sum as a product with a triangle of ones: short rows are summed faster so.
    last = np.argmin(above @ np.triu(np.ones((n, n), np.float32)), axis=1)
    each = np.arange(len(rows))
    before, after = above[each, last], above[each, np.minimum(last + 1, n - 1)]
    rise = after - before
    return np.asarray(last + np.clip(-before / np.where(rise > 0, rise, np.inf), 0.0, 1.0) * (rise > 0))


@dataclass(frozen=True, slots=True, kw_only=True)
class EdgeFit:
    """Edges found in the rows of one window.

    Parameters
    ----------
    position : ndarray of float, shape (K, M)
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
    return np.asarray(runs[rows * image.shape[1] + first], dtype=np.float32)


@dataclass(slots=True, kw_only=True)
class Windows:
    """Rows of pixels across edges, window after window, with first guesses; all windows hold K edges.

    Parameters
    ----------
    pixels : ndarray of float32, shape (R, n)
        Rows across the edges, each from its own first column. [counts]
    start : ndarray of float, shape (K, R)
        First guess of the edges, in columns of `pixels`. [px]
    usable : ndarray of bool, shape (R,)
        Rows that may be used for the shared terms.
    sizes : ndarray of int, shape (G,)
        Rows of each window.
    levels : ndarray of float, shape (G, K + 1)
        First guess of the levels, left to right. [counts]
    blur : ndarray of float, shape (G,)
        First guess of the Gaussian sigma. [px]
    fixed_blur : ndarray of bool, shape (G,)
        Keep the blur as given: for lines too narrow to tell it from their width.
    """

    pixels: NDArray[np.float32]
    start: NDArray[np.float64]
    usable: NDArray[np.bool_]
    sizes: NDArray[np.intp]
    levels: NDArray[np.float64]
    blur: NDArray[np.float64]
    fixed_blur: NDArray[np.bool_]


def fit_edges(windows: Windows) -> list[EdgeFit]:
    """Fit K error-function edges in each row, with levels and blur shared by the rows of a window.

    Parameters
    ----------
    windows : Windows
        Pixels and first guesses; windows are computed side by side.

    Returns
    -------
    list of EdgeFit
        Of each window; positions in columns of its pixels.

    Notes
    -----
    Gauss-Newton. Levels and blur are settled on a part of the rows first; then all rows are stepped once, and again
    where noise made the step a long one.
    """
    kind = _Single if len(windows.start) == 1 else _Joint
    scout = kind(windows, scout=True)
    for _ in range(kind.scout_steps):
        before = scout.blur
        scout.step()
        if np.abs(scout.blur - before).max() < kind.settled * before.min():
            break
    fit = kind(windows, scout=False)
    fit.blur, fit.shared = scout.blur, scout.shared
    for _ in range(kind.full_steps):
        fit.step()
        if fit.longest < kind.settled_step:
            break
    return fit.fits()


_Term = list[tuple[int, Any]]


class _Fit:
    """Gauss-Newton on a stack of windows: positions eliminated row by row, shared terms solved block by block."""

    scout_steps: int
    full_steps: int
    settled: float  # change of the blur, over the blur
    settled_step: float  # rms step of the positions, over the blur
    inverse: Any  # of the positions' information, [K][K] arrays over rows
    gain: Any  # how positions answer the shared terms, [K][K + 2] arrays over rows

    def __init__(self, windows: Windows, *, scout: bool) -> None:
        self.k = len(windows.start)
        if scout:
            every = np.maximum(np.minimum(_SCOUT_STRIDE, windows.sizes // _SCOUT_ROWS), 1)
            starts = np.concatenate([[0], np.cumsum(windows.sizes)])
            part = np.concatenate(
                [
                    np.arange(first, first + size, step)
                    for first, size, step in zip(starts, windows.sizes, every, strict=False)
                ]
            )
            self.sizes = -(-windows.sizes // every)
            self.pixels, self.x, self.usable = windows.pixels[part], windows.start[:, part], windows.usable[part]
        else:
            self.sizes, self.pixels, self.x, self.usable = (
                windows.sizes,
                windows.pixels,
                windows.start,
                windows.usable,
            )
        self.group = np.repeat(np.arange(len(self.sizes)), self.sizes)
        self.starts = np.concatenate([[0], np.cumsum(self.sizes)])
        self.blur, self.free = windows.blur.astype(np.float64), ~windows.fixed_blur
        self.span = np.ptp(windows.levels, axis=1)
        self._block_rows(windows.sizes)
        self.shared = np.repeat(windows.levels.astype(np.float64), self.blocks, axis=0)

    def _block_rows(self, full: NDArray[np.intp]) -> None:
        """Cut each window into blocks, and know between which two blocks' middles each row lies."""
        self.blocks = np.maximum(1, np.rint(full / ROWS_PER_BLOCK).astype(np.intp))
        first = np.concatenate([[0], np.cumsum(self.blocks)])
        at = np.arange(len(self.group)) - self.starts[self.group]
        count, size = self.blocks[self.group], self.sizes[self.group]
        self.block = (at * count) // size + first[self.group]
        place = (at + 0.5) * (count / size) - 0.5
        below = np.clip(np.floor(place).astype(np.intp), 0, np.maximum(count - 2, 0))
        self.low = below + first[self.group]
        self.high = np.minimum(below + 1, count - 1) + first[self.group]
        self.part = (place - below).astype(np.float32)
        self.block_group = np.repeat(np.arange(len(full)), self.blocks)
        self.bounds = np.searchsorted(self.block, np.arange(first[-1]))
        few = np.arange(min(_MEDIAN_ROWS, int(self.sizes.max())))
        self.typical_rows = self.starts[:-1, None] + (few * self.sizes[:, None]) // len(few)

    def _row_levels(self) -> list[NDArray[np.float32]]:
        """Levels of each row, interpolated between blocks."""
        columns = self.shared.T.astype(np.float32)
        return [(level[self.low] + self.part * (level[self.high] - level[self.low])) for level in columns]

    def _per_window(self, values: NDArray[np.float64], chosen: NDArray[np.bool_]) -> NDArray[np.float64]:
        """Median of some of the chosen rows of each window; of any rows where none is chosen."""
        at = self.typical_rows
        known = chosen[at]
        known |= ~known.any(axis=1, keepdims=True)
        ordered = np.sort(np.where(known, values[at], np.inf), axis=1)
        count = known.sum(axis=1)
        each = np.arange(len(at))
        return np.asarray((ordered[each, (count - 1) // 2] + ordered[each, count // 2]) / 2)

    def _look(self, nearest: NDArray[np.int32]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Linearise at `nearest`: return the positions' step, shape (K, R), and each row's squared residual after it.

        Sets `inverse`, shape (K, K, R), and `gain`, how positions answer the shared terms, shape (K, K + 2, R).
        """
        raise NotImplementedError

    def _normal(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return the shared terms' normal matrix and right-hand side of each block, positions eliminated."""
        raise NotImplementedError

    def step(self) -> None:
        """Take one Gauss-Newton step, and keep what the results need."""
        n, group = self.pixels.shape[1], self.group
        nearest = np.clip(np.rint(self.x * PHASES), -PHASES, (n + 1) * PHASES).astype(np.int32)
        self.levels = self._row_levels()
        self.steps = [b - a for a, b in itertools.pairwise(self.levels)]
        move, squares = self._look(nearest)
        dof = max(n - self.k, 1)
        typical = self._per_window(squares, self.usable)
        self.noise = np.sqrt(np.maximum(typical, 1e-12) / (dof * (1 - 2 / (9 * dof)) ** 3))
        # A row hit by a defect has no say in what is shared.
        largest = np.maximum((1 + _MISFIT_SIGMAS * math.sqrt(2 / dof)) * self.noise**2, (_MISFIT_STEP * self.span) ** 2)
        self.good = squares < dof * largest[group]
        blur = self.blur[group]
        for own in move:
            self.good &= np.abs(own) < 2 * blur + 1
        chosen = self.usable & self.good
        few = np.add.reduceat(chosen, self.starts[:-1]) <= self.sizes / 4
        self.weight = np.where(few[group], self.usable, chosen) if few.any() else chosen
        big, pull = self._normal()
        self.shared_fit = _SharedFit(big, np.add.reduceat(self.weight, self.bounds), self.block_group, self.free)
        d_levels, d_blur = self.shared_fit.solve(pull)
        # Far from the solution the linear step is too long.
        most = _LONGEST_STEP * self.span[self.block_group][:, None]
        d_levels = np.clip(d_levels, -most, most)
        d_blur = np.clip(
            d_blur,
            np.maximum(-0.4 * self.blur, MIN_BLUR_PX - self.blur),
            np.minimum(0.6 * self.blur, MAX_BLUR_PX - self.blur),
        )
        change = [*(own[self.block] for own in d_levels.T.copy()), d_blur[group]]
        rms = 0.0
        before, self.x = self.x, np.empty(self.x.shape)
        for i in range(self.k):
            own = move[i] - sum(self.gain[i][a] * change[a] for a in range(self.k + 2))
            own = np.clip(own, -1.5 * blur, 1.5 * blur)
            own += nearest[i] / PHASES
            off = own - before[i]
            self.x[i] = own
            each = np.add.reduceat(off * off * self.good, self.starts[:-1]) / np.maximum(self.sizes, 1)
            rms = max(rms, float((np.sqrt(each) / self.blur).max()))
        self.longest = rms
        self.shared = self.shared + d_levels
        self.blur = self.blur + d_blur

    def fits(self) -> list[EdgeFit]:
        """Return each window's edges after the last step."""
        n = self.pixels.shape[1]
        keep = self.good.copy()
        for i in range(self.k):
            keep &= (self.x[i] > -0.5) & (self.x[i] < n - 0.5)  # noqa: PLR2004  (pixel borders)
            keep &= np.abs(self.steps[i]) > 0.05 * self.span[self.group]
        used = (self.weight & keep).astype(np.float64)
        total = np.maximum(np.add.reduceat(used, self.starts[:-1]), 1.0)
        own = np.empty((self.k, self.k, len(self.sizes)))
        gain = np.empty((self.k, self.k + 2, len(self.bounds)))
        position = np.where(keep, self.x, np.nan)
        for i in range(self.k):
            for j in range(self.k):
                own[i, j] = np.add.reduceat(self.inverse[i][j] * used, self.starts[:-1]) / total**2
            for a in range(self.k + 2):
                gain[i, a] = np.add.reduceat(self.gain[i][a] * used, self.bounds) / total[self.block_group]
        carried = self.shared_fit.carried(gain)
        each = range(self.k)
        carried[:, each, each] = np.maximum(carried[:, each, each], 0.0)  # rounding, where levels hardly show
        u = np.sqrt([self._per_window(self.inverse[i][i], keep) for i in range(self.k)]) * self.noise
        fits = []
        for g in range(len(self.sizes)):
            # Each row's position follows its noise, which makes the aligned edge look sharper by just that variance.
            blur = math.hypot(self.blur[g], float(u[:, g].mean())) if self.free[g] else float(self.blur[g])
            # In strong noise positions scatter more than the linear step says: to the second order, by this.
            second = 1.0 + (float(u[:, g].mean()) / blur) ** 2
            fits.append(
                EdgeFit(
                    position=position[:, self.starts[g] : self.starts[g + 1]],
                    u_row=u[:, g],
                    mean_covariance=(own[:, :, g] + carried[g]) * (self.noise[g] * second) ** 2,
                    blur=blur,
                    u_blur=math.sqrt(self.shared_fit.blur_var[g]) * float(self.noise[g]),
                    levels=self.shared[self.block_group == g],
                    noise=float(self.noise[g]),
                )
            )
        return fits


def _edge(u: NDArray[np.float64], blur: NDArray[np.float64] | float) -> list[NDArray[np.float64]]:
    """Return the edge's step, slope, and slope times u, at u blurs from its middle."""
    slope = np.exp(-0.5 * u * u) / (math.sqrt(2 * math.pi) * blur)
    return [ndtr(u), slope, slope * u]


class _Single(_Fit):
    """One edge a window: all that the normal equations need is looked up by the edge's place in its pixel."""

    scout_steps, full_steps, settled, settled_step = 4, 3, 0.02, 0.1

    def _look(self, nearest: NDArray[np.int32]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        n = self.pixels.shape[1]
        first, last = int(nearest.min()), int(nearest.max())
        self.entry = self.group * (last - first + 1) + (nearest[0] - first)
        offset = np.arange(n) * PHASES - np.arange(first, last + 1)[:, None]
        blur = self.blur[:, None, None]
        step, slope, bend = (f.reshape(-1, n) for f in _edge(offset / (PHASES * blur), blur))
        # Levels and blur, freed of what a shift of the edge would do as well.
        info = np.einsum("ij,ij->i", slope, slope)
        plain = [1.0 - step, step, bend]
        share = [np.einsum("ij,ij->i", f, slope) / info for f in plain]
        freed = [f - own[:, None] * slope for f, own in zip(plain, share, strict=True)]
        self.gram = {(a, b): np.einsum("ij,ij->i", freed[a], freed[b]) for a in range(3) for b in range(a, 3)}
        delta = self.steps[0]
        self.dots, squares = self._dots(np.stack([step, slope, *freed], axis=1).astype(np.float32))
        stiff = (1.0 / info)[self.entry]
        answer = stiff * self.dots[0]
        self.inverse = [[stiff / (delta * delta + 1e-9)]]
        per_step = 1.0 / np.where(np.abs(delta) > 1e-9, delta, 1e-9)  # noqa: PLR2004  (no step, no division)
        self.gain = [[-share[0][self.entry] * per_step, -share[1][self.entry] * per_step, share[2][self.entry]]]
        return (-answer * per_step)[None], squares - answer * self.dots[0]

    def _dots(self, functions: NDArray[np.float32]) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Return inner products of the residual with all functions but the first, shape (4, R), and its square.

        In runs of rows that stay in the processor's cache.
        """
        dots = np.empty((functions.shape[1] - 1, len(self.entry)), np.float32)
        squares = np.empty(len(self.entry), np.float32)
        for first in range(0, len(self.entry), _RUN):
            run = slice(first, first + _RUN)
            table = np.take(functions, self.entry[run], axis=0)
            residual = self.pixels[run] - self.levels[0][run, None]
            residual -= self.steps[0][run, None] * table[:, 0]
            np.einsum("ikj,ij->ki", table[:, 1:], residual, out=dots[:, run])
            np.einsum("ij,ij->i", residual, residual, out=squares[run])
        return dots, squares

    def _normal(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        step = np.diff(self.shared, axis=1)[:, 0]
        scale = [np.ones_like(step), np.ones_like(step), -step]
        big = np.empty((len(self.bounds), 3, 3))
        pull = np.empty((len(self.bounds), 3))
        entry = np.where(self.weight, self.entry, len(self.gram[0, 0]))  # the last entry is empty
        for a in range(3):
            pull[:, a] = scale[a] * np.add.reduceat(self.dots[a + 1] * self.weight, self.bounds, dtype=np.float64)
            for b in range(a, 3):
                each = np.append(self.gram[a, b], 0.0)[entry]
                big[:, a, b] = big[:, b, a] = scale[a] * scale[b] * np.add.reduceat(each, self.bounds)
        return big, pull


class _Joint(_Fit):
    """Several edges a window that share their light.

    Function 0 is 1; functions 3j+1, 3j+2, 3j+3 are the step, the slope, and the slope times u of edge j. Every
    term of the model is a short combination of these.
    """

    scout_steps, full_steps, settled, settled_step = 12, 8, 0.003, 0.003

    def _look(self, nearest: NDArray[np.int32]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        k, n = self.k, self.pixels.shape[1]
        rows: list[NDArray[np.float32]] = []
        self._gram: dict[tuple[int, int], Any] = {(0, 0): float(n)}
        for j in range(k):
            first, last = int(nearest[j].min()), int(nearest[j].max())
            entry = self.group * (last - first + 1) + (nearest[j] - first)
            offset = np.arange(n) * PHASES - np.arange(first, last + 1)[:, None]
            blur = self.blur[:, None, None]
            own = [f.reshape(-1, n) for f in _edge(offset / (PHASES * blur), blur)]
            rows += [f.astype(np.float32)[entry] for f in own]
            for a in range(3):
                self._gram[0, 3 * j + a + 1] = own[a].sum(axis=1)[entry]
                for b in range(a, 3):
                    self._gram[3 * j + a + 1, 3 * j + b + 1] = np.einsum("ij,ij->i", own[a], own[b])[entry]
        for i, j in itertools.combinations(range(k), 2):
            for a in range(3 * i + 1, 3 * i + 4):
                for b in range(3 * j + 1, 3 * j + 4):
                    self._gram[a, b] = np.einsum("ij,ij->i", rows[a - 1], rows[b - 1])
        residual = self.pixels - self.levels[0][:, None]
        for j in range(k):
            residual -= self.steps[j][:, None] * rows[3 * j]
        self.dots = [residual.sum(axis=1), *[np.einsum("ij,ij->i", f, residual) for f in rows]]
        place: list[_Term] = [[(3 * j + 2, -self.steps[j])] for j in range(k)]
        self.terms: list[_Term] = [[(0, 1.0), (1, -1.0)]]
        self.terms += [[(3 * j + 1, 1.0), (3 * j + 4, -1.0)] for j in range(k - 1)]
        self.terms += [[(3 * k - 2, 1.0)], [(3 * j + 3, -self.steps[j]) for j in range(k)]]
        self.inverse = _inverse(np.array([[self._product(a, b) for b in place] for a in place]))
        self.score = np.array([sum(w * self.dots[f] for f, w in a) for a in place])
        move = np.einsum("ijm,jm->im", self.inverse, self.score)
        self.cross = np.array([[self._product(a, b) for b in self.terms] for a in place])
        self.gain = np.einsum("ijm,jam->iam", self.inverse, self.cross)
        return move, np.einsum("ij,ij->i", residual, residual) - (move * self.score).sum(axis=0)

    def _product(self, one: _Term, other: _Term) -> Any:  # noqa: ANN401  (an array, or a number that stands for one)
        """Return the inner product of two combinations of functions in each row."""
        return sum(wa * wb * self._gram[min(a, b), max(a, b)] for a, wa in one for b, wb in other)

    def _normal(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        count = len(self.terms)
        big, pull = np.empty((len(self.bounds), count, count)), np.empty((len(self.bounds), count))
        for a, term in enumerate(self.terms):
            own = sum(v * self.dots[f] for f, v in term) - (self.gain[:, a] * self.score).sum(axis=0)
            pull[:, a] = np.add.reduceat(own * self.weight, self.bounds)
            for b in range(a, count):
                each = self._product(term, self.terms[b]) - (self.cross[:, a] * self.gain[:, b]).sum(axis=0)
                big[:, a, b] = big[:, b, a] = np.add.reduceat(each * self.weight, self.bounds)
        return big, pull


def _inverse(matrix: NDArray[Any]) -> NDArray[np.float64]:
    """Invert small matrices, shape (k, k, m); a singular one gives small numbers, not infinite ones."""
    k = len(matrix)
    matrix[range(k), range(k)] += 1e-4 * np.median(matrix[0, 0]) + 1e-12
    return np.asarray(np.moveaxis(np.linalg.inv(np.moveaxis(matrix, 2, 0)), 0, 2))


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
        change: NDArray[np.float64] = self.blur_var * np.bincount(self.group, weights=left)
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
