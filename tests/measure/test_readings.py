"""Uncertainties combine as the GUM says."""

import math

import pytest
from scipy.stats import t as student

from printmetrics.measure.readings import Reading, effective_dof, expanded

# Source: JCGM 100:2008 (GUM), example H.1.6, end gauge: u in nm, and degrees of freedom.
END_GAUGE = [(25.0, 18.0), (9.7, 25.6), (2.9, 50.0), (16.6, 2.0)]


# Source: GUM H.1 gives 32 nm; unrounded, derived from the same parts.
def test_combined_uncertainty_of_gum_h1() -> None:
    noise, sampling, common = 25.0, math.hypot(9.7, 2.9), 16.6
    reading = Reading(item="all", quantity="length", value=1.0, unit="nm",
                      u_noise=noise, u_sampling=sampling, u_common=common)  # fmt: skip
    assert reading.u == pytest.approx(31.671, abs=5e-4)


# Source: GUM H.1.6 truncates to 16; unrounded, derived from the same parts.
def test_effective_degrees_of_freedom_of_gum_h1() -> None:
    assert effective_dof(END_GAUGE) == pytest.approx(16.76, abs=5e-3)


# Source: GUM table G.2, t for 99 % and 16 degrees of freedom: 2.92.
def test_expanded_uncertainty_of_gum_h1() -> None:
    assert expanded(1.0, 16, 0.99) == pytest.approx(2.921, abs=5e-4)
    assert expanded(31.671, 16, 0.99) == pytest.approx(92.5, abs=0.05)


# Source: GUM G.4.1: nu_eff lies between the smallest part's and the sum.
def test_effective_degrees_of_freedom_of_equal_parts_add_up() -> None:
    assert effective_dof([(1.0, 5.0)] * 4) == pytest.approx(20.0, rel=1e-12)


def test_a_part_known_exactly_adds_only_its_uncertainty() -> None:
    assert effective_dof([(1.0, 10.0), (1.0, math.inf)]) == pytest.approx(40.0, rel=1e-12)
    assert effective_dof([(1.0, math.inf)]) == math.inf
    assert effective_dof([]) == math.inf


# Source: scipy.stats, an independent code.
@pytest.mark.parametrize("dof", [1.0, 2.5, 16.76, 1e3])
def test_the_factor_is_students_for_any_degrees_of_freedom(dof: float) -> None:
    assert expanded(2.0, dof) == pytest.approx(2.0 * student.ppf(0.975, dof), rel=1e-9)


# Source: the normal distribution, GUM table G.1: 1.960 for 95 %.
def test_the_factor_for_endless_degrees_of_freedom_is_normal() -> None:
    assert expanded(1.0, math.inf) == pytest.approx(1.95996, abs=5e-6)


def test_an_unknown_uncertainty_stays_unknown() -> None:
    assert Reading(item="L1", quantity="width_mean", value=1.0, unit="um").u is None


def test_parts_that_do_not_apply_are_left_out() -> None:
    reading = Reading(item="L1", quantity="width_mean", value=1.0, unit="um", u_noise=0.3, u_common=0.4)
    assert reading.u == pytest.approx(0.5, rel=1e-12)
