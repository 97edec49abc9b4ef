"""The process behind a measured edge or width: fitted, freed of noise and blur, and what it says of the mean."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy import fft
from scipy.special import polygamma, psi

from printmetrics.analysis.process import (
    BinKernel,
    bin_kernel,
    palasantzas_psd,
    periodogram,
    psd_amplitude,
    relative_sd_of_sd,
    removed_share,
)
from printmetrics.errors import FeatureError
from printmetrics.flags import Flag

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

FEWEST_SAMPLES = 32
"""Shorter series are refused."""
MOST_MISSING = 0.10
"""Share of missing samples above which a fit is marked `gappy`."""
SHORT_LENGTHS = 20.0
"""Correlation lengths below which a record is short."""

_H_BOUNDS = (0.15, 1.25)
_H_PRIOR = (0.6, 0.3)
_ITERATIONS = (7, 3)  # on the first grid, on lattices
_LATTICES = 12
_FEWEST_POINTS = 6.0  # that share the posterior before a lattice is trusted
_MANY = 5.0  # correlation lengths from which the length is no surprise
_LOOSE = 0.05  # precision of the prior on ln sigma^2
_VAGUE_NOISE = (-2.0, 3.0)  # ln of the noise variance over the series' variance
_WORST_DOF = 2.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Process:
    """A fitted Palasantzas process; lengths in the unit of `step`.

    Parameters
    ----------
    sigma, xi, hurst : float
        Standard deviation, correlation length and roughness exponent of the endless, sharp, noise-free line. All
        fitted figures are means of their posterior, those of sigma, xi, noise and S(0) in logarithms.
    noise : float
        Standard deviation of one edge point caused by noise.
    u_sigma, u_xi, u_hurst, u_noise : float
        Their standard uncertainties.
    s0 : float
        S(0) of the process. [length of sigma squared times length]
    mean_variance : float
        Variance of the mean over `length`, as it stands in a Student interval with `mean_dof`.
    mean_dof : float
        Effective degrees of freedom of `mean_variance`.
    u_ln_s0 : float
        Standard uncertainty of ln S(0).
    kept, u_kept : float
        Share of sigma^2 which the blur along the line leaves, and its standard uncertainty.
    blur, step, length : float
        Of the series fitted; length is samples times step.
    n, series : int
        Samples of one series, number of series.
    sample_noise : float
        Standard deviation of one sample caused by noise: of `noise_multiplicity` edge points, passed by the transfer.
    line_removed : bool
        The series had their best straight line removed.
    missing : float
        Share of samples that were missing.
    """

    sigma: float
    xi: float
    hurst: float
    noise: float
    u_sigma: float
    u_xi: float
    u_hurst: float
    u_noise: float
    s0: float
    u_ln_s0: float
    mean_variance: float
    mean_dof: float
    kept: float
    u_kept: float
    blur: float
    step: float
    length: float
    n: int
    series: int
    sample_noise: float
    line_removed: bool
    missing: float

    @property
    def short(self) -> bool:
        """Whether the length is below 20 correlation lengths."""
        return self.length < SHORT_LENGTHS * self.xi

    @property
    def gappy(self) -> bool:
        """Whether more than a tenth of the samples was missing."""
        return self.missing > MOST_MISSING

    @property
    def resolved(self) -> bool:
        """Whether roughness stands out of the noise: sigma is known to better than a third."""
        return self.u_sigma < self.sigma / 3.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Roughness:
    """The sd of the true edge or width over the measured length.

    Parameters
    ----------
    sd : float
        Freed of noise and of blur along the line.
    raw : float
        As seen.
    u_noise : float
        Standard uncertainty of `sd` as a statement on this very piece.
    u_sampling : float
        What is added for a statement on such pieces in general.
    """

    sd: float
    raw: float
    u_noise: float
    u_sampling: float


def fit_spectrum(  # noqa: PLR0913  (a series and all that has been done to it)
    series: ArrayLike,
    step: float,
    *,
    blur: float = 0.0,
    noise_expected: float | None = None,
    noise_relative_u: float = 0.1,
    noise_multiplicity: int = 1,
    noise_transfer: ArrayLike = 1.0,
    line_removed: bool = False,
) -> Process:
    """Fit the Palasantzas process plus white noise to equally long series of one kind.

    Parameters
    ----------
    series : array_like, shape (n,) or (m, n)
        Positions of an edge, or widths, at equidistant places; NaN where a sample was rejected.
    step : float
        Sampling step along the line. [length]
    blur : float, optional
        Standard deviation of the Gaussian blur along the line. [length]
    noise_expected : float, optional
        Standard deviation of one edge point that pixel noise predicts.
    noise_relative_u : float, optional
        Relative standard uncertainty of `noise_expected`.
    noise_multiplicity : int, optional
        Independent edge points in one sample: 1 for an edge, 2 for a width.
    noise_transfer : array_like, shape (n // 2 + 1,) or scalar, optional
        Amplitude with which resampling of the edge passes white noise on, at frequencies j / (n step).
    line_removed : bool, optional
        The series are residuals about their best straight line, not about their mean.

    Returns
    -------
    Process
        What the data and the priors say, with standard uncertainties.

    Raises
    ------
    FeatureError
        When fewer than 32 samples are left.

    Notes
    -----
    Whittle likelihood [1]_ of the binned periodogram with its expectation, leakage and aliasing included [2]_,
    integrated over xi and H on a lattice and over sigma and noise by Laplace's method. Priors: ln sigma^2 all but
    uniform; ln xi uniform from half a step up, times exp(-(5 xi / L)^2 / 2), below a third of the length; H normal,
    0.6 +- 0.3, within 0.15 .. 1.25; noise log-normal about `noise_expected`, or all but uniform. They are our own
    choice, made so that the intervals of `u_mean` cover.

    The ends are tapered over a twentieth of the length each, or leakage would drown a smooth edge's high frequencies.

    Missing samples are bridged by straight lines, which carry no noise of their own. With 5 % missing in clumps this
    moves sigma, noise and S(0) by a few per cent at most; above 10 % the fit says `gappy`.

    References
    ----------
    .. [1] P. Whittle (1953).
    .. [2] A. Sykulski et al., The debiased Whittle likelihood, Biometrika 106 (2019).
    """
    data = np.atleast_2d(np.asarray(series, dtype=np.float64))
    n = fft.prev_fast_len(data.shape[1], real=True)  # a kernel serves many lines, and the transform is fast
    data = data[:, (data.shape[1] - n) // 2 :][:, :n]
    valid = np.isfinite(data)
    if n < FEWEST_SAMPLES or valid.sum(axis=1).min() < FEWEST_SAMPLES:
        msg = f"{int(valid.sum(axis=1).min())} samples along the line; its roughness needs at least {FEWEST_SAMPLES}"
        raise FeatureError(msg, Flag.SHORT_SAMPLING)
    kernel = bin_kernel(n, line=line_removed)
    filled = _bridge(data, valid)
    if line_removed:  # of the full length; what is left over the piece fitted is removed here
        filled = _without_line(filled)
    power = kernel.average(periodogram(filled, 1.0, taper=kernel.taper).mean(axis=0))
    scale = float(np.var(filled))
    if scale == 0.0:  # drawn, not taken: rounding stands in for noise
        scale = (1e-9 * step) ** 2
        power = np.full_like(power, scale)
    transfer = np.atleast_1d(np.asarray(noise_transfer, dtype=np.float64)) ** 2
    frequency = np.arange(n // 2 + 1) / n
    transfer = np.interp(frequency, np.linspace(0.0, 0.5, transfer.size), transfer)
    floor = kernel.average(transfer) * valid.mean()
    prior = _VAGUE_NOISE
    if noise_expected:
        prior = (float(np.log(noise_multiplicity * noise_expected**2 / scale)), 2.0 * noise_relative_u)
    likelihood = _Likelihood(kernel, power / scale, kernel.weight * data.shape[0], floor, blur / step, prior)
    mean, u = _posterior(likelihood, n)
    root = np.sqrt(scale)
    sigma, xi, noise = root * np.exp(mean[0] / 2.0), step * np.exp(mean[1]), root * np.exp(mean[3] / 2.0)
    noise /= np.sqrt(noise_multiplicity)
    dof = max(_WORST_DOF, _dof(u[5] ** 2))
    return Process(
        sigma=float(sigma),
        xi=float(xi),
        hurst=float(mean[2]),
        noise=float(noise),
        u_sigma=float(sigma * u[0] / 2.0),
        u_xi=float(xi * u[1]),
        u_hurst=float(u[2]),
        u_noise=float(noise * u[3] / 2.0),
        s0=float(scale * step * np.exp(mean[4])),
        u_ln_s0=float(u[4]),
        mean_variance=float(scale * np.exp(mean[5] + psi(dof / 2.0)) * 2.0 / dof),
        mean_dof=dof,
        kept=float(mean[6]),
        u_kept=float(u[6]),
        blur=blur,
        step=step,
        length=n * step,
        n=n,
        series=data.shape[0],
        sample_noise=float(root * np.exp(mean[3] / 2.0) * np.sqrt(transfer.mean())),
        line_removed=line_removed,
        missing=float(1.0 - valid.mean()),
    )


def _without_line(data: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return series without their best straight lines."""
    ramp = np.arange(data.shape[-1]) - (data.shape[-1] - 1) / 2.0
    slope = data @ ramp / (ramp @ ramp)
    return np.asarray(data - data.mean(axis=-1, keepdims=True) - slope[..., None] * ramp)


def _bridge(data: NDArray[np.float64], valid: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Return series with gaps filled by straight lines."""
    if valid.all():
        return data
    filled = data.copy()
    place = np.arange(data.shape[1])
    for row, good in zip(filled, valid, strict=True):
        # Each end of a bridge rests on three samples, or its noise would pass for slow roughness.
        known = np.pad(row[good], 1, mode="edge")
        smooth = (known[:-2] + known[1:-1] + known[2:]) / 3.0
        row[~good] = np.interp(place[~good], place[good], smooth)
    return filled


@dataclass(frozen=True, slots=True)
class _Likelihood:
    """The binned Whittle likelihood for processes of given xi and H; powers over the series' variance."""

    kernel: BinKernel
    power: NDArray[np.float64]
    weight: NDArray[np.float64]
    floor: NDArray[np.float64]
    blur: float
    noise_prior: tuple[float, float]

    def integrate(
        self, ln_xi: NDArray[np.float64], hurst: NDArray[np.float64], start: NDArray[np.float64], iterations: int
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Return evidence, ln sigma^2 and ln noise^2, their covariance, and the variance the blur leaves.

        Shapes (m,), (2, m), (3, m), (m,). `start` holds first guesses, shape (2, m).
        """
        bins, kept = self.kernel.spectrum(np.exp(ln_xi), hurst, self.blur)
        centre, width = self.noise_prior
        x = start
        for left in range(iterations, -1, -1):
            rough = bins * np.exp(x[0])[:, None]
            expected = rough + self.floor * np.exp(x[1])[:, None]
            share = rough / expected
            ratio = self.power / expected
            both = share @ self.weight
            info_aa = share**2 @ self.weight
            info_an = both - info_aa
            info_nn = self.weight.sum() - 2.0 * both + info_aa + width**-2
            info_aa = info_aa + _LOOSE
            determinant = info_aa * info_nn - info_an**2
            if left == 0:
                break
            pull = (ratio - 1.0) * self.weight
            slope_a = np.sum(share * pull, axis=1)
            slope_n = pull.sum(axis=1) - slope_a - (x[1] - centre) / width**2
            slope_a -= _LOOSE * x[0]
            move = np.stack([info_nn * slope_a - info_an * slope_n, info_aa * slope_n - info_an * slope_a])
            x = x + np.clip(move / determinant, -1.5, 1.5)
        evidence = -(np.log(expected) + ratio) @ self.weight - 0.5 * np.log(determinant)
        evidence -= 0.5 * (_LOOSE * x[0] ** 2 + ((x[1] - centre) / width) ** 2)
        evidence -= 0.5 * (
            ((hurst - _H_PRIOR[0]) / _H_PRIOR[1]) ** 2 + (_MANY * np.exp(ln_xi) / self.kernel.taper.size) ** 2
        )
        return evidence, x, np.stack([info_nn, -info_an, info_aa]) / determinant, kept


def _posterior(likelihood: _Likelihood, n: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return mean and standard deviation of what is wanted, in the order of `_wanted`."""
    low, high = np.log(0.5), np.log(n / 3.0)
    h_low, h_high = _H_BOUNDS
    axis_xi = np.linspace(low, high, max(4, int(np.ceil((high - low) / 0.6))))
    ln_xi, hurst = (a.ravel() for a in np.meshgrid(axis_xi, np.linspace(h_low + 0.1, h_high - 0.1, 4)))
    start = np.repeat([[np.log(0.5)], [likelihood.noise_prior[0]]], ln_xi.size, axis=1)
    grid = np.linspace(-2.6, 2.6, 7)
    unit = np.stack([a.ravel() for a in np.meshgrid(grid, grid)])
    root, centre = np.eye(2), np.zeros(2)
    for attempt in range(_LATTICES + 1):
        evidence, x, cov, kept = likelihood.integrate(ln_xi, hurst, start, _ITERATIONS[attempt > 0])
        weight, heat = _tempered(evidence)
        points = np.stack([ln_xi, hurst])
        mean = points @ weight
        off = points - mean[:, None]
        spread = (off * weight) @ off.T
        drift = np.abs(np.linalg.solve(root, mean - centre)).max() if attempt else 0.0
        wide = attempt > 0 and np.any(np.diag(spread) > 1.6 * np.diag(root @ root.T))
        if (attempt > 0 and heat == 1.0 and drift < 1.0 and not wide) or attempt == _LATTICES:
            break
        if drift < 1.0:  # else the lattice moves on as it is
            root = np.linalg.cholesky(spread / np.sqrt(heat) + np.diag([1e-6, 1e-6]))
        centre = mean
        new = root @ unit
        ln_xi, hurst = new + mean[:, None]
        inside = (ln_xi > low) & (ln_xi < high) & (hurst > h_low) & (hurst < h_high)
        ln_xi, hurst = ln_xi[inside], hurst[inside]
        # sigma and noise follow xi and H along the ridge.
        along = np.linalg.solve(spread + np.diag([1e-9, 1e-9]), (off * weight) @ x.T).T
        start = (x @ weight)[:, None] + along @ new[:, inside]
    amplitude = psd_amplitude(hurst)
    ln_s0 = x[0] + ln_xi + np.log(amplitude)
    # The variance of the mean, v = S(0)/L - 4 H xi^2/L^2 + ..., in a form that stays positive.
    v = amplitude * np.exp(ln_xi) / n
    ln_mean = x[0] + np.log(v / (1.0 + 4.0 * hurst * v / amplitude**2))
    values = np.stack([x[0], ln_xi, hurst, x[1], ln_s0, ln_mean, kept])
    mean = values @ weight
    variance = (values - mean[:, None]) ** 2 @ weight
    variance[[0, 4, 5]] += cov[0] @ weight
    variance[3] += cov[2] @ weight
    return mean, np.sqrt(variance)


def _tempered(evidence: NDArray[np.float64]) -> tuple[NDArray[np.float64], float]:
    """Return weights, flattened until several points share them: a narrow ridge is closed in on step by step."""
    relative = evidence - evidence.max()
    heat = 1.0
    while True:
        weight = np.exp(relative / heat)
        weight /= weight.sum()
        if weight @ weight < 1.0 / _FEWEST_POINTS:
            return weight, heat
        heat *= 1.5


def _dof(variance: float) -> float:
    """Return the degrees of freedom of a variance whose logarithm has the given variance."""
    half = 1.0 / variance + 0.5
    for _ in range(4):  # Newton on trigamma(dof / 2) = variance, both in logarithms
        slope = half * polygamma(2, half) / polygamma(1, half)
        half *= np.exp(np.clip(np.log(variance / polygamma(1, half)) / slope, -1.0, 1.0))
    return float(2.0 * half)


def u_mean(process: Process, length: float) -> tuple[float, float]:
    """Return how well the mean over a length tells the mean of the endless process.

    Parameters
    ----------
    process : Process
        The fit.
    length : float
        Length averaged over. [length]

    Returns
    -------
    u : float
        Standard uncertainty.
    dof : float
        Its effective degrees of freedom; mean +- t(dof) u is the interval.

    Notes
    -----
    sigma sqrt(v), v of `removed_share`; about sqrt(S(0) / L). What is left open by the fit enters as degrees of
    freedom: the posterior of ln u^2 is matched in mean and variance by that of a scaled inverse chi-squared.
    """
    own = removed_share(process.length, process.xi, process.hurst)
    ratio = removed_share(length, process.xi, process.hurst) / own
    return float(np.sqrt(process.mean_variance * ratio)), process.mean_dof


def unbiased_sd(series: ArrayLike, process: Process) -> Roughness:
    """Return the sd of the true edge or width over the measured length, with its uncertainty.

    Parameters
    ----------
    series : array_like, shape (n,)
        The series as seen, NaN where rejected; its mean is removed here, or its line where the process was fitted so.
    process : Process
        The fit to it, or to it and its like.

    Returns
    -------
    Roughness
        Sd about the mean or about the best line.

    Notes
    -----
    The variance as seen, minus that of the noise, never below zero, times (1 - v) / (k - v): k is the share of the
    process variance that the blur leaves and v the share that the removal of mean or line has taken, which blur does
    not touch.
    """
    row = np.asarray(series, dtype=np.float64)
    valid = np.isfinite(row)
    place = np.flatnonzero(valid) - (row.size - 1) / 2.0
    row = row[valid]
    rest = row - np.polyval(np.polyfit(place, row, 1), place) if process.line_removed else row - row.mean()
    fitted = 2 if process.line_removed else 1
    variance = float(rest @ rest) / row.size
    noise = process.sample_noise**2
    length = place.size * process.step
    lost = removed_share(length, process.xi, process.hurst, line=process.line_removed)
    gain = (1.0 - lost) / max(process.kept - lost, 0.05)
    freed = max(variance - noise * (1.0 - fitted / row.size), 0.0)
    sd = np.sqrt(gain * freed)
    u_floor = 2.0 * noise * process.u_noise / process.noise  # the noise is never zero
    u_chance = np.sqrt((2.0 * noise**2 + 4.0 * noise * freed) / row.size)
    u_gain = freed * process.u_kept / max(process.kept - lost, 0.05)
    u_variance = gain * np.sqrt(u_floor**2 + u_chance**2 + u_gain**2)
    # A root near zero: the interval of the variance itself, taken through the root.
    u_noise = np.sqrt(sd**2 + u_variance) - sd if sd**2 < u_variance else u_variance / (2.0 * sd)
    u_sampling = sd * relative_sd_of_sd(length, process.xi, process.hurst)
    u_noise = np.hypot(u_noise, u_sampling * np.sqrt(1.0 - valid.mean()))  # what the rejected rows would have said
    return Roughness(sd=float(sd), raw=float(np.sqrt(variance)), u_noise=float(u_noise), u_sampling=float(u_sampling))


def amplitude_filter(
    series: ArrayLike, process: Process, *, average_over: float = 0.0, noise_transfer: ArrayLike = 1.0
) -> tuple[NDArray[np.float64], float]:
    """Return a series whose spectrum is that of the true, locally averaged one.

    Parameters
    ----------
    series : array_like, shape (n,)
        The series as seen, NaN where rejected.
    process : Process
        The fit to it.
    average_over : float, optional
        Length over which the local value is meant to be averaged; 0 for none. [length]
    noise_transfer : array_like, shape (n // 2 + 1,) or scalar, optional
        As for `fit_spectrum`.

    Returns
    -------
    filtered : ndarray of float, shape (n,)
        Mean and, where the fit had it removed, line are kept as they are. NaN stays NaN.
    u : float
        Standard deviation of one filtered value about the true, averaged one.

    Notes
    -----
    Gain sqrt(S T^2 / (S B^2 + N)): S the process, T the average, B the blur, N the noise; at most 2, as sharpening
    beyond would rest on the model alone. A least-squares (Wiener) filter would be closer at each place and too smooth
    on the whole, so that its extremes would be too mild. The ends are mirrored.
    """
    row = np.asarray(series, dtype=np.float64)
    valid = np.isfinite(row)
    filled = _bridge(row[None], valid[None])[0]
    trend = filled - _without_line(filled) if process.line_removed else np.full_like(filled, filled.mean())
    pad = row.size // 2
    size = fft.next_fast_len(row.size + 2 * pad, real=True)
    padded = np.pad(filled - trend, (pad, size - row.size - pad), mode="symmetric")
    f = np.arange(size // 2 + 1) / size  # per step
    squared = np.broadcast_to(np.asarray(noise_transfer, dtype=np.float64) ** 2, row.size // 2 + 1)
    squared = np.interp(f, np.linspace(0.0, 0.5, squared.size), squared)
    floor = process.sample_noise**2 * squared / squared.mean()
    rough = palasantzas_psd(f, process.sigma, process.xi / process.step, process.hurst)
    passed = np.exp(-2.0 * (np.pi * process.blur / process.step * f) ** 2)
    wanted = np.abs(np.sinc(average_over / process.step * f))
    gain = np.minimum(wanted * np.sqrt(rough / (rough * passed**2 + floor)), 2.0)
    error = (wanted - gain * passed) ** 2 * rough + gain**2 * floor
    filtered = fft.irfft(fft.rfft(padded) * gain, size)[pad : pad + row.size] + trend
    filtered[~valid] = np.nan
    return filtered, float(np.sqrt(2.0 * np.sum(error) / size))
