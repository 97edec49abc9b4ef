"""Verdicts: uncertainty counts against whoever must prove, and nothing passes in silence."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import norm

from printmetrics.flags import DECISIVE, Flag
from printmetrics.verdict import DECISION_RULE, GUARD, judge

LOWER, UPPER, U = 18.0, 22.0, 0.5
NONE = Flag.NONE
COUNT, NUMBER = True, False


# Source: derived, the normal distribution itself. P(true value <= limit) when reading = limit - g.
@pytest.mark.parametrize(("factor", "probability"), [(GUARD, 0.9500), (2.0, 0.9772)])
def test_a_reading_at_the_guard_band_conforms_with_the_stated_probability(factor: float, probability: float) -> None:
    reading = UPPER - factor * U
    assert norm.cdf(UPPER, loc=reading, scale=U) == pytest.approx(probability, abs=5e-5)
    assert judge(NUMBER, reading - 1e-9, U, NONE, None, UPPER, factor) == "conforming"
    assert judge(NUMBER, reading + 1e-9, U, NONE, None, UPPER, factor) == "undecided"


@pytest.mark.parametrize(
    ("value", "verdict"),
    [
        (17.0, "nonconforming"), (17.17, "nonconforming"), (17.18, "undecided"), (18.0, "undecided"),
        (18.82, "undecided"), (18.83, "conforming"), (20.0, "conforming"), (21.17, "conforming"),
        (21.18, "undecided"), (22.0, "undecided"), (22.82, "undecided"), (22.83, "nonconforming"),
    ],
)  # fmt: skip
def test_between_the_guard_bands_a_reading_is_undecided(value: float, verdict: str) -> None:
    assert judge(NUMBER, value, U, NONE, LOWER, UPPER) == verdict  # g = 0.8225


def test_one_limit_alone_is_judged() -> None:
    assert judge(NUMBER, 30.0, U, NONE, LOWER, None) == "conforming"
    assert judge(NUMBER, 10.0, U, NONE, None, UPPER) == "conforming"
    assert judge(NUMBER, 10.0, U, NONE, LOWER, None) == "nonconforming"


def test_where_the_guard_bands_meet_nothing_conforms() -> None:
    assert judge(NUMBER, 20.0, 2.0, NONE, LOWER, UPPER) == "undecided"


@pytest.mark.parametrize("limit", [LOWER, UPPER])
@pytest.mark.parametrize("is_count", [COUNT, NUMBER])
def test_an_exact_reading_on_its_limit_conforms(is_count: bool, limit: float) -> None:
    assert judge(is_count, limit, 0.0, NONE, LOWER, UPPER) == "conforming"


# Powers of two, so that the guard band is exact in binary.
@pytest.mark.parametrize(("inner", "outer"), [(18.5, 17.5), (21.5, 22.5)])
def test_the_ends_of_the_guard_band_belong_inside(inner: float, outer: float) -> None:
    assert judge(NUMBER, inner, 0.25, NONE, LOWER, UPPER, 2.0) == "conforming"
    assert judge(NUMBER, outer, 0.25, NONE, LOWER, UPPER, 2.0) == "undecided"


def test_without_limits_there_is_no_verdict() -> None:
    assert judge(NUMBER, 20.0, U, Flag.SATURATED, None, None) == ""


@pytest.mark.parametrize("is_count", [True, False])
def test_a_withheld_reading_is_undecided(is_count: bool) -> None:
    assert judge(is_count, None, None, NONE, LOWER, UPPER) == "undecided"


@pytest.mark.parametrize("value", [0.0, 20.0, 99.0])
def test_an_unknown_uncertainty_is_undecided(value: float) -> None:
    assert judge(NUMBER, value, None, NONE, LOWER, UPPER) == "undecided"


@pytest.mark.parametrize("flag", list(DECISIVE))
@pytest.mark.parametrize("value", [0.0, 20.0, 99.0])
def test_a_decisive_flag_is_undecided(flag: Flag, value: float) -> None:
    assert judge(NUMBER, value, U, flag | Flag.SHORT_SAMPLING, LOWER, UPPER) == "undecided"


# Source: the list of flags that decide, as documented for users.
def test_the_decisive_flags_are_the_documented_ones() -> None:
    documented = (
        "saturated not_resolved defocused levels_unresolved count_differs mark_missing scale_expired outside_validity"
    )
    assert sorted(DECISIVE.words().split(";")) == sorted(documented.split())


@pytest.mark.parametrize("flag", list(~DECISIVE))
def test_another_flag_leaves_the_verdict(flag: Flag) -> None:
    assert judge(NUMBER, 20.0, U, flag, LOWER, UPPER) == "conforming"


@pytest.mark.parametrize(("value", "verdict"), [(0.0, "conforming"), (1.0, "conforming"), (2.0, "nonconforming")])
def test_a_count_is_compared_as_it_is(value: float, verdict: str) -> None:
    assert judge(COUNT, value, None, NONE, None, 1.0) == verdict


def test_a_missing_line_breaks_the_limit_of_the_count() -> None:
    assert judge(COUNT, 2.0, None, Flag.COUNT_DIFFERS, 3.0, 3.0) == "nonconforming"


def test_a_count_within_limits_does_not_pass_when_items_are_missing() -> None:
    assert judge(COUNT, 0.0, None, Flag.COUNT_DIFFERS, None, 0.0) == "undecided"


@pytest.mark.parametrize("flag", [f for f in DECISIVE if f != Flag.COUNT_DIFFERS])
@pytest.mark.parametrize("value", [0.0, 5.0])
def test_a_count_in_a_picture_that_cannot_be_trusted_is_undecided(flag: Flag, value: float) -> None:
    assert judge(COUNT, value, None, flag | Flag.COUNT_DIFFERS, None, 0.0) == "undecided"


@pytest.mark.parametrize("is_count", [True, False])
def test_not_a_number_never_gets_a_decision(is_count: bool) -> None:
    assert judge(is_count, math.nan, U, NONE, LOWER, UPPER) == "undecided"
    assert judge(NUMBER, 20.0, math.nan, NONE, LOWER, UPPER) == "undecided"


@given(value=st.floats(-100, 100), u=st.floats(0, 10), less=st.floats(0, 1))
def test_a_smaller_uncertainty_never_takes_a_decision_back(value: float, u: float, less: float) -> None:
    verdict = judge(NUMBER, value, u, NONE, LOWER, UPPER)
    if verdict != "undecided":
        assert judge(NUMBER, value, u * less, NONE, LOWER, UPPER) == verdict


def test_the_rule_names_its_guard_band() -> None:
    assert "1.645 u" in DECISION_RULE
    assert "in the manner of ISO 14253-1" in DECISION_RULE
