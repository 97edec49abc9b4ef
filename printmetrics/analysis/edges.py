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


def first_crossing(rows: NDArray[np.float32], low: NDArray[np.float64], high: NDArray[np.float64]) -> NDArray[Any]:
    """Return where each row steps from `low` to `high`, to a pixel.

    The sum of differences to mid-level is least there: the maximum-likelihood place of a sharp step in white
    noise, so it holds where a threshold would cross many times.

    Parameters
    ----------
    rows : ndarray of float32, shape (M, N)
        Pixels across the edge. [counts]
    low, high : ndarray of float, shape (M,)
        Levels left and right of it. [counts]

    Returns
    -------
    ndarray of float, shape (M,)
        Column; an edge between columns 3 and 4 is at 3.5. [px]
    """
    sign = np.where(high > low, 1.0, -1.0)
    mid = 0.5 * (low + high)
    total = np.cumsum((rows - mid[:, None].astype(np.float32)) * sign[:, None].astype(np.float32), axis=1)
    return np.argmin(total, axis=1) + 0.5


@dataclass(frozen=True, slots=True, kw_only=True)
class EdgeFit:
    """Edges found in a group of rows.

    Parameters
    ----------
    position : ndarray of float, shape (M, K)
        Column of each of the K edges in each row; NaN where it was rejected. [px]
    u_row : ndarray of float, shape (K,)
        Standard uncertainty of one row's position from pixel noise. [px]
    mean_covariance : ndarray of float, shape (K, K)
        Covariance of the edges' mean positions from pixel noise, shared terms included. [px^2]
    blur : float
        Gaussian sigma along the row, pixel aperture included. [px]
    levels : ndarray of float, shape (B, K + 1)
        Levels between the edges, left to right, in blocks of rows. [counts]
    noise : float
        sd of a pixel. [counts]
    misfit : ndarray of float, shape (M,)
        rms residual of each row over the noise.
    """

    position: NDArray[np.float64]
    u_row: NDArray[np.float64]
    mean_covariance: NDArray[np.float64]
    blur: float
    levels: NDArray[np.float64]
    noise: float
    misfit: NDArray[np.float64]


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
        Picture. [counts]
    rows, first : ndarray of int, shape (M,)
        Row and first column; must lie inside.
    n : int
        Number of columns.

    Returns
    -------
    ndarray of float32, shape (M, n)
        Pixels. [counts]
    """
    flat = image.reshape(-1) if image.flags.c_contiguous else np.ascontiguousarray(image).reshape(-1)
    start = rows * image.shape[1] + first
    return flat[start[:, None] + np.arange(n)].astype(np.float32)


class _Functions:
    """The edge's step, slope and slope times offset at multiples of 1/PHASES px, and their inner products.

    Function 0 is 1; functions 3j+1, 3j+2, 3j+3 are the step, the slope, and the slope times (x - x0) / blur of
    edge j. Every model term is a short combination of these, so a row's normal equations are looked up, not summed.
    """

    def __init__(self, n: int, nearest: NDArray[np.int32], blur: float) -> None:
        k, self.m = nearest.shape
        self.names = range(1 + 3 * k)
        self.rows: list[NDArray[np.float32]] = []
        self._gram: dict[tuple[int, int], NDArray[np.float64] | float] = {(0, 0): float(n)}
        for j in range(k):
            first, last = int(nearest[j].min()), int(nearest[j].max())
            entry = nearest[j] - first
            u = (np.arange(n) * PHASES - np.arange(first, last + 1)[:, None]) / (PHASES * blur)
            slope = np.exp(-0.5 * u * u) / (math.sqrt(2 * math.pi) * blur)
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

    def product(self, one: _Term, other: _Term) -> NDArray[np.float64] | float:
        """Return the inner product of two combinations of functions in each row."""
        return sum(wa * wb * self._gram[min(a, b), max(a, b)] for a, wa in one for b, wb in other)


_Term = list[tuple[int, Any]]


def _blocks(n_rows: int) -> NDArray[np.intp]:
    count = max(1, round(n_rows / ROWS_PER_BLOCK))
    return (np.arange(n_rows) * count) // n_rows


def _to_rows(per_block: NDArray[np.float64], block: NDArray[np.intp]) -> NDArray[np.float32]:
    """Interpolate block values linearly to rows."""
    count = len(per_block)
    if count == 1:
        return np.broadcast_to(per_block.astype(np.float32), (len(block), per_block.shape[1]))
    centre = (np.arange(count) + 0.5) * len(block) / count - 0.5
    place = np.clip(np.arange(len(block)), centre[0], centre[-1])
    low = np.clip(np.searchsorted(centre, place, side="right") - 1, 0, count - 2)
    part = ((place - centre[low]) / (centre[low + 1] - centre[low]))[:, None]
    return ((1 - part) * per_block[low] + part * per_block[low + 1]).astype(np.float32)


def fit_edges(
    pixels: NDArray[np.float32],
    start: NDArray[np.float64],
    levels: NDArray[np.float64],
    blur: float,
    *,
    iterations: int = 4,
    usable: NDArray[np.bool_] | None = None,
    fixed_blur: bool = False,
) -> EdgeFit:
    """Fit K error-function edges in each row, with levels and blur shared.

    Parameters
    ----------
    pixels : ndarray of float32, shape (M, N)
        Rows across the edges, each from its own first column. [counts]
    start : ndarray of float, shape (M, K)
        First guess, in columns of `pixels`. [px]
    levels : ndarray of float, shape (K + 1,)
        First guess of the levels, left to right. [counts]
    blur : float
        First guess of the Gaussian sigma. [px]
    iterations : int, optional
        Gauss-Newton steps.
    usable : ndarray of bool, shape (M,), optional
        Rows that may be used for the shared terms.
    fixed_blur : bool, optional
        Keep the blur as given: for lines too narrow to tell it from their width.

    Returns
    -------
    EdgeFit
        Positions in columns of `pixels`.
    """
    n_rows, n = pixels.shape
    k = start.shape[1]
    block = _blocks(n_rows)
    bounds = np.searchsorted(block, np.arange(int(block[-1]) + 1))
    shared = np.tile(levels.astype(np.float64), (len(bounds), 1))
    x = start.T.copy()
    weight = np.ones(n_rows) if usable is None else usable.astype(np.float64)
    dof = max(n - k, 1)
    worst = 1 + _MISFIT_SIGMAS * math.sqrt(2 / dof)
    for turn in range(iterations + 1):
        nearest = np.clip(np.rint(x * PHASES), -PHASES, (n + 1) * PHASES).astype(np.int32)
        functions = _Functions(n, nearest, blur)
        row_levels = _to_rows(shared, block)
        steps = np.diff(row_levels, axis=1).T
        residual = pixels - row_levels[:, :1]
        for j in range(k):
            residual -= steps[j][:, None] * functions.rows[3 * j]
        dots = functions.dots(residual)
        place: list[_Term] = [[(3 * j + 2, -steps[j])] for j in range(k)]
        terms: list[_Term] = [[(0, 1.0), (1, -1.0)]]
        terms += [[(3 * j + 1, 1.0), (3 * j + 4, -1.0)] for j in range(k - 1)]
        terms += [[(3 * k - 2, 1.0)], [(3 * j + 3, -steps[j]) for j in range(k)]]
        inverse = _inverse([[functions.product(a, b) for b in place] for a in place])
        score = [sum(w * dots[f] for f, w in a) for a in place]
        move = np.einsum("ijm,jm->im", inverse, np.array(score))
        # The positions are eliminated: what is left of the shared terms' normal equations is summed over rows.
        cross = [[functions.product(a, b) for b in terms] for a in place]
        gain = np.einsum("ijm,jam->iam", inverse, np.array(cross))
        squares = np.einsum("ij,ij->i", residual, residual) - sum(move[i] * score[i] for i in range(k))
        typical = float(np.median(squares[weight > 0] if weight.any() else squares))
        noise = math.sqrt(max(typical, 1e-12) / (dof * (1 - 2 / (9 * dof)) ** 3))
        misfit = np.sqrt(np.maximum(squares, 0.0) / dof) / noise
        # A row hit by a defect has no say in what is shared.
        limit = max(worst, (_MISFIT_STEP * float(np.ptp(row_levels, axis=1).mean()) / noise) ** 2)
        good = (misfit**2 < limit) & (np.abs(move) < 2 * blur + 1).all(axis=0)
        w = weight * good if (weight * good).sum() > n_rows / 4 else weight
        big = np.empty((len(bounds), k + 2, k + 2))
        for a in range(k + 2):
            for b in range(a, k + 2):
                each = functions.product(terms[a], terms[b]) - sum(cross[i][a] * gain[i][b] for i in range(k))
                big[:, a, b] = big[:, b, a] = np.add.reduceat(each * w, bounds)
        shared_fit = _SharedFit(big, np.add.reduceat(w, bounds), fixed_blur=fixed_blur)
        if turn == iterations:
            break
        pull = np.stack(
            [sum(v * dots[f] for f, v in a) - sum(gain[i][n_a] * score[i] for i in range(k))
             for n_a, a in enumerate(terms)]
        )
        d_levels, d_blur = shared_fit.solve(np.add.reduceat(pull * w, bounds, axis=1).T)
        d_blur = min(max(d_blur, -0.4 * blur, MIN_BLUR_PX - blur), 0.6 * blur, MAX_BLUR_PX - blur)
        change = np.vstack([d_levels.T[:, block], np.full(n_rows, d_blur)])
        answer = np.einsum("iam,am->im", gain, change)
        x = nearest / PHASES + np.clip(move - answer, -1.5 * blur, 1.5 * blur)
        shared = shared + d_levels
        blur += d_blur
    position = nearest / PHASES + np.clip(move, -1.5 * blur, 1.5 * blur)
    inside = ((position > -0.5) & (position < n - 0.5)).all(axis=0)  # noqa: PLR2004  (pixel borders)
    keep = good & inside & (np.abs(steps).min(axis=0) > 0.05 * np.ptp(levels))
    position[:, ~keep] = np.nan
    used = w * keep
    total = max(float(used.sum()), 1.0)
    own = (inverse * used).sum(axis=2) / total**2
    mean_gain = np.add.reduceat(gain * used, bounds, axis=2) / total
    u_row = np.sqrt(np.median(inverse[range(k), range(k)], axis=1)) * noise
    return EdgeFit(
        position=position.T,
        u_row=u_row,
        mean_covariance=(own + shared_fit.carried(mean_gain)) * noise**2,
        # Each row's position follows its noise, which makes the aligned edge look sharper by just that variance.
        blur=blur if fixed_blur else math.hypot(blur, float(u_row.mean())),
        levels=shared,
        noise=noise,
        misfit=misfit,
    )


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
    """Normal equations of the levels of each block and the one blur, the positions eliminated."""

    def __init__(self, big: NDArray[np.float64], rows: NDArray[np.float64], *, fixed_blur: bool) -> None:
        n_levels = big.shape[1] - 1
        self.empty = rows < _FEWEST_ROWS
        scale = np.trace(big[:, :-1, :-1], axis1=1, axis2=2)[:, None, None]
        self.levels_cov = np.linalg.inv(big[:, :-1, :-1] + np.eye(n_levels) * (1e-9 * scale + 1e-12))
        self.levels_cov[self.empty] = 0.0
        self.to_blur = np.einsum("bac,bc->ba", self.levels_cov, big[:, :-1, -1])
        info = float(np.sum(big[:, -1, -1] - np.einsum("ba,ba->b", big[:, :-1, -1], self.to_blur)))
        self.blur_var = 0.0 if fixed_blur or info <= 0 else 1.0 / info

    def solve(self, pull: NDArray[np.float64]) -> tuple[NDArray[np.float64], float]:
        """Return the change of each block's levels, and of the blur."""
        change = self.blur_var * float(np.sum(pull[:, -1] - np.einsum("ba,ba->b", pull[:, :-1], self.to_blur)))
        return np.einsum("bac,bc->ba", self.levels_cov, pull[:, :-1]) - self.to_blur * change, change

    def carried(self, gain: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the covariance of the mean positions that comes from the shared terms."""
        from_levels = np.einsum("iab,bac,jcb->ij", gain[:, :-1], self.levels_cov, gain[:, :-1])
        slope = np.sum(gain[:, -1] - np.einsum("iab,ba->ib", gain[:, :-1], self.to_blur), axis=1)
        return np.asarray(from_levels + np.outer(slope, slope) * self.blur_var)
