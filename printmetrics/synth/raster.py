"""Outlines to a blurred, pixel-integrated picture, without sampling the ink on a grid first."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.special import ndtr

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

_REACH_SIGMAS = 6.5
_BLOCK_ROWS = 32
_NODES = 1024


def blurred_coverage(
    inked: Sequence[NDArray[np.float64]],
    bare: Sequence[NDArray[np.float64]],
    shape: tuple[int, int],
    blur: Sequence[tuple[float, float]],
    bands_per_row: int = 8,
) -> NDArray[np.float64]:
    """Return how much of each pixel is ink, as seen through the optics.

    Parameters
    ----------
    inked, bare : sequence of ndarray of float, shape (n, 2)
        Closed outlines of ink, and of holes in it, x and y, either way round. Inked ones may touch but not overlap;
        a hole must lie in ink. [px]
    shape : (int, int)
        Rows and columns of the picture.
    blur : sequence of (float, float)
        Weight and sigma of the Gaussians that add up to the optics' response; weights sum to 1. [1, px]
    bands_per_row : int, optional
        Bands into which a row is cut.

    Returns
    -------
    ndarray of float, shape (M, N)
        0 bare, 1 ink; averaged over the pixel's square.

    Notes
    -----
    An outline is cut where it passes from band to band. A piece adds, from its x to the right, its signed height
    times the step response of Gaussian and pixel, which is closed in x. Along y the Gaussian and pixel are summed
    over the bands: for bands a fraction of sigma high the sum equals the integral but for rounding.
    """
    pieces = [_pieces(outline, +1, bands_per_row) for outline in inked]
    pieces += [_pieces(outline, -1, bands_per_row) for outline in bare]
    image = np.zeros(shape)
    if pieces:
        band, x, height = (np.concatenate(parts) for parts in zip(*pieces, strict=True))
        order = np.argsort(band, kind="stable")
        for weight, sigma in blur:
            image += weight * _blur(band[order], x[order], height[order], shape, sigma, bands_per_row)
    return image


def _pieces(
    outline: NDArray[np.float64], sign: int, bands_per_row: int
) -> tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.float64]]:
    """Cut an outline at the bands' borders: band, x of the piece's middle [px], signed height [bands]."""
    start = outline * (1.0, bands_per_row) + (0.0, 0.5 * bands_per_row)
    run = np.roll(start, -1, axis=0) - start
    area = np.sum(start[:, 0] * run[:, 1] - run[:, 0] * start[:, 1])
    parts = np.maximum(1, np.ceil(np.abs(run[:, 0]) * bands_per_row)).astype(np.int64)
    edge, part = _ragged(parts)
    start, run = start[edge] + run[edge] * (part / parts[edge])[:, None], run[edge] / parts[edge][:, None]
    (xa, ya), (dx, dy) = start.T, run.T
    lowest = np.floor(np.minimum(ya, ya + dy)).astype(np.int64)
    edge, step = _ragged(np.floor(np.maximum(ya, ya + dy)).astype(np.int64) - lowest + 1)
    band = lowest[edge] + step
    y0, y1 = np.clip(ya[edge], band, band + 1), np.clip((ya + dy)[edge], band, band + 1)
    rising = y1 != y0
    edge, band, y0, y1 = edge[rising], band[rising], y0[rising], y1[rising]
    x = xa[edge] + (0.5 * (y0 + y1) - ya[edge]) / dy[edge] * dx[edge]
    # With y down, ink lies to the right of an edge that goes down where the outline's area counts negative.
    return band, x, (y1 - y0) * (-sign * np.sign(area))


def _ragged(counts: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Repeat each index `counts` times, and number the repeats from 0."""
    index = np.repeat(np.arange(len(counts)), counts)
    return index, np.arange(len(index)) - np.repeat(np.cumsum(counts) - counts, counts)


def _ramp(v: NDArray[np.float64], sigma: float) -> NDArray[np.float64]:
    """Integral of the Gaussian's distribution function."""
    z = v / sigma
    return np.asarray(v * ndtr(z) + sigma / np.sqrt(2 * np.pi) * np.exp(-0.5 * z * z))


def _blur(
    band: NDArray[np.int64],
    x: NDArray[np.float64],
    height: NDArray[np.float64],
    shape: tuple[int, int],
    sigma: float,
    bands_per_row: int,
) -> NDArray[np.float64]:
    rows, cols = shape
    sigma = max(sigma, 1e-9)  # no blur
    reach = int(np.ceil(_REACH_SIGMAS * sigma)) + 1
    low, high = np.searchsorted(band, (-reach * bands_per_row, (rows + reach) * bands_per_row))
    band, x, height = band[low:high], np.clip(x[low:high], -reach, cols - 1 + reach), height[low:high]
    first = np.floor(x).astype(np.int64) - reach
    # The pixel's step response is the first difference of the ramp; its own difference along x is local, and depends
    # on the place within a pixel only. Between the table's nodes it is linear to 1e-7.
    nodes = np.linspace(0.0, 1.0, _NODES + 1)
    table = np.diff(_ramp(np.arange(2 * reach + 4) - 1.5 - reach - nodes[:, None], sigma), n=2)
    share, node = np.modf((x - np.floor(x)) * _NODES)
    node = node.astype(np.int64)
    steps = table[node] * (height * (1.0 - share))[:, None]
    steps += table[node + 1] * (height * share)[:, None]
    width = cols + 4 * reach + 2
    flat = (band * width + first + 2 * reach)[:, None] + np.arange(2 * reach + 2)

    block = min(_BLOCK_ROWS, rows)
    y = (np.arange((block + 2 * reach) * bands_per_row) + 0.5) / bands_per_row - 0.5 - reach
    away = y - np.arange(block)[:, None]
    kernel = ndtr((away + 0.5) / sigma) - ndtr((away - 0.5) / sigma)
    kernel /= bands_per_row
    image = np.empty((rows, cols))
    for top in range(0, rows, block):
        bands = (top - reach) * bands_per_row
        low, high = np.searchsorted(band, (bands, bands + kernel.shape[1]))
        slopes = np.bincount(
            flat[low:high].ravel() - bands * width, steps[low:high].ravel(), minlength=kernel.shape[1] * width
        )
        seen = np.cumsum(kernel @ slopes.reshape(-1, width), axis=1)
        image[top : top + block] = seen[: rows - top, 2 * reach : 2 * reach + cols]
    return image
