"""From edge points in pixels to edges and widths along a line, normal to it, in lengths."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.interpolate import CubicSpline

if TYPE_CHECKING:
    from numpy.typing import NDArray

_ON_GRID = 0.02  # samples this close to the grid, in steps, are taken as they are
_NEAR = 0.8  # a grid point counts as measured when a sample lies within this many steps
_PHASES = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class Straightened:
    """Both edges of a line on one grid along it.

    Parameters
    ----------
    s : ndarray of float, shape (n,)
        Place along the line. [length]
    left, right : ndarray of float, shape (n,)
        Distance of either edge from the axis, along the line's normal; NaN where not measured. [length]
    step : float
        Grid interval. [length]
    slope : float
        Change of the across coordinate per unit along.
    transfer : ndarray of float, shape (2, n // 2 + 1)
        Amplitude with which the step onto the grid passes white noise on, at j / (n step), of either edge.
    """

    s: NDArray[np.float64]
    left: NDArray[np.float64]
    right: NDArray[np.float64]
    step: float
    slope: float
    transfer: NDArray[np.float64]

    @property
    def width(self) -> NDArray[np.float64]:
        """Local width. [length]"""
        return self.right - self.left

    @property
    def width_transfer(self) -> NDArray[np.float64]:
        """Amplitude with which noise is passed on into the local width."""
        return np.asarray(np.sqrt((self.transfer**2).mean(axis=0)))


def slope_of(points: NDArray[np.float64]) -> float:
    """Return the slope of a line's course.

    Parameters
    ----------
    points : ndarray of float, shape (2, M, 2)
        Along and across coordinate of the left and the right edge points; NaN where not measured. [length]

    Returns
    -------
    float
        Least-squares slope of the middle between the edges.
    """
    middle = (points[0] + points[1]) / 2
    middle = middle[np.isfinite(middle[:, 1])]
    along = middle[:, 0] - middle[:, 0].mean()
    return float(along @ middle[:, 1] / max(float(along @ along), 1e-30))


def straighten(points: NDArray[np.float64], slope: float, pitch: float) -> Straightened:
    """Turn edge points into edges along the line, paired along its normal.

    Parameters
    ----------
    points : ndarray of float, shape (2, M, 2)
        Along and across coordinate of the left and the right edge points; NaN where not measured. [length]
    slope : float
        Of the line's course; the normal follows from it.
    pitch : float
        Distance of two rows of points. [length]

    Returns
    -------
    Straightened
        On a grid of the rows' own interval along the line.
    """
    root = math.hypot(1.0, slope)
    step = pitch * root
    sides = []
    for along, across in (edge[np.isfinite(edge[:, 1])].T for edge in points):
        sides.append(((along + slope * across) / root, (across - slope * along) / root))
    # Half way between the edges' own ends, so that no row is lost to their being out of step.
    start, stop = (sum(float(s[end]) for s, _ in sides) / 2 for end in (0, -1))
    places = np.arange(max(round((stop - start) / step) + 1, 1), dtype=np.float64)
    grid = np.asarray(start + step * places)
    (left, left_gain), (right, right_gain) = (_on_grid(s, t, grid, step) for s, t in sides)
    return Straightened(
        s=grid, left=left, right=right, step=step, slope=slope, transfer=np.array([left_gain, right_gain])
    )


def _on_grid(
    s: NDArray[np.float64], t: NDArray[np.float64], grid: NDArray[np.float64], step: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Bring samples onto a grid by a cubic spline through them; keep gaps as gaps."""
    place = (s - grid[0]) / step
    nearest = np.rint(place)
    offset = place - nearest
    frequency = np.arange(len(grid) // 2 + 1) / len(grid)
    result = np.full(len(grid), np.nan)
    if np.abs(offset).max() < _ON_GRID:
        inside = (nearest >= 0) & (nearest < len(grid))
        result[nearest[inside].astype(np.intp)] = t[inside]
        return result, np.ones(len(frequency))
    order = np.argsort(s, kind="stable")
    s, t = s[order], t[order]
    # Two samples almost at one place would make the spline swing: a steep edge has them.
    apart = np.concatenate([[True], np.diff(s) > step / 4])
    s, t = s[apart], t[apart]
    place = np.searchsorted(s, grid)
    near = np.minimum(
        np.abs(grid - s[np.clip(place - 1, 0, len(s) - 1)]), np.abs(s[np.clip(place, 0, len(s) - 1)] - grid)
    )
    measured = near < _NEAR * step
    if len(s) > 3:  # noqa: PLR2004  (a cubic needs four points)
        result[measured] = CubicSpline(s, t)(grid[measured])
    else:
        result[measured] = np.interp(grid[measured], s, t)
    phases = np.quantile(offset % 1.0, (np.arange(_PHASES) + 0.5) / _PHASES)
    return result, np.sqrt(np.mean([_spline_gain(frequency, p) ** 2 for p in phases], axis=0))


def _spline_gain(frequency: NDArray[np.float64], phase: float) -> NDArray[np.float64]:
    """Return the amplitude response of cubic spline interpolation a fraction of a step off the samples."""
    turn = 2j * math.pi * frequency
    taps = {k: _cubic_b_spline(phase - k) for k in (-1, 0, 1, 2)}
    above = sum(tap * np.exp(turn * k) for k, tap in taps.items())
    return np.asarray(np.abs(above) / (2 / 3 + np.cos(2 * math.pi * frequency) / 3))


def _cubic_b_spline(x: float) -> float:
    x = abs(x)
    if x < 1:
        return 2 / 3 - x * x + x**3 / 2
    return (2 - x) ** 3 / 6 if x < 2 else 0.0  # noqa: PLR2004  (the spline's support)
