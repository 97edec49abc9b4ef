"""The process against closed forms, quadrature, and direct sums."""

import numpy as np
import pytest
import scipy.signal
from scipy.integrate import quad
from scipy.linalg import toeplitz
from scipy.special import erfc

from printmetrics.analysis.process import (
    bin_kernel,
    expected_periodogram,
    palasantzas_autocovariance,
    palasantzas_psd,
    periodogram,
    psd_amplitude,
    relative_sd_of_sd,
    removed_share,
    sampled_autocovariance,
)

HURSTS = (0.25, 0.5, 0.75, 1.0)


# Source: G. Palasantzas, Phys. Rev. B 48, 14472 (1993), normalisation in one dimension; values derived.
@pytest.mark.parametrize(("hurst", "amplitude"), [(0.25, 1.19814), (0.5, 2.00000), (0.75, 2.62206), (1.0, 3.14159)])
def test_spectrum_at_zero_is_the_exact_amplitude_not_the_rule_2h_plus_1(hurst: float, amplitude: float) -> None:
    assert psd_amplitude(hurst) == pytest.approx(amplitude, abs=5e-6)
    assert palasantzas_psd(0.0, 0.5, 10.0, hurst) == pytest.approx(amplitude * 0.25 * 10.0, rel=1e-5)


@pytest.mark.parametrize("hurst", HURSTS)
def test_spectrum_integrates_to_the_variance(hurst: float) -> None:
    # In ln f, as the tail is long; beyond 1e12 of 1/xi less than 1e-6 is left.
    half, _ = quad(lambda x: palasantzas_psd(np.exp(x), 0.7, 3.0, hurst) * np.exp(x), -30.0, 28.0, limit=400)
    assert 2.0 * half == pytest.approx(0.49, rel=2e-6)


@pytest.mark.parametrize("hurst", HURSTS)
def test_autocovariance_is_the_transform_of_the_spectrum(hurst: float) -> None:
    tau = 2.5
    # QUADPACK's own rule for a cosine over an endless range.
    half, _ = quad(lambda f: palasantzas_psd(f, 0.7, 3.0, hurst), 0, np.inf, weight="cos", wvar=2 * np.pi * tau)
    assert palasantzas_autocovariance(tau, 0.7, 3.0, hurst) == pytest.approx(2.0 * half, rel=1e-6)


def test_autocovariance_at_one_half_is_the_exponential() -> None:
    tau = np.array([0.0, 1e-9, 1.0, 30.0])
    np.testing.assert_allclose(palasantzas_autocovariance(tau, 2.0, 10.0, 0.5), 4.0 * np.exp(-tau / 10.0), rtol=1e-9)


@pytest.mark.parametrize("blur", [0.3, 1.0, 4.0])
def test_blurred_exponential_is_its_closed_form(blur: float) -> None:
    # Exponential convolved with a Gaussian of variance 2 blur^2; derived.
    xi, tau = 10.0, np.arange(30.0)
    a, b = blur / xi, tau / (2.0 * blur)
    closed = np.exp(a**2) / 2 * (np.exp(-tau / xi) * erfc(a - b) + np.exp(tau / xi) * erfc(a + b))
    np.testing.assert_allclose(sampled_autocovariance(30, 1.0, 1.0, xi, 0.5, blur=blur), closed, rtol=1e-9)


# Source: derived; exponential, sigma 1, xi 10 steps, 256 samples, after Sykulski et al., Biometrika 106 (2019).
def test_expected_periodogram_of_the_exponential() -> None:
    expected = expected_periodogram(sampled_autocovariance(256, 1.0, 1.0, 10.0, 0.5), 1.0)
    assert expected[[0, 1, 128]] == pytest.approx([19.2361, 18.2279, 0.0519], abs=5e-5)
    assert (2.0 * expected.sum() - expected[0] - expected[-1]) / 256.0 == pytest.approx(1.0, abs=1e-12)


# Source: sigma^2 biased = sigma^2 + sigma_e^2; 0.5 and 0.2 give 0.53852.
def test_noise_adds_its_variance_to_the_periodogram() -> None:
    step = 0.25
    expected = expected_periodogram(sampled_autocovariance(256, step, 0.5, 2.5, 0.5), step, noise=0.2)
    variance = (2.0 * expected.sum() - expected[0] - expected[-1]) / (256.0 * step)
    assert np.sqrt(variance) == pytest.approx(0.53852, abs=5e-6)


def test_periodogram_is_that_of_scipy_in_another_convention() -> None:
    step = 0.5
    series = np.random.default_rng(1).standard_normal(64)
    _, one_sided = scipy.signal.periodogram(series, fs=1.0 / step, detrend="constant")
    doubled = np.full(33, 2.0)
    doubled[[0, -1]] = 1.0
    np.testing.assert_allclose(doubled * periodogram(series, step), one_sided, rtol=1e-9, atol=1e-25)


# Source: derived; exponential autocovariance, classic.
@pytest.mark.parametrize(
    ("ratio", "v", "mean_removed", "line_removed", "relative"),
    [
        (5, 0.32054, 0.82429, 0.69587, 0.316),
        (10, 0.18000, 0.90554, 0.82316, 0.224),
        (20, 0.09500, 0.95131, 0.90545, 0.158),
        (50, 0.03920, 0.98020, 0.96082, 0.100),
        (100, 0.01980, 0.99005, 0.98019, 0.071),
        (200, 0.00995, 0.99501, 0.99003, 0.050),
    ],
)
def test_finite_length_takes_variance_away(
    ratio: float, v: float, mean_removed: float, line_removed: float, relative: float
) -> None:
    length, xi = 3.0 * ratio, 3.0
    assert removed_share(length, xi, 0.5) == pytest.approx(v, abs=6e-6)
    assert np.sqrt(1.0 - removed_share(length, xi, 0.5)) == pytest.approx(mean_removed, abs=6e-6)
    # The last column of the table was summed over samples: it is off by up to 2e-5; the closed form is next.
    assert np.sqrt(1.0 - removed_share(length, xi, 0.5, line=True)) == pytest.approx(line_removed, abs=2.5e-5)
    assert relative_sd_of_sd(length, xi, 0.5) == pytest.approx(relative, abs=6e-4)


@pytest.mark.parametrize("ratio", [1.0, 5.0, 50.0])
def test_a_line_takes_away_what_the_slope_has_more_than_the_mean(ratio: float) -> None:
    # Closed form for the exponential, derived: 2 int (1 - 3 u + 2 u^3) exp(-r u) du.
    r, e = ratio, np.exp(-ratio)
    slope = 2.0 * ((1 - e) / r - 3 * (1 - e * (1 + r)) / r**2 + 2 * (6 - e * (r**3 + 3 * r**2 + 6 * r + 6)) / r**4)
    both = removed_share(ratio, 1.0, 0.5, line=True)
    assert both - removed_share(ratio, 1.0, 0.5) == pytest.approx(slope, rel=1e-9)


@pytest.mark.parametrize("line", [False, True])
@pytest.mark.parametrize("hurst", HURSTS)
def test_closed_form_for_long_records_takes_over_where_the_integral_leaves_off(hurst: float, line: bool) -> None:
    # 40 xi is where one ends and the other begins: a jump would be seen beside the slope 1e-7.
    below, above = (removed_share(40.0 * (1.0 + d), 1.0, hurst, line=line) for d in (-1e-7, 1e-7))
    assert above == pytest.approx(below, rel=4e-7)
    assert above < below


@pytest.mark.parametrize("hurst", HURSTS)
def test_variance_of_the_mean_nears_the_spectrum_at_zero_over_the_length(hurst: float) -> None:
    # First terms for a long record, derived: S(0)/L - 4 H (xi/L)^2.
    assert removed_share(500.0, 1.0, hurst) == pytest.approx(
        psd_amplitude(hurst) / 500.0 - 4 * hurst / 500.0**2, rel=1e-5
    )


@pytest.mark.parametrize("hurst", HURSTS)
def test_spread_of_an_sd_is_the_integral_of_the_squared_correlation(hurst: float) -> None:
    half, _ = quad(lambda tau: palasantzas_autocovariance(tau, 1.0, 3.0, hurst) ** 2, 0.0, 200.0, limit=200)
    assert relative_sd_of_sd(100.0, 3.0, hurst) == pytest.approx(np.sqrt(2.0 * half / 200.0), rel=1e-5)


@pytest.mark.parametrize("line", [False, True])
@pytest.mark.parametrize(("xi", "hurst", "blur"), [(5.0, 0.3, 1.0), (12.0, 0.5, 0.0), (20.0, 1.0, 2.0)])
def test_kernel_gives_the_expectation_of_what_is_fitted(line: bool, xi: float, hurst: float, blur: float) -> None:
    # Truth: the quadratic form u* A C A' u, no spectrum involved.
    n = 240
    kernel = bin_kernel(n, line=line)
    trend = np.linalg.qr(np.vander(np.linspace(-1.0, 1.0, n), 2 if line else 1))[0]
    made = kernel.taper[:, None] * (np.eye(n) - trend @ trend.T)
    covariance = made @ toeplitz(sampled_autocovariance(n, 1.0, 1.0, xi, hurst, blur=blur)) @ made.T
    wave = np.exp(-2j * np.pi * np.outer(np.arange(n // 2 + 1), np.arange(n)) / n)
    exact = kernel.average(np.einsum("jm,mk,jk->j", wave, covariance, wave.conj()).real / n)
    given, _ = kernel.spectrum(np.array([xi]), np.array([hurst]), blur)
    # The noise of any picture is above these floors.
    np.testing.assert_allclose(given[0], exact, rtol=3e-4, atol=1e-7 * exact.max())
    np.testing.assert_allclose(given[0][:15], exact[:15], rtol=1e-4, atol=1e-7 * exact.max())


def test_kernel_knows_the_variance_that_blur_leaves() -> None:
    _, kept = bin_kernel(1000).spectrum(np.array([10.0, 10.0]), np.array([0.5, 0.5]), 1.0)
    assert kept == pytest.approx(np.exp(0.01) * erfc(0.1), abs=1e-5)  # closed form, as above


def test_every_ordinate_below_nyquist_is_in_one_bin() -> None:
    for n in (32, 33, 200, 3000):
        kernel = bin_kernel(n)
        np.testing.assert_array_equal(np.diff(kernel.start), kernel.count[:-1])
        assert kernel.start[0] == 1
        assert kernel.start[-1] + kernel.count[-1] == (n + 1) // 2
