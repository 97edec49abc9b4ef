"""Rough edges of a known random process."""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import gamma, kv

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray


def autocovariance(lag: ArrayLike, sd: float, correlation_length: float, exponent: float) -> NDArray[np.float64]:
    """Return the autocovariance of the Palasantzas process.

    Parameters
    ----------
    lag : array_like
        Distance along the edge. [px]
    sd : float
        Standard deviation. [px]
    correlation_length : float
        Correlation length xi. [px]
    exponent : float
        Roughness exponent H, above 0. [1]

    Returns
    -------
    ndarray of float
        Autocovariance. [px2]

    Notes
    -----
    Transform of S(f) = A / (1 + (2 pi f xi)^2)^(H + 1/2), two-sided, f in cycles per length,
    A = 2 sqrt(pi) Gamma(H + 1/2) / Gamma(H) sd^2 xi; known elsewhere as the Matern form.

    References
    ----------
    .. [1] G. Palasantzas, Phys. Rev. B 48, 14472 (1993).
    """
    z = np.abs(np.asarray(lag, dtype=np.float64)) / correlation_length
    far = np.maximum(z, 1e-12)
    form = 2.0 ** (1.0 - exponent) / gamma(exponent) * far**exponent * kv(exponent, far)
    return np.asarray(sd * sd * np.where(z < far, 1.0, form))


@lru_cache(maxsize=16)
def _amplitudes(count: int, step: float, correlation_length: float, exponent: float) -> NDArray[np.float64]:
    half = autocovariance(np.arange(count // 2 + 1) * step, 1.0, correlation_length, exponent)
    spectrum = np.fft.fft(np.concatenate([half, half[-2:0:-1]])).real
    return np.asarray(np.sqrt(np.maximum(spectrum, 0.0) / count))


def rough_pair(
    count: int,
    step: float,
    *,
    sd: float,
    correlation_length: float,
    exponent: float,
    rho: float,
    rng: np.random.Generator,
) -> NDArray[np.float64]:
    """Draw the departures of two edges from their means.

    Parameters
    ----------
    count : int
        Points along an edge.
    step : float
        Distance between points. [px]
    sd : float
        Standard deviation of each edge. [px]
    correlation_length : float
        Correlation length. [px]
    exponent : float
        Roughness exponent H. [1]
    rho : float
        Correlation between the two edges, -1 to 1: 1 is pure wiggle, -1 pure width. [1]
    rng : numpy.random.Generator
        Source of chance.

    Returns
    -------
    ndarray of float, shape (2, count)
        Gaussian, mean zero, of exactly the stated covariance at the points; not periodic. [px]

    Notes
    -----
    Spectral synthesis on a circle longer than the edge by 30 correlation lengths, then cut.
    """
    need = count + int(np.ceil(30.0 * correlation_length / step))
    circle = 1 << (need - 1).bit_length()
    amplitudes = _amplitudes(circle, step, correlation_length, exponent)
    white = rng.standard_normal(circle) + 1j * rng.standard_normal(circle)
    both = np.fft.fft(amplitudes * white)[:count]
    return sd * np.stack([both.real, rho * both.real + np.sqrt(1.0 - rho * rho) * both.imag])
