"""The Palasantzas process: its spectrum, its autocovariance, and what a finite, sampled, blurred record shows of it."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft
from scipy.special import gamma, gammaln, kv

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

_SINGLE = 16  # periodogram ordinates from here up are averaged in bins
_BIN_RATIO = 1.2
_EXACT = 64  # ordinates below feel the removal of mean and line
_OVERSAMPLING = 4  # of the frequency grid on which the kernel is integrated
_HIGHEST = 8.5  # cycles per step up to which aliases are folded one by one
_TAPERED = 0.1  # share of the record, both ends together, under a cosine bell
_LONG = 40.0  # correlation lengths after which nothing is left of the autocovariance
_NODE_STEP = 0.05  # of the spectrum's nodes, in ln f


def psd_amplitude(hurst: ArrayLike) -> NDArray[np.float64]:
    """Return S(0) / (sigma^2 xi) of the process.

    Parameters
    ----------
    hurst : array_like
        Roughness exponent H, above 0.

    Returns
    -------
    ndarray of float
        2 sqrt(pi) Gamma(H + 1/2) / Gamma(H).

    References
    ----------
    .. [1] G. Palasantzas, Phys. Rev. B 48, 14472 (1993).

    Examples
    --------
    >>> psd_amplitude([0.5, 1.0]).round(5).tolist()
    [2.0, 3.14159]
    """
    h = np.asarray(hurst, dtype=np.float64)
    return np.asarray(2.0 * np.sqrt(np.pi) * np.exp(gammaln(h + 0.5) - gammaln(h)))


def palasantzas_psd(f: ArrayLike, sigma: ArrayLike, xi: ArrayLike, hurst: ArrayLike) -> NDArray[np.float64]:
    """Return the two-sided power spectral density per length.

    Parameters
    ----------
    f : array_like
        Frequency. [cycles/length]
    sigma, xi, hurst : array_like
        Standard deviation, correlation length and roughness exponent; broadcast against `f`.

    Returns
    -------
    ndarray of float
        S(f), whose integral over all f is sigma^2. [length of sigma squared times length]

    References
    ----------
    .. [1] G. Palasantzas, Phys. Rev. B 48, 14472 (1993), in one dimension.
    """
    sigma, xi, hurst = (np.asarray(v, dtype=np.float64) for v in (sigma, xi, hurst))
    shape = (1.0 + (2.0 * np.pi * np.asarray(f) * xi) ** 2) ** -(hurst + 0.5)
    return np.asarray(psd_amplitude(hurst) * sigma**2 * xi * shape)


def palasantzas_autocovariance(tau: ArrayLike, sigma: float, xi: float, hurst: float) -> NDArray[np.float64]:
    """Return the autocovariance, the Fourier transform of `palasantzas_psd`.

    Parameters
    ----------
    tau : array_like
        Lag. [length]
    sigma, xi, hurst : float
        Standard deviation, correlation length and roughness exponent.

    Returns
    -------
    ndarray of float
        C(tau). [length of sigma squared]

    Notes
    -----
    sigma^2 2^(1-H) / Gamma(H) (tau/xi)^H K_H(tau/xi), known as the Matern form; exponential for H = 1/2.
    """
    x = np.abs(np.asarray(tau, dtype=np.float64)) / xi
    near = np.maximum(x, 1e-12)
    rho = np.where(x > 0.0, 2.0 ** (1.0 - hurst) / gamma(hurst) * near**hurst * kv(hurst, near), 1.0)
    return np.asarray(sigma**2 * rho)


def sampled_autocovariance(
    n: int, step: float, sigma: float, xi: float, hurst: float, *, blur: float = 0.0
) -> NDArray[np.float64]:
    """Return the autocovariance at lags 0, step, ... of the process after Gaussian blur along the line.

    Parameters
    ----------
    n : int
        Number of lags.
    step : float
        Sampling step. [length]
    sigma, xi, hurst : float
        Of the process before blur.
    blur : float, optional
        Standard deviation of the blur. [length]

    Returns
    -------
    ndarray of float, shape (n,)
        C(m step). [length of sigma squared]

    Notes
    -----
    Blur multiplies the spectrum by exp(-4 pi^2 blur^2 f^2). The blurred spectrum is summed over its aliases
    on a grid fine enough for the lags not to wrap.
    """
    if blur == 0.0:
        return palasantzas_autocovariance(step * np.arange(n), sigma, xi, hurst)
    size = fft.next_fast_len(int(np.ceil(n + 25.0 * (xi + blur) / step)) + 1, real=True)
    f = np.arange(size // 2 + 1) / (size * step)
    total = np.zeros_like(f)
    zones = int(np.ceil(0.9 * step / blur)) + 1  # the blur leaves 1e-14 of the power beyond
    for zone in range(-zones, zones + 1):
        g = f + zone / step
        total += palasantzas_psd(g, sigma, xi, hurst) * np.exp(-((2.0 * np.pi * blur * g) ** 2))
    return np.asarray(fft.irfft(total, size)[:n] / step)


def expected_periodogram(
    autocovariance: NDArray[np.float64], step: float, *, noise: float = 0.0, noise_transfer: ArrayLike = 1.0
) -> NDArray[np.float64]:
    """Return the expectation of `periodogram`, leakage and aliasing included.

    Parameters
    ----------
    autocovariance : ndarray of float, shape (n,)
        At lags 0, step, ..., of the process as sampled, without noise.
    step : float
        Sampling step. [length]
    noise : float, optional
        Standard deviation of white noise of one sample.
    noise_transfer : array_like, shape (n // 2 + 1,) or scalar, optional
        Amplitude with which the sampling passes white noise on.

    Returns
    -------
    ndarray of float, shape (n // 2 + 1,)
        E P_j, j = 0 .. n // 2, of a series whose mean is not removed; removal changes j = 0 only.

    References
    ----------
    .. [1] A. Sykulski et al., The debiased Whittle likelihood, Biometrika 106 (2019).
    """
    n = autocovariance.size
    weighted = (1.0 - np.arange(n) / n) * autocovariance
    spectrum = 2.0 * fft.rfft(weighted).real - weighted[0]
    return np.asarray(step * (spectrum + (noise * np.asarray(noise_transfer)) ** 2))


def periodogram(series: NDArray[np.float64], step: float, *, taper: ArrayLike = 1.0) -> NDArray[np.float64]:
    """Return the two-sided periodogram per length of mean-removed series.

    Parameters
    ----------
    series : ndarray of float, shape (..., n)
        Equidistant samples.
    step : float
        Sampling step. [length]
    taper : array_like, shape (n,) or scalar, optional
        Multiplies the series after its mean is removed; mean square 1.

    Returns
    -------
    ndarray of float, shape (..., n // 2 + 1)
        (step / n) |sum u exp(-2 pi i j m / n)|^2 at frequencies j / (n step), j = 0 .. n // 2.
    """
    transform = fft.rfft((series - series.mean(axis=-1, keepdims=True)) * taper, axis=-1)
    return np.asarray((step / series.shape[-1]) * (transform.real**2 + transform.imag**2))


@lru_cache(maxsize=1)
def _unit_rule() -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return nodes and weights on (0, 1), dense near 0 where the autocovariance has its cusp."""
    x, w = np.polynomial.legendre.leggauss(48)
    x = (x + 1.0) / 2.0
    return x**4, 2.0 * w * x**3


def removed_share(length: float, xi: float, hurst: float, *, line: bool = False) -> float:
    """Return the share of the process variance that removing the mean over a finite length takes away.

    Parameters
    ----------
    length : float
        Evaluated length. [length]
    xi, hurst : float
        Of the process.
    line : bool, optional
        The best straight line is removed, not the mean alone.

    Returns
    -------
    float
        v; the variance that remains is sigma^2 (1 - v). For the mean alone, sigma^2 v is its variance.

    Notes
    -----
    v = 2 int_0^1 (1 - u) rho(u L) du for the mean; the slope adds 2 int_0^1 (1 - 3 u + 2 u^3) rho(u L) du. From 40
    correlation lengths on, where rho is below 1e-15, the integrals are moments of rho in closed form.

    Examples
    --------
    >>> round(removed_share(20.0, 1.0, 0.5), 5)
    0.095
    """
    if length > _LONG * xi:
        r = xi / length
        v = float(psd_amplitude(hurst)) * r
        mean = v - 4.0 * hurst * r**2
        return mean + v - 12.0 * hurst * r**2 + 32.0 * hurst * (hurst + 1.0) * r**4 if line else mean
    u, w = _unit_rule()
    weight = 1.0 - u
    if line:
        weight = weight + 1.0 - 3.0 * u + 2.0 * u**3
    rho = palasantzas_autocovariance(u * length, 1.0, xi, hurst)
    return float(2.0 * np.sum(w * weight * rho))


def relative_sd_of_sd(length: float, xi: float, hurst: float) -> float:
    """Return the relative standard deviation of a sample's sd, from the finite length alone.

    Parameters
    ----------
    length : float
        Evaluated length. [length]
    xi, hurst : float
        Of the process.

    Returns
    -------
    float
        sqrt(int rho^2 d tau / (2 L)); sqrt(xi / (2 L)) for H = 1/2.

    Examples
    --------
    >>> round(relative_sd_of_sd(50.0, 1.0, 0.5), 3)
    0.1
    """
    # Parseval: the integral of rho^2 is that of (S / sigma^2)^2.
    ratio = np.exp(gammaln(2.0 * hurst + 0.5) - gammaln(2.0 * hurst + 1.0)) / (2.0 * np.sqrt(np.pi))
    return float(np.sqrt(psd_amplitude(hurst) ** 2 * xi * ratio / (2.0 * length)))


@dataclass(frozen=True, slots=True, eq=False)
class BinKernel:
    """The linear map from a spectrum to the expected, binned periodogram of n samples; lengths in steps.

    Parameters
    ----------
    taper : ndarray of float, shape (n,)
        Multiplies the series before its periodogram; mean square 1.
    start : ndarray of int, shape (b,)
        First ordinate of each bin; the last bin ends below the Nyquist frequency.
    count : ndarray of float, shape (b,)
        Ordinates in each bin.
    f : ndarray of float, shape (q,)
        Nodes of the spectrum. [cycles/step]
    matrix : ndarray of float, shape (b + 1, q)
        Bins, and below them the whole variance, from the spectrum at the nodes; the last node stands for all that lies
        beyond.
    """

    taper: NDArray[np.float64]
    start: NDArray[np.int64]
    count: NDArray[np.float64]
    f: NDArray[np.float64]
    matrix: NDArray[np.float32]

    @property
    def weight(self) -> NDArray[np.float64]:
        """Independent ordinates in each bin; the taper makes neighbours alike."""
        return np.asarray(self.count * self.taper.size / np.sum(self.taper**4))

    def average(self, ordinates: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the mean of each bin.

        Parameters
        ----------
        ordinates : ndarray of float, shape (..., n // 2 + 1)
            A periodogram, or anything on its frequencies.

        Returns
        -------
        ndarray of float, shape (..., b)
            Means.
        """
        stop = int(self.start[-1] + self.count[-1])
        return np.asarray(np.add.reduceat(ordinates[..., :stop], self.start, axis=-1) / self.count)

    def spectrum(
        self, xi: NDArray[np.float64], hurst: NDArray[np.float64], blur: ArrayLike
    ) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Return what processes of unit variance show in the bins.

        Parameters
        ----------
        xi, hurst : ndarray of float
            Of each process; `hurst` has the shape (...) of the result, `xi` may be smaller. [steps, 1]
        blur : array_like
            Gaussian blur along the line, smaller likewise. [steps]

        Returns
        -------
        bins : ndarray of single-precision float, shape (..., b)
            Expected binned periodograms. [1/cycles per step]
        kept : ndarray of single-precision float, shape (...)
            Share of the variance that the blur leaves.
        """
        single = np.float32
        blurred = np.log1p((2.0 * np.pi * xi[..., None] * self.f) ** 2).astype(single)
        blurred = blurred * -(hurst + 0.5)[..., None].astype(single)
        blurred -= ((2.0 * np.pi * np.asarray(blur)[..., None] * self.f) ** 2).astype(single)
        np.exp(blurred, out=blurred)
        # Beyond the last node the spectrum is a power law, f^-(2H+1), unless the blur has ended it.
        blurred[..., -1] *= self.f[-1] / (2.0 * hurst)
        seen = (blurred.reshape(-1, self.f.size) @ self.matrix.T).reshape(*hurst.shape, -1)
        seen *= (psd_amplitude(hurst) * xi)[..., None].astype(single)
        return np.asarray(seen[..., :-1]), np.minimum(seen[..., -1], 1.0)


def _interpolation(x: NDArray[np.float64], size: int) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Return the four nodes and cubic weights for positions x in units of the node spacing."""
    base = np.clip(np.floor(x).astype(np.int64), 1, size - 3)
    t = x - base
    weights = np.stack(
        [
            -t * (t - 1.0) * (t - 2.0) / 6.0,
            (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0,
            -(t + 1.0) * t * (t - 2.0) / 2.0,
            (t + 1.0) * t * (t - 1.0) / 6.0,
        ]
    )
    return base + np.arange(-1, 3)[:, None], weights


def _responses(
    taper: NDArray[np.float64], start: NDArray[np.int64], count: NDArray[np.float64], *, line: bool
) -> NDArray[np.float64]:
    """Return how each bin answers to a wave of frequency k / (oversampling n), averaged over its phase."""
    n = taper.size
    size = _OVERSAMPLING * n
    edges = np.append(start, start[-1] + int(count[-1]))
    exact = min(int(np.searchsorted(start, _EXACT)), start.size)
    wave = taper * np.exp(2j * np.pi / n * np.arange(1, edges[exact])[:, None] * np.arange(n))
    ramp = np.arange(n) - (n - 1) / 2.0
    for trend in (np.ones(n), ramp) if line else (np.ones(n),):
        wave -= (wave @ trend)[:, None] * (trend / (trend @ trend))
    answer = np.abs(fft.fft(wave, size, axis=-1)) ** 2 / n
    both = (answer[:, : size // 2 + 1] + np.roll(answer[:, ::-1], 1, axis=-1)[:, : size // 2 + 1]) / 2.0
    low = np.add.reduceat(both, start[:exact] - 1, axis=0) / count[:exact, None]
    # Many ordinates at once: the window of lags that the bin's mean puts on the autocovariance.
    inside = (np.arange(n) >= edges[exact:-1, None]) & (np.arange(n) < edges[exact + 1 :, None])
    window = fft.irfft(np.abs(fft.rfft(taper, 2 * n)) ** 2, 2 * n)[:n] / n
    lags = fft.fft(inside / count[exact:, None], axis=-1).real * window
    high = 2.0 * fft.rfft(lags, size, axis=-1).real - lags[:, :1]
    return np.concatenate([low, high])


@lru_cache(maxsize=64)
def bin_kernel(n: int, *, line: bool = False) -> BinKernel:
    """Return the kernel for n samples, with the mean or the best line removed.

    Parameters
    ----------
    n : int
        Number of samples, at least 16.
    line : bool, optional
        The series' best straight line is removed, not its mean alone.

    Returns
    -------
    BinKernel
        Kept, so that only the first line of a given length pays for it.

    Notes
    -----
    Ordinates 1 to 15 stand alone, those above are averaged in bins 1.2 wide; j = 0 and the Nyquist ordinate
    are left out. A bin's expectation is the integral of the spectrum over all frequencies times the bin's
    response. What removal of the mean or the line takes away is exact for the ordinates that stand alone
    and left out above them, where it is below one in a thousand.

    Without the taper, a smooth or blurred edge's high ordinates would all be leakage of one number, the step from
    the record's end to its beginning, while the likelihood counts them as independent.
    """
    last = (n - 1) // 2
    ladder = _SINGLE * _BIN_RATIO ** np.arange(60)
    start = np.unique(np.concatenate([np.arange(1, _SINGLE), np.round(ladder)]).astype(np.int64))
    start = start[start <= last]
    count = np.diff(np.append(start, last + 1)).astype(np.float64)
    # A cosine at either end (Tukey's window).
    end = np.minimum(np.arange(n), np.arange(n)[::-1]) / (_TAPERED * (n - 1) / 2.0)
    taper = 0.5 - 0.5 * np.cos(np.pi * np.minimum(end, 1.0))
    taper *= np.sqrt(n / np.sum(taper**2))
    response = _responses(taper, start, count, line=line)

    size = _OVERSAMPLING * n
    lowest = 0.01 / n
    f = lowest * np.exp(_NODE_STEP * np.arange(int(np.ceil(np.log(_HIGHEST / lowest) / _NODE_STEP)) + 1))
    k = np.arange(int(size * _HIGHEST) + 1)
    node, weight = _interpolation(np.log(np.maximum(k / size, lowest) / lowest) / _NODE_STEP, f.size)
    weight = weight * (np.where((k == 0) | (k == k[-1]), 1.0, 2.0) / size)
    folded = k % size
    folded = np.minimum(folded, size - folded)
    flat = np.bincount((folded * f.size + node).ravel(), weight.ravel(), (size // 2 + 1) * f.size)
    table = flat.reshape(size // 2 + 1, f.size)
    matrix = np.full((start.size + 1, f.size + 1), 2.0)  # over many aliases the response averages to 1
    matrix[:-1, :-1] = response @ table
    matrix[-1, :-1] = table.sum(axis=0)
    return BinKernel(taper, start, count, np.append(f, _HIGHEST), matrix.astype(np.float32))
