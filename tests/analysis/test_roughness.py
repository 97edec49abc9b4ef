"""The fit against simulated edges of known process: exact circulant embedding, fixed seeds."""

from __future__ import annotations

from dataclasses import asdict
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest
from scipy.stats import t as student

from printmetrics.analysis.process import bin_kernel, palasantzas_psd, periodogram, sampled_autocovariance
from printmetrics.analysis.roughness import Process, Record, _bridge, amplitude_filter, fit_spectra, u_mean, unbiased_sd
from printmetrics.errors import FeatureError

if TYPE_CHECKING:
    from numpy.typing import NDArray


def simulate(
    seed: int, series: int, n: int, sigma: float, xi: float, hurst: float, blur: float = 0.0
) -> NDArray[np.float64]:
    half = sampled_autocovariance(int(n + 25 * xi), 1.0, sigma, xi, hurst, blur=blur)
    power = np.maximum(np.fft.rfft(np.concatenate([half, half[-2:0:-1]])).real, 0.0)
    size = 2 * half.size - 2
    white = np.random.default_rng(seed).standard_normal((series, size))
    return np.fft.irfft(np.fft.rfft(white) * np.sqrt(power), size)[:, :n]


def fit(data: NDArray[np.float64], step: float, **what_was_done: Any) -> Process:  # noqa: ANN401  (as for a record)
    return fit_spectra([Record(data=data, step=step, **what_was_done)])[0]


def noise(seed: int, like: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.random.default_rng(seed).standard_normal(like.shape)


# Source: own simulation of the expected-periodogram fit (derived), standard deviations 0.0108 and 0.0032 of one fit.
def test_twenty_lines_give_sigma_and_noise_back() -> None:
    fits = []
    for seed in range(8):
        edges = simulate(seed, 20, 512, 0.5, 10.0, 0.5)
        fits.append(fit(edges + 0.2 * noise(100 + seed, edges), 1.0))
    assert np.mean([fit.sigma for fit in fits]) == pytest.approx(0.5, abs=4 * 0.0108 / np.sqrt(8))
    # H is fitted too here, so the noise is known half as well.
    assert np.mean([fit.noise for fit in fits]) == pytest.approx(0.2, abs=4 * 0.009 / np.sqrt(8))
    assert np.mean([fit.xi for fit in fits]) == pytest.approx(10.0, rel=0.1)
    assert np.mean([fit.hurst for fit in fits]) == pytest.approx(0.5, abs=0.06)


def test_stated_uncertainties_are_the_scatter_of_many_fits() -> None:
    fits = []
    for seed in range(60):
        edges = simulate(seed, 1, 2000, 1.0, 15.0, 0.6, 1.5)
        fits.append(fit((edges + 0.3 * noise(500 + seed, edges))[0], 1.0, blur=1.5, noise_expected=0.3))
    for name in ("sigma", "hurst", "noise"):
        scatter = np.std([getattr(fit, name) for fit in fits])
        stated = np.mean([getattr(fit, f"u_{name}") for fit in fits])
        assert 0.7 < stated / scatter < 1.5, name


@pytest.mark.parametrize("series", [1, 60])
def test_the_fit_is_the_whole_posterior_not_a_corner_of_it(series: int) -> None:
    # Truth: the same likelihood summed over a dense grid; many series make its ridge narrow.
    edges = simulate(41, series, 800, 1.0, 10.0, 0.5)
    edges = edges + 0.1 * noise(42, edges)
    process = fit(edges, 1.0, noise_expected=0.1)
    kernel = bin_kernel(800)
    power = kernel.average(periodogram(edges, 1.0, taper=kernel.taper).mean(axis=0))
    xi, hurst = (a.ravel() for a in np.meshgrid(np.geomspace(2.0, 60.0, 80), np.linspace(0.2, 1.1, 70)))
    bins, _ = kernel.spectrum(xi, hurst, 0.0)
    weights = []
    for variance in np.geomspace(0.3, 3.0, 60):
        for floor in 0.01 * np.exp(0.2 * np.linspace(-2.0, 2.0, 5)):
            expected = variance * bins + floor
            weights.append(-(np.log(expected) + power / expected) @ (series * kernel.weight))
            weights[-1] -= 0.5 * (np.log(floor / 0.01) / 0.2) ** 2
    weights = np.array(weights)
    weights -= 0.5 * (((hurst - 0.6) / 0.3) ** 2 + (5.0 * xi / 800.0) ** 2)
    weights = np.exp(weights - weights.max()).sum(axis=0)
    weights /= weights.sum()
    assert np.log(process.xi) == pytest.approx(weights @ np.log(xi), abs=0.3 * process.u_xi / process.xi)
    assert process.hurst == pytest.approx(weights @ hurst, abs=0.3 * process.u_hurst)
    assert process.u_hurst == pytest.approx(np.sqrt(weights @ (hurst - weights @ hurst) ** 2), rel=0.2)


def test_records_fitted_side_by_side_are_fitted_as_alone() -> None:
    # Of unequal length, kind, step, blur and roughness, so that each settles on a lattice of its own, at its own time.
    records = []
    for seed, (n, xi, hurst, sigma_e) in enumerate(
        [
            (800, 8.0, 0.5, 0.1),
            (1000, 30.0, 0.9, 0.02),
            (800, 100.0, 0.6, 1.0),
            (800, 3.0, 0.3, 0.5),
            (1000, 9.0, 0.5, 9.0),
        ]
    ):
        edges = simulate(50 + seed, 1 + 30 * (seed == 0), n, 1.0, xi, hurst, 1.5)
        seen = edges + sigma_e * noise(60 + seed, edges)
        seen[0, 40:60] = np.nan if seed == 2 else seen[0, 40:60]
        transfer = np.cos(np.arange(n // 2 + 1) / n)
        records += [
            Record(
                data=seen,
                step=1.0 + seed,
                blur=1.5 + 1.6 * seed,
                noise_expected=sigma_e,
                noise_transfer=transfer,
                noise_multiplicity=2 - line,
                line_removed=line,
            )
            for line in (False, True)
        ]
    for together, record in zip(fit_spectra(records), records, strict=True):
        alone = fit_spectra([record])[0]
        for name, value in asdict(alone).items():
            assert getattr(together, name) == pytest.approx(value, rel=1e-4), name


@pytest.mark.parametrize(("n", "xi", "hurst", "sigma_e"), [(800, 40.0, 0.75, 0.05), (1500, 15.0, 0.5, 1.0)])
def test_intervals_cover_the_process_mean(n: int, xi: float, hurst: float, sigma_e: float) -> None:
    blur = 0.1 * xi
    edges = simulate(3, 300, n, 1.0, xi, hurst, blur)
    covered = 0
    for row in edges + sigma_e * noise(4, edges):
        process = fit(row, 1.0, blur=blur, noise_expected=sigma_e)
        u, dof = u_mean(process, n)
        covered += abs(row.mean()) <= student.ppf(0.975, dof) * np.hypot(u, process.noise / np.sqrt(n))
    # 93 to 97 % is the aim; 300 runs add three standard errors of 1.3 %.
    assert 0.92 < covered / 300 < 0.995


def test_more_rows_on_the_same_line_do_not_shrink_the_uncertainty_of_its_mean() -> None:
    edges = simulate(5, 6, 4000, 1.0, 40.0, 0.5, 4.0)
    fine = fit(edges + 0.01 * noise(6, edges), 1.0, blur=4.0)
    coarse = fit(edges[:, ::4] + 0.01 * noise(6, edges[:, ::4]), 4.0, blur=4.0)
    assert u_mean(fine, 4000.0)[0] == pytest.approx(u_mean(coarse, 4000.0)[0], rel=0.1)


# Source: derived; sigma 0.5, xi 10, L 1000 gives 0.0704, 50 independent lengths.
def test_mean_of_a_long_line_is_as_uncertain_as_its_correlation_says() -> None:
    edges = simulate(7, 60, 1000, 0.5, 10.0, 0.5)
    process = fit(edges + 0.05 * noise(8, edges), 1.0, noise_expected=0.05)
    assert u_mean(process, 1000.0)[0] == pytest.approx(0.0704, rel=0.05)
    assert u_mean(process, 4000.0)[0] == pytest.approx(0.0704 / 2.0, rel=0.05)


@pytest.mark.parametrize("line", [False, True])
@pytest.mark.parametrize(("hurst", "sigma_e", "blur", "within"), [(0.5, 0.5, 2.0, 0.02), (0.75, 1.0, 4.0, 0.05)])
def test_freed_sd_is_that_of_the_true_edges(
    line: bool, hurst: float, sigma_e: float, blur: float, within: float
) -> None:
    # Blur by a long convolution of a finely known edge: no spectrum is shared with what is tested.
    fine = simulate(9, 40, 4 * 2200, 1.0, 80.0, hurst)
    x = np.arange(-6 * 4 * blur, 6 * 4 * blur + 1)
    window = np.exp(-(x**2) / (2.0 * (4 * blur) ** 2))
    smooth = np.array([np.convolve(row, window / window.sum(), "same") for row in fine])
    true, seen = fine[:, 400:8400:4], smooth[:, 400:8400:4]
    ratios = []
    for sharp, row in zip(true, seen + sigma_e * noise(10, seen), strict=True):
        place = np.arange(row.size)
        kept = sharp - np.polyval(np.polyfit(place, sharp, 1), place) if line else sharp
        given = row - np.polyval(np.polyfit(place, row, 1), place) if line else row
        process = fit(given, 1.0, blur=blur, noise_expected=sigma_e, line_removed=line)
        ratios.append(unbiased_sd(given, process).sd / kept.std())
    assert np.mean(ratios) == pytest.approx(1.0, abs=within)


# Source: LWR^2 = 2 LER^2 (1 - rho); sigma 0.5 and rho -0.9 give 0.9747, published.
def test_width_roughness_follows_from_the_edges_and_their_correlation() -> None:
    left, other = simulate(11, 2, 4096, 1.0, 10.0, 0.5)
    left = (left - left.mean()) / left.std() * 0.5
    other = other - other.mean()
    other -= left * (left @ other) / (left @ left)
    right = -0.9 * left + np.sqrt(1.0 - 0.81) * 0.5 * other / other.std()
    width = right - left + 1e-3 * noise(12, left)
    rough = unbiased_sd(width, fit(width, 1.0, noise_expected=1e-3 / np.sqrt(2.0), noise_multiplicity=2))
    assert rough.raw == pytest.approx(0.9747, abs=1e-4)
    assert rough.sd == pytest.approx(0.9747, abs=1e-3)


def test_a_wiggle_of_both_edges_has_no_width_roughness() -> None:
    edge = simulate(13, 1, 1000, 1.0, 10.0, 0.5)[0]
    rough = unbiased_sd((edge + 5.0) - edge, fit((edge + 5.0) - edge, 1.0))
    assert rough.sd < 1e-12


@pytest.mark.parametrize("seed", range(5))
def test_a_straight_noisy_line_reads_nearly_straight(seed: int) -> None:
    row = 7.0 + noise(seed, np.empty(3000))
    process = fit(row, 1.0, blur=2.0, noise_expected=1.0)
    rough = unbiased_sd(row, process)
    assert not process.resolved
    assert process.noise == pytest.approx(1.0, abs=0.06)
    assert rough.sd < 0.25
    assert rough.sd <= 2.0 * rough.u_noise
    filtered, _ = amplitude_filter(row, process, average_over=5.0)
    assert np.ptp(filtered) < 1.0 < np.ptp(row) / 5.0
    assert u_mean(process, 3000.0)[0] < 1.0 / np.sqrt(3000.0)


def test_a_drawn_line_without_any_noise_has_no_roughness() -> None:
    process = fit(np.full(500, 20.0), 1.0, blur=1.0, noise_expected=0.1)
    assert process.sigma < 1e-6
    assert unbiased_sd(np.full(500, 20.0), process).sd == 0.0


def test_lengths_and_heights_scale() -> None:
    edges = simulate(14, 1, 700, 1.0, 9.0, 0.6, 1.0)
    row = (edges + 0.3 * noise(15, edges))[0]
    one = fit(row, 1.0, blur=1.0, noise_expected=0.3)
    other = fit(50.0 * row + 3.0, 0.2, blur=0.2, noise_expected=15.0)
    assert other.sigma == pytest.approx(50.0 * one.sigma)
    assert other.noise == pytest.approx(50.0 * one.noise)
    assert other.xi == pytest.approx(0.2 * one.xi)
    assert other.hurst == pytest.approx(one.hurst)
    assert other.s0 == pytest.approx(500.0 * one.s0)
    assert u_mean(other, other.length)[0] == pytest.approx(50.0 * u_mean(one, one.length)[0])


def test_a_slope_does_not_matter_where_the_line_is_removed() -> None:
    edges = simulate(16, 1, 1021, 1.0, 30.0, 0.6)
    row = (edges + 0.2 * noise(17, edges))[0]
    one = fit(row, 1.0, noise_expected=0.2, line_removed=True)
    other = fit(row + 0.3 * np.arange(1021), 1.0, noise_expected=0.2, line_removed=True)
    assert other.sigma == pytest.approx(one.sigma, rel=1e-6)
    assert unbiased_sd(row + 0.3 * np.arange(1021), other).sd == pytest.approx(unbiased_sd(row, one).sd, rel=1e-6)


def test_a_width_has_the_noise_of_two_edges() -> None:
    width = simulate(18, 10, 1000, 1.0, 10.0, 0.5, 1.5)
    width = width + 0.5 * np.sqrt(2.0) * noise(19, width)
    assert fit(width, 1.0, blur=1.5, noise_multiplicity=2).noise == pytest.approx(0.5, rel=0.02)


def test_noise_is_found_behind_the_resampling_that_smoothed_it() -> None:
    edges = simulate(20, 20, 1000, 1.0, 20.0, 0.5, 2.0)
    points = 0.4 * np.random.default_rng(21).standard_normal((20, 1001))
    halfway = edges + (points[:, 1:] + points[:, :-1]) / 2.0  # linear interpolation midway between two points
    transfer = np.cos(np.pi * np.arange(501) / 1000)
    process = fit(halfway, 1.0, blur=2.0, noise_transfer=transfer)
    assert process.noise == pytest.approx(0.4, rel=0.02)
    assert process.sample_noise == pytest.approx(0.4 / np.sqrt(2.0), rel=0.02)


def test_expected_noise_settles_what_a_sharp_rough_edge_leaves_open() -> None:
    edges = simulate(22, 1, 1000, 1.0, 10.0, 0.4)
    row = (edges + 0.2 * noise(23, edges))[0]
    told = fit(row, 1.0, noise_expected=0.2)
    assert told.u_noise < fit(row, 1.0).u_noise
    assert told.noise == pytest.approx(0.2, rel=0.2)


def test_a_wrong_expectation_of_the_noise_gives_way_to_the_data() -> None:
    edges = simulate(24, 1, 3000, 1.0, 30.0, 0.6, 2.0)
    row = (edges + 0.4 * noise(25, edges))[0]
    assert fit(row, 1.0, blur=2.0, noise_expected=0.2).noise == pytest.approx(0.4, rel=0.06)


def test_rejected_rows_leave_the_answer_where_it_was() -> None:
    rng = np.random.default_rng(26)
    edges = simulate(27, 30, 2000, 1.0, 20.0, 0.6, 2.0)
    change = []
    for row in edges + 0.3 * noise(28, edges):
        gappy = row.copy()
        for start in rng.integers(0, 1970, 6):
            gappy[start : start + rng.integers(5, 30)] = np.nan
        whole = fit(row, 1.0, blur=2.0, noise_expected=0.3)
        process = fit(gappy, 1.0, blur=2.0, noise_expected=0.3)
        assert not process.gappy
        change.append(
            (
                unbiased_sd(gappy, process).sd / unbiased_sd(row, whole).sd,
                process.noise / whole.noise,
                u_mean(process, 2000.0)[0] / u_mean(whole, 2000.0)[0],
            )
        )
    sd, floor, u = np.mean(change, axis=0)
    assert sd == pytest.approx(1.0, abs=0.02)
    assert floor == pytest.approx(1.0, abs=0.02)
    assert u == pytest.approx(1.0, abs=0.05)


def test_a_bridge_carries_less_than_half_the_noise_of_a_plain_interpolation() -> None:
    rows = noise(43, np.empty((4000, 40)))
    valid = np.ones(rows.shape, dtype=bool)
    valid[:, 10:30] = False
    bridge = _bridge(rows, valid)[:, 10:30]
    # Derived: ends are means of three known neighbours, two shared; 2/3 * 1/3 + 1/3 * 2/9 = 8/27. Plain: 2/3.
    assert bridge.var() == pytest.approx(8.0 / 27.0, rel=0.05)
    np.testing.assert_array_equal(rows, noise(43, rows))


def test_many_rejected_rows_and_a_short_line_are_said() -> None:
    edges = simulate(29, 1, 400, 1.0, 100.0, 0.6, 2.0)
    row = (edges + 0.1 * noise(30, edges))[0]
    row[100:150] = np.nan
    process = fit(row, 1.0, blur=2.0)
    assert process.gappy
    assert process.short
    assert process.resolved


def test_too_few_rows_are_refused() -> None:
    row = np.full(400, np.nan)
    row[:20] = noise(31, np.empty(20))
    with pytest.raises(FeatureError, match="20 samples along the line; its roughness needs at least 32"):
        fit(row, 1.0)


def test_filter_gives_the_true_local_value_its_own_spread_and_extremes() -> None:
    sigma_e, reach = 0.6, 4
    edges = simulate(32, 40, 1500, 1.0, 20.0, 0.75)
    window = np.convolve(np.ones(reach), [0.5, 0.5]) / reach
    spreads, lows, naive, errors = [], [], [], []
    for sharp, row in zip(edges, edges + sigma_e * noise(33, edges), strict=True):
        process = fit(row, 1.0, noise_expected=sigma_e)
        filtered, u = amplitude_filter(row, process, average_over=reach)
        local = np.convolve(sharp, window, "valid")
        inner = filtered[reach // 2 : -(reach // 2)]
        spreads.append(inner.std() / local.std())
        lows.append(inner.min() - local.min())
        naive.append(np.convolve(row, window, "valid").min() - local.min())
        errors.append((inner - local).std() / u)
    assert np.mean(spreads) == pytest.approx(1.0, abs=0.02)
    assert np.mean(lows) == pytest.approx(0.0, abs=0.12)
    assert np.mean(naive) < -0.2  # what the filter is for
    assert np.mean(errors) == pytest.approx(1.0, abs=0.1)


def test_filters_of_several_lengths_are_those_of_each() -> None:
    row = simulate(44, 1, 999, 1.0, 20.0, 0.75)[0] + 0.3 * noise(45, np.empty(999))
    process = fit(row, 1.0, noise_expected=0.3)
    several, u = amplitude_filter(row, process, average_over=[6.0, 0.0])
    for k, reach in enumerate((6.0, 0.0)):
        one, u_one = amplitude_filter(row, process, average_over=reach)
        np.testing.assert_allclose(several[k], one, rtol=1e-12)
        assert u[k] == pytest.approx(float(u_one), rel=1e-12)
    assert several[0].std() < several[1].std()


def test_filter_keeps_gaps_mean_and_ends() -> None:
    x = np.linspace(-1.0, 1.0, 1000)
    row = 30.0 + x + simulate(34, 1, 1000, 0.05, 5.0, 0.6, 1.0)[0] + 0.02 * noise(35, x)
    row[400:410] = np.nan
    filtered, _ = amplitude_filter(row, fit(row, 1.0, blur=1.0, noise_expected=0.02))
    np.testing.assert_array_equal(np.isnan(filtered), np.isnan(row))
    assert np.nanmean(filtered) == pytest.approx(np.nanmean(row), abs=0.01)
    assert filtered[0] == pytest.approx(29.0, abs=0.15)  # the far end, were it joined, is at 31
    assert filtered[-1] == pytest.approx(31.0, abs=0.15)


def test_inputs_are_not_written_to() -> None:
    row = noise(36, np.empty(300))
    row[100:105] = np.nan
    before = row.copy()
    process = fit(row, 1.0, line_removed=True)
    amplitude_filter(row, process)
    unbiased_sd(row, process)
    np.testing.assert_array_equal(row, before)


def test_short_correlation_and_long_correlation_do_not_run_off() -> None:
    near_white = simulate(37, 1, 1000, 1.0, 0.7, 0.5)
    process = fit(near_white[0] + 0.1 * noise(38, near_white[0]), 1.0, noise_expected=0.1)
    assert process.s0 == pytest.approx(palasantzas_psd(0.0, 1.0, 0.7, 0.5), rel=0.5)
    longer = simulate(39, 1, 1000, 1.0, 800.0, 0.9)
    process = fit(longer[0] + 0.1 * noise(40, longer[0]), 1.0, noise_expected=0.1)
    assert process.short
    assert np.isfinite(process.s0)
    assert process.noise == pytest.approx(0.1, rel=0.1)
