"""The process behind a measured edge or width: fitted, freed of noise and blur, and what it says of the mean."""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Self

import numpy as np
from scipy import fft
from scipy.special import polygamma, psi

from printmetrics.analysis.process import (
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
    from collections.abc import Sequence

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


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Record:
    """What was measured along a line, and what had been done to it.

    Parameters
    ----------
    data : array_like, shape (n,) or (m, n)
        Positions of an edge, or widths, at equidistant places; NaN where a sample was rejected. Several series are of
        one kind.
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

    Raises
    ------
    FeatureError
        When fewer than 32 samples are left.
    """

    data: ArrayLike
    step: float
    blur: float = 0.0
    noise_expected: float | None = None
    noise_relative_u: float = 0.1
    noise_multiplicity: int = 1
    noise_transfer: ArrayLike = 1.0
    line_removed: bool = False

    def __post_init__(self) -> None:
        """Refuse a record too short to fit."""
        fewest = int(np.isfinite(self.rows).sum(axis=1).min())
        if fewest < FEWEST_SAMPLES:
            msg = f"{fewest} samples along the line; its roughness needs at least {FEWEST_SAMPLES}"
            raise FeatureError(msg, Flag.SHORT_SAMPLING)

    @property
    def rows(self) -> NDArray[np.float64]:
        """The series, shape (m, n), cut to a length that many lines share and whose transform is fast."""
        rows = np.atleast_2d(np.asarray(self.data, dtype=np.float64))
        n = fft.prev_fast_len(rows.shape[1], real=True)
        return rows[:, (rows.shape[1] - n) // 2 :][:, :n]


def fit_spectra(records: Sequence[Record]) -> list[Process]:
    """Fit the Palasantzas process plus white noise to each of many records.

    Parameters
    ----------
    records : sequence of Record
        All lines of a picture, say; those of one length are fitted side by side.

    Returns
    -------
    list of Process
        What the data and the priors say of each, with standard uncertainties.

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
    lengths = [record.rows.shape[1] for record in records]
    fits: dict[int, Process] = {}
    for n in set(lengths):
        members = [k for k, length in enumerate(lengths) if length == n]
        fits.update(zip(members, _fit_together([records[k] for k in members]), strict=True))
    return [fits[k] for k in range(len(records))]


def _fit_together(records: list[Record]) -> list[Process]:
    """Fit records of one length."""
    rows = [record.rows for record in records]
    series = np.array([len(row) for row in rows])
    first = np.cumsum(series) - series
    data = np.concatenate(rows)
    valid = np.isfinite(data)
    filled = _bridge(data, valid)
    n = data.shape[1]
    line = np.array([record.line_removed for record in records])
    straight = np.repeat(line, series)  # of the full length; what is left over the piece fitted is removed here
    filled[straight] = _without_line(filled[straight])
    kernel = bin_kernel(n)
    power = kernel.average(periodogram(filled, 1.0, taper=kernel.taper))
    power = np.add.reduceat(power, first) / series[:, None]
    scale = np.add.reduceat(filled.var(axis=1), first) / series
    step = np.array([record.step for record in records])
    drawn = scale == 0.0  # rounding stands in for noise
    scale[drawn] = (1e-9 * step[drawn]) ** 2
    power[drawn] = scale[drawn, None]
    present = np.add.reduceat(valid.mean(axis=1), first) / series
    transfer = _squared_transfers(records, n)
    multiplicity = np.array([record.noise_multiplicity for record in records])
    centre, width = np.array([_noise_prior(record, s) for record, s in zip(records, scale, strict=True)]).T
    likelihood = _Likelihood(
        n=n,
        line=line,
        weight=kernel.weight.astype(np.float32),
        power=(power / scale[:, None]).astype(np.float32),
        floor=(kernel.average(transfer) * present[:, None]).astype(np.float32),
        series=series,
        blur=np.array([record.blur for record in records]) / step,
        centre=centre,
        width=width,
    )
    mean, u = _posterior(likelihood)
    root = np.sqrt(scale)
    sample_noise = root * np.exp(mean[3] / 2.0)
    dof = np.maximum(_WORST_DOF, _dof(u[5] ** 2))
    columns = {
        "sigma": (sigma := root * np.exp(mean[0] / 2.0)),
        "xi": (xi := step * np.exp(mean[1])),
        "hurst": mean[2],
        "noise": (noise := sample_noise / np.sqrt(multiplicity)),
        "u_sigma": sigma * u[0] / 2.0,
        "u_xi": xi * u[1],
        "u_hurst": u[2],
        "u_noise": noise * u[3] / 2.0,
        "s0": scale * step * np.exp(mean[4]),
        "u_ln_s0": u[4],
        "mean_variance": scale * np.exp(mean[5] + psi(dof / 2.0)) * 2.0 / dof,
        "mean_dof": dof,
        "kept": mean[6],
        "u_kept": u[6],
        "length": n * step,
        "sample_noise": sample_noise * np.sqrt(transfer.mean(axis=1)),
        "missing": 1.0 - present,
        "series": series,
    }
    figures = zip(*(column.tolist() for column in columns.values()), strict=True)
    return [
        Process(
            **dict(zip(columns, row, strict=True)),
            blur=record.blur,
            step=record.step,
            n=n,
            line_removed=record.line_removed,
        )
        for record, row in zip(records, figures, strict=True)
    ]


def _squared_transfers(records: list[Record], n: int) -> NDArray[np.float64]:
    """Return what the sampling leaves of white noise's power, shape (records, n // 2 + 1)."""
    squared = np.empty((len(records), n // 2 + 1))
    for row, record in zip(squared, records, strict=True):
        transfer = np.atleast_1d(record.noise_transfer)
        row[:] = np.interp(np.arange(row.size) * (2.0 * (transfer.size - 1) / n), np.arange(transfer.size), transfer)
    squared *= squared
    return squared


def _noise_prior(record: Record, scale: float) -> tuple[float, float]:
    """Return mean and standard deviation of the noise variance's logarithm, over `scale`."""
    if not record.noise_expected:
        return _VAGUE_NOISE
    variance = record.noise_multiplicity * record.noise_expected**2
    return float(np.log(variance / scale)), 2.0 * record.noise_relative_u


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
    """The binned Whittle likelihoods of s records; powers over each record's variance, lengths in steps."""

    n: int
    weight: NDArray[np.float32]
    line: NDArray[np.bool_]
    power: NDArray[np.float32]
    floor: NDArray[np.float32]
    series: NDArray[np.int64]
    blur: NDArray[np.float64]
    centre: NDArray[np.float64]
    width: NDArray[np.float64]

    def of(self, members: NDArray[np.bool_]) -> Self:
        """Return the likelihoods of some of the records."""
        picked = (getattr(self, f.name)[members] for f in fields(self)[2:])
        return type(self)(self.n, self.weight, *picked)

    def integrate(
        self, ln_xi: NDArray[np.float64], hurst: NDArray[np.float64], x: NDArray[np.float64], iterations: int
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Return evidence, ln sigma^2 and ln noise^2, their covariance, and the variance the blur leaves.

        Shapes (s, p), (2, s, p), (3, s, p), (s, p), from ln xi, shape (s, i, 1), and H, shape (s, i, j), with p = i j.
        `x` holds first guesses, shape (2, s, p). Stacks over the bins are kept in single precision: sums of
        differences from the best fit conceivable lose nothing by it.
        """
        points = hurst.shape[0], -1
        bins = np.empty((*hurst.shape, self.weight.size), dtype=np.float32)
        kept = np.empty(hurst.shape)
        for line in set(self.line.tolist()):
            some = self.line == line
            kernel = bin_kernel(self.n, line=line)
            bins[some], kept[some] = kernel.spectrum(np.exp(ln_xi[some]), hurst[some], self.blur[some, None, None])
        bins = bins.reshape(*points, self.weight.size)
        weight, floor, power = self.weight, self.floor[:, None], (self.weight * self.power)[..., None]
        centre, width, series = self.centre[:, None], self.width[:, None], self.series[:, None]
        total = series * float(weight.sum())
        for left in range(iterations, -1, -1):
            inverse = np.exp(x[1] - x[0]).astype(np.float32)[..., None] @ floor  # an outer product
            inverse += bins
            np.divide(1.0, inverse, out=inverse)  # 1 / the expectation, times sigma^2
            share = bins * inverse
            both = series * (share @ weight)
            info_aa = series * (share**2 @ weight)
            info_an = both - info_aa
            info_nn = total - 2.0 * both + info_aa + width**-2
            info_aa = info_aa + _LOOSE
            determinant = info_aa * info_nn - info_an**2
            if left == 0:
                break
            share *= inverse
            scale = series * np.exp(-x[0])
            slope_a = scale * (share @ power)[..., 0] - both
            slope_n = scale * (inverse @ power)[..., 0] - total - slope_a - (x[1] - centre) / width**2
            slope_a = slope_a - _LOOSE * x[0]
            move = np.stack([info_nn * slope_a - info_an * slope_n, info_aa * slope_n - info_an * slope_a])
            x = x + np.clip(move / determinant, -1.5, 1.5)
        ratio = self.power[:, None] * np.exp(-x[0]).astype(np.float32)[..., None] * inverse
        evidence = series * ((np.log(ratio) - (ratio - 1.0)) @ weight) - 0.5 * np.log(determinant)
        evidence -= 0.5 * (_LOOSE * x[0] ** 2 + ((x[1] - centre) / width) ** 2)
        prior = ((hurst - _H_PRIOR[0]) / _H_PRIOR[1]) ** 2 + (_MANY * np.exp(ln_xi) / self.n) ** 2
        evidence -= 0.5 * prior.reshape(points)
        return evidence, x, np.stack([info_nn, -info_an, info_aa]) / determinant, kept.reshape(points)


def _posterior(likelihood: _Likelihood) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return mean and standard deviation of what is wanted, shape (7, s), in the order of `_wanted`."""
    n, records = likelihood.n, likelihood.series.size
    low, high = np.log(0.5), np.log(n / 3.0)
    h_low, h_high = _H_BOUNDS
    axis_xi = np.linspace(low, high, max(4, int(np.ceil((high - low) / 0.6))))
    ln_xi = np.tile(axis_xi[:, None], (records, 1, 1))
    hurst = np.tile(np.linspace(h_low + 0.1, h_high - 0.1, 4), (records, axis_xi.size, 1))
    inside = np.ones(hurst.shape, dtype=bool)
    noise = np.tile(likelihood.centre[:, None], hurst[0].size)
    start = np.stack([np.full_like(noise, np.log(0.5)), noise])
    root, centre = np.tile(np.eye(2), (records, 1, 1)), np.zeros((records, 2))
    active, result = np.arange(records), np.empty((2, 7, records))
    for attempt in range(_LATTICES + 1):
        evidence, x, cov, kept = likelihood.integrate(ln_xi, hurst, start, _ITERATIONS[attempt > 0])
        weight, heat = _tempered(np.where(inside.reshape(evidence.shape), evidence, -np.inf))
        points = np.stack(np.broadcast_arrays(ln_xi, hurst)).reshape(2, *evidence.shape)
        mean = np.sum(points * weight, axis=-1)
        off = points - mean[..., None]
        spread = np.einsum("asp,bsp->sab", off * weight, off)
        drift = np.abs(np.linalg.solve(root, mean.T[..., None] - centre[..., None])).max(axis=(1, 2))
        wide = (np.diagonal(spread, axis1=1, axis2=2) > 1.6 * np.sum(root**2, axis=2)).any(axis=1)
        settled = (heat == 1.0) & (drift < 1.0) & ~wide
        done = np.full(active.size, attempt == _LATTICES) | (settled if attempt else False)
        if done.any():
            values = _wanted(points[:, done], x[:, done], kept[done], n)
            result[..., active[done]] = _moments(values, cov[:, done], weight[done])
        if done.all():
            break
        # The others go on, from a lattice along the ridge; sigma and noise follow xi and H.
        left = ~done
        active, likelihood, centre = active[left], likelihood.of(left), mean[:, left].T
        x, off, weight, spread = x[:, left], off[:, left], weight[left], spread[left]
        fitting = np.linalg.cholesky(spread / np.sqrt(heat[left])[:, None, None] + 1e-6 * np.eye(2))
        moves_on = (drift[left] >= 1.0) & (attempt > 0)  # as it is
        root = np.where(moves_on[:, None, None], root[left], fitting)
        new_xi, new_hurst = _lattice(root)
        ln_xi, hurst = centre[:, :1, None] + new_xi, centre[:, 1:, None] + new_hurst
        inside = (ln_xi > low) & (ln_xi < high) & (hurst > h_low) & (hurst < h_high)
        ln_xi, hurst = np.clip(ln_xi, low, high), np.clip(hurst, h_low, h_high)
        along = np.linalg.solve(spread + 1e-9 * np.eye(2), np.einsum("asp,bsp->sab", off * weight, x))
        new = np.stack(np.broadcast_arrays(new_xi, new_hurst)).reshape(2, active.size, -1)
        start = np.sum(x * weight, axis=-1, keepdims=True) + np.einsum("sab,asp->bsp", along, new)
    return result[0], result[1]


def _lattice(root: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return offsets in ln xi, shape (s, 7, 1), and in H, shape (s, 7, 7), that span 2.6 standard deviations."""
    unit = np.linspace(-2.6, 2.6, 7)
    root = root[:, :, :, None, None]
    return root[:, 0, 0] * unit[:, None], root[:, 1, 0] * unit[:, None] + root[:, 1, 1] * unit


def _wanted(
    points: NDArray[np.float64], x: NDArray[np.float64], kept: NDArray[np.float64], n: int
) -> NDArray[np.float64]:
    """Return ln sigma^2, ln xi, H, ln noise^2, ln S(0), ln of the mean's variance, share kept; shape (7, s, p)."""
    ln_xi, hurst = points
    amplitude = psd_amplitude(hurst)
    ln_s0 = x[0] + ln_xi + np.log(amplitude)
    # The variance of the mean, v = S(0)/L - 4 H xi^2/L^2 + ..., in a form that stays positive.
    v = amplitude * np.exp(ln_xi) / n
    ln_mean = x[0] + np.log(v / (1.0 + 4.0 * hurst * v / amplitude**2))
    return np.stack([x[0], ln_xi, hurst, x[1], ln_s0, ln_mean, kept])


def _moments(
    values: NDArray[np.float64], cov: NDArray[np.float64], weight: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return mean and standard deviation of `_wanted`, shape (7, s)."""
    mean = np.sum(values * weight, axis=-1)
    variance = np.sum((values - mean[..., None]) ** 2 * weight, axis=-1)
    variance[[0, 4, 5]] += np.sum(cov[0] * weight, axis=-1)
    variance[3] += np.sum(cov[2] * weight, axis=-1)
    return mean, np.sqrt(variance)


def _tempered(evidence: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return weights, flattened until several points share them: a narrow ridge is closed in on step by step."""
    relative = evidence - evidence.max(axis=1, keepdims=True)
    heat = np.ones(len(evidence))
    while True:
        weight = np.exp(relative / heat[:, None])
        weight /= weight.sum(axis=1, keepdims=True)
        narrow = np.sum(weight**2, axis=1) >= 1.0 / _FEWEST_POINTS
        if not narrow.any():
            return weight, heat
        heat[narrow] *= 1.5


def _dof(variance: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the degrees of freedom of a variance whose logarithm has the given variance."""
    half = 1.0 / variance + 0.5
    for _ in range(4):  # Newton on trigamma(dof / 2) = variance, both in logarithms
        slope = half * polygamma(2, half) / polygamma(1, half)
        half *= np.exp(np.clip(np.log(variance / polygamma(1, half)) / slope, -1.0, 1.0))
    return np.asarray(2.0 * half)


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
    place = np.flatnonzero(valid).astype(np.float64)
    row = row[valid]
    rest = row - row.mean()
    if process.line_removed:
        place -= place.mean()
        rest -= (place @ rest / (place @ place)) * place
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
    series: ArrayLike, process: Process, *, average_over: ArrayLike = 0.0, noise_transfer: ArrayLike = 1.0
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return a series whose spectrum is that of the true, locally averaged one.

    Parameters
    ----------
    series : array_like, shape (n,)
        The series as seen, NaN where rejected.
    process : Process
        The fit to it.
    average_over : array_like, shape (...), optional
        Length over which the local value is meant to be averaged; 0 for none. Several are had for little more than
        one. [length]
    noise_transfer : array_like, shape (n // 2 + 1,) or scalar, optional
        As for `Record`.

    Returns
    -------
    filtered : ndarray of float, shape (..., n)
        Mean and, where the fit had it removed, line are kept as they are. NaN stays NaN.
    u : ndarray of float, shape (...)
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
    squared = np.asarray(noise_transfer, dtype=np.float64) ** 2
    if squared.size > 1:
        squared = np.interp(f, np.linspace(0.0, 0.5, squared.size), squared)
    floor = process.sample_noise**2 * squared / squared.mean()
    rough = palasantzas_psd(f, process.sigma, process.xi / process.step, process.hurst)
    passed = np.exp(-2.0 * (np.pi * process.blur / process.step * f) ** 2)
    wanted = np.abs(np.sinc(np.asarray(average_over)[..., None] / process.step * f))
    gain = np.minimum(wanted * np.sqrt(rough / (rough * passed**2 + floor)), 2.0)
    error = (wanted - gain * passed) ** 2 * rough + gain**2 * floor
    filtered = fft.irfft(fft.rfft(padded) * gain, size)[..., pad : pad + row.size] + trend
    filtered[..., ~valid] = np.nan
    return filtered, np.sqrt(2.0 * np.sum(error, axis=-1) / size)
