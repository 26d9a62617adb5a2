"""Verdicts follow from intervals, and are wrong no more often than they say."""

import dataclasses
import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats

from eddyshed.reduce.audit import CONFIDENCE, decide
from eddyshed.reduce.audit.findings import Assumption, Measured, judge, unknown

NUMBERS = st.floats(-1e6, 1e6)
ERRORS = st.floats(0, 1e6)
SENSES = st.sampled_from(["at least", "at most"])
MOST = Assumption(
    name="n",
    sentence="S.",
    closures=("white", "coloured"),
    statistic="s",
    setting="kurtosis",
    sense="at most",
    meaning="m",
    remedy="r",
)


def judged(values, errors, threshold=1.0, assumption=MOST, **fields):
    places = [f"p{k}" for k in range(len(values))]
    measured = Measured(
        value=np.array(values), error=np.array(errors), places=places, **fields
    )
    return judge(assumption, measured, threshold, ("coloured",))


# --- The verdict ------------------------------------------------------------


def test_the_interval_has_95_percent():
    assert pytest.approx(stats.norm.ppf(0.975), abs=5e-5) == CONFIDENCE


@given(NUMBERS, ERRORS, NUMBERS, SENSES)
def test_verdict_is_that_of_the_whole_interval(value, error, threshold, sense):
    verdict, more = decide(value, error, threshold, sense)
    low, high = value - CONFIDENCE * error, value + CONFIDENCE * error
    # An end on the threshold to round-off may fall to either side.
    assume(not (math.isclose(low, threshold, rel_tol=1e-9, abs_tol=1e-9)))
    assume(not (math.isclose(high, threshold, rel_tol=1e-9, abs_tol=1e-9)))
    if low < threshold < high:
        assert verdict == "undecided"
        assert more > 1
    else:
        is_good = low > threshold if sense == "at least" else high < threshold
        assert verdict == ("holds" if is_good else "fails")
        assert more == 1


@given(NUMBERS, st.floats(1e-3, 1e6), NUMBERS, SENSES)
def test_more_data_settles_it(value, error, threshold, sense):
    # Errors fall with the square root of the length, if the value stays.
    assume(abs(value - threshold) > 1e-9 * error)
    verdict, more = decide(value, error, threshold, sense)
    assume(verdict == "undecided")
    settled, again = decide(value, error / math.sqrt(1.001 * more), threshold, sense)
    assert settled != "undecided"
    assert again == 1
    short, _ = decide(value, error / math.sqrt(0.999 * more), threshold, sense)
    assert short == "undecided"


@given(NUMBERS, ERRORS, NUMBERS)
def test_the_two_senses_are_opposite(value, error, threshold):
    opposite = {"holds": "fails", "fails": "holds", "undecided": "undecided"}
    least, more = decide(value, error, threshold, "at least")
    most, other = decide(value, error, threshold, "at most")
    assert most == opposite[least]
    assert more == other


@given(NUMBERS, NUMBERS, SENSES)
def test_unknown_errors_leave_it_open(value, threshold, sense):
    assert decide(value, math.inf, threshold, sense) == ("undecided", math.inf)
    assert decide(value, 1.0, value, sense) == ("undecided", math.inf)
    assert decide(value, 0.0, value, sense) == ("undecided", math.inf)


# --- Several places ----------------------------------------------------------


def test_the_worst_place_is_named_and_only_closures_in_use():
    found = judged([0.2, 3.0, 0.5], [0.1, 0.2, 0.1])
    assert (found.verdict, found.where) == ("fails", "p1")
    assert found.closures == ("coloured",)
    assert (found.value, found.error) == (3.0, 0.2)
    assert found.details["value"] == [0.2, 3.0, 0.5]
    assert found.settle == ""


def test_at_least_is_the_other_way_round():
    least = dataclasses.replace(MOST, sense="at least")
    found = judged([0.2, 3.0, 0.5], [0.1, 0.2, 0.1], assumption=least)
    assert (found.verdict, found.where) == ("fails", "p0")
    found = judged([2.0, 3.0, 1.1], [0.1, 0.2, 0.1], assumption=least)
    assert (found.verdict, found.where) == ("undecided", "p2")
    found = judged([2.0, 3.0], [0.1, 0.2], assumption=least)
    assert (found.verdict, found.where) == ("holds", "p0")


def test_it_holds_only_if_it_holds_everywhere():
    assert judged([0.2, 0.3], [0.1, 0.1]).verdict == "holds"
    found = judged([0.2, 0.9], [0.1, 0.1])
    assert (found.verdict, found.where) == ("undecided", "p1")
    # (1.96 * 0.1 / 0.1)^2
    assert found.more == pytest.approx(3.84, abs=0.01)
    assert found.settle == "about 3.8 times the truth"


def test_an_error_that_is_not_known_leaves_it_open_with_what_is_missing():
    found = judged([0.2, 0.1], [0.1, math.inf], more=2.5)
    assert (found.verdict, found.where) == ("undecided", "p1")
    assert found.settle == "about 2.5 times the truth"
    # But not where another place fails whatever that one does.
    assert judged([3.0, 0.1], [0.1, math.inf]).verdict == "fails"


def test_values_that_are_no_numbers_leave_it_open():
    assert judged([math.nan, 0.1], [0.1, 0.1]).verdict == "undecided"
    assert judged([math.inf], [math.nan]).verdict == "undecided"


def test_unknown_says_why():
    found = unknown(MOST, 1.0, ("white",), "mode a is constant")
    assert (found.verdict, found.settle) == ("undecided", "mode a is constant")
    assert math.isnan(found.value)


@pytest.mark.parametrize("count", [1, 12])
@pytest.mark.parametrize("freedom", [4.0, math.inf])
def test_false_alarms_over_many_modes_are_2_5_percent(count, freedom):
    # All on the threshold: 1 - (1 - 0.025 / m)^m, just below 2.5 % (Bonferroni).
    rng = np.random.default_rng(count)
    draws, fails = 1500, 0
    for _ in range(draws):
        values = 1 + rng.standard_normal(count)
        errors = np.ones(count)
        if math.isfinite(freedom):
            errors = np.sqrt(rng.chisquare(freedom, count) / freedom)
        fails += judged(values, errors, freedom=freedom).verdict == "fails"
    expected = 1 - (1 - 0.025 / count) ** count
    # Four standard errors of a share: 6e-5 by chance.
    spread = math.sqrt(expected * (1 - expected) / draws)
    assert abs(fails / draws - expected) < 4 * spread


def test_the_largest_of_several_tries_needs_more():
    quantile = stats.norm.ppf(1 - 0.025 / 8)
    assert judged([2.0], [0.99 / quantile], tries=8).verdict == "fails"
    assert judged([2.0], [1.01 / quantile], tries=8).verdict == "undecided"


def test_ratios_are_compared_by_their_logarithms():
    ratio = Assumption(
        **{
            **{k: getattr(MOST, k) for k in Assumption.__dataclass_fields__},
            "logarithmic": True,
        }
    )
    # ln 2 = 0.69 above; errors of 0.5 and 0.7 of 2 are 0.25 and 0.35 of the logarithm.
    for error, verdict in ((0.7, "fails"), (0.72, "undecided")):
        measured = Measured(value=np.array([2.0]), error=np.array([error]), places="a")
        assert judge(ratio, measured, 1.0, ()).verdict == verdict
