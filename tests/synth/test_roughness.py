"""The rough edges against their stated process."""

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import gamma

from printmetrics.synth.roughness import autocovariance, rough_pair


def draws(count: int, n: int = 400, **process: float) -> np.ndarray:
    rng = np.random.default_rng(5)
    return np.stack([rough_pair(n, 0.5, rng=rng, **process) for _ in range(count)])


# Source: A / (sd^2 xi) = 2 sqrt(pi) Gamma(H + 1/2) / Gamma(H); S(0) is the integral of the autocovariance.
@pytest.mark.parametrize(("exponent", "ratio"), [(0.25, 1.19814), (0.5, 2.0), (0.75, 2.62206), (1.0, 3.14159)])
def test_autocovariance_integrates_to_the_spectrum_at_zero(exponent: float, ratio: float) -> None:
    near, _ = quad(autocovariance, 0, 1, args=(2.0, 3.0, exponent), limit=200)
    far, _ = quad(autocovariance, 1, 300, args=(2.0, 3.0, exponent), limit=200)
    assert 2 * (near + far) == pytest.approx(ratio * 4.0 * 3.0, rel=1e-4)


# Source: G. Palasantzas, Phys. Rev. B 48, 14472 (1993), two-sided in f.
@pytest.mark.parametrize("exponent", [0.5, 0.75, 1.0])
def test_autocovariance_is_the_transform_of_the_palasantzas_spectrum(exponent: float) -> None:
    sd, xi, lag = 1.5, 4.0, 2.7
    a = 2 * np.sqrt(np.pi) * gamma(exponent + 0.5) / gamma(exponent) * sd**2 * xi
    value, _ = quad(
        lambda f: 2 * a / (1 + (2 * np.pi * f * xi) ** 2) ** (exponent + 0.5),
        0,
        np.inf,
        weight="cos",
        wvar=2 * np.pi * lag,
    )
    assert autocovariance(lag, sd, xi, exponent) == pytest.approx(value, rel=1e-4)


# Source: the case H = 1/2 is exponential.
def test_autocovariance_with_exponent_one_half_is_exponential() -> None:
    lag = np.array([0.0, 0.1, 3.0, 20.0])
    np.testing.assert_allclose(autocovariance(lag, 2.0, 5.0, 0.5), 4 * np.exp(-lag / 5), rtol=1e-6)


@pytest.mark.parametrize("exponent", [0.3, 0.5, 0.9])
def test_edges_have_the_stated_covariance_at_every_lag(exponent: float) -> None:
    edges = draws(600, sd=0.7, correlation_length=6.0, exponent=exponent, rho=0.0)[:, 0]
    for lag in (0, 1, 6, 24):
        product = edges[:, lag:] * edges[:, : edges.shape[1] - lag]
        # The mean over 600 draws has a standard error of about 1 % of the variance.
        assert product.mean() == pytest.approx(autocovariance(lag / 2, 0.7, 6.0, exponent), abs=0.03 * 0.49)


@pytest.mark.parametrize("rho", [-0.9, 0.0, 0.6])
def test_left_and_right_are_correlated_as_stated(rho: float) -> None:
    left, right = draws(400, sd=1.0, correlation_length=5.0, exponent=0.5, rho=rho).transpose(1, 0, 2)
    assert (left * right).mean() == pytest.approx(rho, abs=0.04)
    assert (right**2).mean() == pytest.approx(1.0, abs=0.04)


# Source: LWR^2 = 2 sd^2 (1 - rho).
def test_full_correlation_is_wiggle_without_width() -> None:
    left, right = draws(1, sd=1.0, correlation_length=5.0, exponent=0.5, rho=1.0)[0]
    np.testing.assert_allclose(right, left, atol=1e-12)


def test_ends_of_an_edge_are_not_tied_together() -> None:
    # 512 points: a power of two, so nothing but the margin keeps the ends apart.
    edges = draws(400, n=512, sd=1.0, correlation_length=10.0, exponent=0.5, rho=0.0)[:, 0]
    assert abs((edges[:, 0] * edges[:, -1]).mean()) < 0.2


# Source: E s^2 / sd^2 = 1 - v(L), exponential; v = 0.09500 at L = 20 xi.
def test_short_pieces_lose_the_variance_of_their_mean() -> None:
    edges = draws(500, n=400, sd=1.0, correlation_length=10.0, exponent=0.5, rho=0.0)
    assert np.sqrt(edges.var(axis=-1).mean()) == pytest.approx(0.95131, rel=0.02)


def test_same_seed_gives_the_same_edges() -> None:
    process = {"sd": 1.0, "correlation_length": 5.0, "exponent": 0.7, "rho": 0.3}
    one, two, other = (rough_pair(50, 0.5, rng=np.random.default_rng(s), **process) for s in (3, 3, 4))
    np.testing.assert_array_equal(one, two)
    assert not np.allclose(one, other)
