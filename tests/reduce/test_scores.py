"""Scores: how often they raise a false alarm, and what they come to in words."""

import numpy as np
import pytest
from scipy import stats

from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.reduce.scores import (
    QUANTITIES,
    SAMPLING,
    Score,
    judge,
    log_ratio,
    score,
    summarise,
)
from eddyshed.reduce.settings import BenchmarkSettings
from eddyshed.reduce.statistics.estimate import Estimate
from eddyshed.solver.errors import DataError

STEP = 0.25
SETTINGS = BenchmarkSettings()
TOLERANCES = {
    "mean": SETTINGS.mean_tolerance,
    "variance": SETTINGS.variance_tolerance,
    "integral time": SETTINGS.time_tolerance,
    "distribution": SETTINGS.distribution_tolerance,
}


def red(shape, seed, variance=1.0, mean=0.0, rate=1.0):
    """Independent red series: decay time 1 / rate, shape (member, time, mode)."""
    members, times, modes = shape
    process = OrnsteinUhlenbeck(rate=[[rate]], covariance=[[variance]])
    rng = np.random.default_rng(seed)
    series = process.simulate(times, STEP, rng, members=members * modes)
    return series.reshape(members, modes, times).transpose(0, 2, 1) + mean


def compared(truth, reduced, seed=0, reduced_step=STEP):
    """All scores by name, and the verdict."""
    rng = np.random.default_rng(seed)
    sides = summarise(truth, STEP, rng), summarise(reduced, reduced_step, rng)
    scores = score(
        SETTINGS, truth, STEP, sides[0], reduced, reduced_step, sides[1], rng
    )
    assert tuple(s.quantity for s in scores) == QUANTITIES
    labels = tuple(f"mode {k}" for k in range(truth.shape[2]))
    return {s.quantity: s for s in scores}, judge(scores, labels)


# --- Errors -----------------------------------------------------------------


def test_logarithm_of_a_ratio():
    # Values by hand; the error by first-order propagation (the "delta method",
    # Casella & Berger, Statistical Inference, section 5.5.4).
    found = log_ratio(Estimate([2.0, 3.0], [0.1, 0.3]), Estimate([1.0, 6.0], [0.1, 0]))
    np.testing.assert_allclose(found.value, [np.log(2), -np.log(2)], rtol=1e-15)
    np.testing.assert_allclose(found.error, [np.hypot(0.05, 0.1), 0.1], rtol=1e-14)


def test_error_of_the_logarithm_of_a_ratio_is_its_scatter():
    rng = np.random.default_rng(1)
    a, b = 2 + 0.04 * rng.standard_normal(40_000), 5 + 0.3 * rng.standard_normal(40_000)
    found = log_ratio(Estimate(2.0, 0.04), Estimate(5.0, 0.3))
    # Second order adds a share of (0.06)^2 to the scatter; the scatter itself is
    # known to sqrt(1 / 2 n) = 0.35 %. Three of these, and twice the share.
    assert np.std(np.log(a / b)) == pytest.approx(found.error, rel=0.018)


# --- False alarms -----------------------------------------------------------


def test_equal_processes_raise_few_alarms():
    # 150 pairs of records of one process, 300 integral times each: the 5 % level
    # that is aimed at makes more than 18 alarms of one kind in 5 of 10^4 cases
    # (binomial), and none at all in 5 of 10^4 as well.
    pairs = 150
    most, least = (
        int(f(5e-4, pairs, 0.05)) for f in (stats.binom.isf, stats.binom.ppf)
    )
    assert (least, most) == (1, 18)
    truth = red((1, 1200, pairs), 2)
    reduced = red((4, 300, pairs), 3)
    scores, _ = compared(truth, reduced)
    for quantity, found in scores.items():
        alarms = np.sum(~found.sampling)
        assert alarms <= most, quantity
        # The same within what the words say: at two errors, or five percent.
        level = 0.05 if quantity == "distribution" else 2 * stats.norm.sf(SAMPLING)
        np.testing.assert_array_equal(found.sampling, found.p_value > level)
        if quantity != "integral time":  # which is known to be shy
            assert alarms >= least, quantity


def test_p_values_are_two_sided():
    scores, _ = compared(red((1, 1200, 3), 4), red((1, 1200, 3), 5))
    for quantity in QUANTITIES[:3]:
        found = scores[quantity]
        z = found.difference.value / found.difference.error
        # Round-off of the tails.
        np.testing.assert_allclose(found.p_value, 2 * stats.norm.sf(abs(z)), rtol=1e-12)


def test_differences_are_what_they_say():
    # Two long records, in other units and of other steps: means half a deviation
    # apart, variances by 2, times by 1.5.
    truth = red((1, 40_000, 2), 6, variance=4.0, mean=10.0)
    reduced = red((4, 10_000, 2), 7, variance=8.0, mean=11.0, rate=2 / 3)
    scores, _ = compared(truth, reduced)
    expected = {
        "mean": 0.5,
        "variance": np.log(2.0),
        "integral time": np.log(1.5),
        # Between normals of means m apart and deviations s and t, E|m + (s - t) n|.
        "distribution": stats.foldnorm(0.5 / 0.41421356, scale=0.41421356).mean(),
    }
    for quantity, true in expected.items():
        found = scores[quantity].difference
        assert np.all(np.abs(found.value - true) < 4 * found.error), quantity
        assert np.all(found.error < 0.2)
        assert scores[quantity].tolerance == TOLERANCES[quantity]
        close = np.abs(found.value) < TOLERANCES[quantity]
        np.testing.assert_array_equal(scores[quantity].close, close)


# --- Verdicts on processes --------------------------------------------------


def test_twice_the_variance_is_off():
    scores, verdict = compared(red((1, 4000, 2), 8), red((4, 2000, 2), 9, variance=2.0))
    assert verdict.word == "off"
    assert "variance of mode" in verdict.reason
    assert not scores["variance"].close.any()
    assert scores["mean"].close.all()
    assert verdict.count == 8
    assert verdict.within_tolerance == sum(s.close.sum() for s in scores.values())
    assert verdict.within_sampling == sum(s.sampling.sum() for s in scores.values())


def test_a_tenth_more_variance_is_close_where_records_are_long():
    # ln 1.1 = 0.095, known to 0.02 with 10^4 decay times on either side: seen, and
    # within the tolerance of 0.25.
    truth, reduced = red((1, 40_000, 3), 10), red((4, 20_000, 3), 11, variance=1.1)
    scores, verdict = compared(truth, reduced)
    assert verdict.word == "close"
    assert not scores["variance"].sampling.any()
    assert "furthest from the truth: variance" in verdict.reason


def test_a_wrong_memory_alone_is_close():
    # Integral times are scored, but not asked of a close closure.
    truth, reduced = red((1, 20_000, 2), 12), red((4, 20_000, 2), 13, rate=0.5)
    scores, verdict = compared(truth, reduced)
    assert verdict.word == "close"
    assert not scores["integral time"].close.any()
    assert "integral time of mode" in verdict.reason


def test_long_equal_records_are_indistinguishable():
    verdict = compared(red((1, 8000, 2), 14), red((4, 4000, 2), 15))[1]
    assert verdict.word == "indistinguishable"
    assert "too short" not in verdict.reason
    assert verdict.count == 8


@pytest.mark.parametrize("variance", [1.0, 1.3])
def test_short_records_are_indistinguishable_and_say_so(variance):
    verdict = compared(red((1, 160, 2), 16), red((1, 160, 2), 17, variance=variance))[1]
    assert verdict.word == "indistinguishable"
    assert "the records are too short to tell: errors of the " in verdict.reason
    assert "variance" in verdict.reason


def test_a_borderline_is_undecided():
    # ln 1.4 = 0.34 is beyond the tolerance of 0.25 by less than two errors of 0.07,
    # and is no chance.
    truth, reduced = red((1, 2400, 2), 18), red((2, 2400, 2), 21, variance=1.4)
    scores, verdict = compared(truth, reduced)
    assert not scores["variance"].sampling.any()
    assert verdict.word == "undecided"
    assert verdict.reason.endswith("by less than its sampling error")


# --- Verdicts on scores -----------------------------------------------------


def made(p_values=None, **differences):
    """Scores of given differences in units of the tolerance, with their errors.

    Every mode has the same; a p-value is that of a normal, or one that is given.
    """
    scores = []
    for quantity, tolerance in TOLERANCES.items():
        value, error = differences.get(quantity.replace(" ", "_"), (0.0, 0.1))
        value = tolerance * np.broadcast_to(value, 2)
        error = tolerance * np.broadcast_to(error, 2)
        p = 2 * stats.norm.sf(np.abs(value) / error)
        if p_values is not None:
            p = np.full(2, p_values)
        scores.append(
            Score(
                quantity=quantity,
                difference=Estimate(value, error),
                sampling=np.abs(value) < SAMPLING * error,
                tolerance=tolerance,
                close=np.abs(value) < tolerance,
                p_value=p,
            )
        )
    return scores


@pytest.mark.parametrize(
    ("differences", "word"),
    [
        ({}, "indistinguishable"),
        # Seen, and small.
        ({"variance": (0.9, 0.1)}, "close"),
        # Large, beyond doubt or not.
        ({"variance": (-1.3, 0.1)}, "off"),
        ({"variance": (-1.1, 0.1)}, "undecided"),
        ({"mean": (1.3, 0.1)}, "off"),
        ({"distribution": (1.3, 0.1)}, "off"),
        ({"integral_time": (9.0, 0.1)}, "close"),
        # One that is off outweighs one that is open.
        ({"mean": (1.1, 0.1), "variance": (1.3, 0.1)}, "off"),
        # An error that is not known decides nothing.
        ({"mean": (0.5, 0.1), "variance": (9.0, np.inf)}, "undecided"),
    ],
)
def test_words(differences, word):
    verdict = judge(made(**differences), ("a", "b"))
    assert verdict.word == word
    assert verdict.count == 8


def test_short_records_are_named_by_what_they_leave_open():
    wide = made(mean=(0.1, 0.6), distribution=(0.1, 0.51), integral_time=(0, 9))
    verdict = judge(wide, ("a", "b"))
    assert verdict.word == "indistinguishable"
    assert "errors of the mean and distribution are above half" in verdict.reason
    assert "too short" not in judge(made(mean=(0.1, 0.49)), ("a", "b")).reason


def test_the_furthest_is_named():
    scores = made(variance=([0.1, -0.7], 0.1), mean=(0.3, 0.1))
    verdict = judge(scores, ("a", "b"))
    assert verdict.reason == (
        "furthest from the truth: variance of b, at 0.7 of its tolerance"
    )


@pytest.mark.parametrize(("p_value", "is_chance"), [(0.0063, True), (0.0062, False)])
def test_the_smallest_of_many_p_values_is_held_to_their_number(p_value, is_chance):
    # Holm (1979), Scand. J. Statist. 6, 65: of 8 values at 5 % the smallest is held
    # against 0.05 / 8 = 0.00625.
    verdict = judge(made(p_values=p_value), ("a", "b"))
    assert (verdict.word == "indistinguishable") == is_chance


def test_one_in_ten_may_lie_beyond_its_sampling_error():
    many = [
        Score(
            quantity=s.quantity,
            difference=Estimate(np.zeros(5), np.full(5, 1e-3)),
            sampling=np.ones(5, dtype=bool),
            tolerance=s.tolerance,
            close=np.ones(5, dtype=bool),
            p_value=np.ones(5),
        )
        for s in made()
    ]
    many[0].sampling[:2] = False  # 18 of 20
    assert judge(many, tuple("abcde")).word == "indistinguishable"
    many[1].sampling[0] = False  # 17 of 20
    assert judge(many, tuple("abcde")).word == "close"


def test_constant_series_have_no_summary():
    series = red((1, 100, 2), 20)
    series[:, :, 1] = 3.0
    with pytest.raises(DataError, match="mode 1 is constant"):
        summarise(series, STEP, np.random.default_rng(1))


def test_an_unknown_error_is_no_praise():
    # Whatever the values, a difference of unknown error cannot be called small.
    unknown = Estimate(np.array([0.01]), np.array([np.inf]))
    scores = [
        Score(
            quantity=quantity,
            difference=unknown,
            sampling=np.array([True]),
            tolerance=0.25,
            close=np.array([True]),
            p_value=np.array([1.0]),
        )
        for quantity in ("mean", "variance", "integral time", "distribution")
    ]
    verdict = judge(scores, ("slow",))
    assert verdict.word == "undecided"
    assert "not known" in verdict.reason
