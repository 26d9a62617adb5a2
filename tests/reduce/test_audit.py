"""Findings: verdicts that follow from intervals, on processes that are known."""

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import stats
from splits import resolved_only

from eddyshed.reduce.audit import CONFIDENCE, audit, decide, detrended
from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.reduce.settings import AuditSettings
from eddyshed.solver.errors import DataError

STEP = 0.2
NAMES = ("separation", "normality: tails", "normality: symmetry", "truth length")

NUMBERS = st.floats(-1e6, 1e6)
ERRORS = st.floats(0, 1e6)
SENSES = st.sampled_from(["at least", "at most"])


def red(decay_times, count, seed, members=1):
    """Independent red series of unit variance, shape (time, series)."""
    size = len(decay_times)
    process = OrnsteinUhlenbeck(
        rate=np.diag(1 / np.array(decay_times)), covariance=np.eye(size)
    )
    return process.simulate(count, STEP, np.random.default_rng(seed))[0]


def findings(x, coupling, seed=1, **thresholds):
    """Findings by name; the split holds nothing else that is used."""
    found = audit(
        AuditSettings(**thresholds),
        resolved_only(x, step=STEP),
        coupling[np.newaxis],
        np.random.default_rng(seed),
    )
    assert [finding.name for finding in found] == list(NAMES)
    return {finding.name: finding for finding in found}


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


# --- Known processes --------------------------------------------------------


def test_a_gaussian_system_with_separated_times_passes():
    # Slow modes of 10 and 15 decay times of their noise, 660 and 440 times long.
    series = red([10, 15, 1, 1], 33_000, 81)
    x, coupling = series[:, :2], series[:, 2:]
    found = findings(x, coupling)
    assert {finding.verdict for finding in found.values()} == {"holds"}
    assert all(finding.settle == "" for finding in found.values())
    # Ratios of integral times are those of decay times (3.5 errors: 5e-4 by chance
    # for each number); the integral times end at 0.05 of the correlation alike.
    details = found["separation"].details
    ratio, error = np.array(details["value"]), np.array(details["error"])
    assert np.all(np.abs(ratio - [10, 15]) < 3.5 * error)
    assert details["mode"] == ["slow 0", "slow 1"]
    # The length is counted in integral times, 0.95 of the decay times here.
    details = found["truth length"].details
    ratio, error = np.array(details["value"]), np.array(details["error"])
    assert np.all(np.abs(ratio - [660 / 0.95, 440 / 0.95]) < 3.5 * error)


def test_the_worst_mode_is_named():
    series = red([20, 6, 40, 1, 1, 1], 33_000, 82)
    coupling = series[:, 3:].copy()
    coupling[:, 2] = coupling[:, 2] ** 3
    found = findings(series[:, :3], coupling)
    assert found["separation"].where == "slow 1"
    assert found["normality: tails"].where == "slow 2"
    assert found["truth length"].where == "slow 2"
    for finding in found.values():
        place = finding.details["mode"].index(finding.where)
        assert finding.value == finding.details["value"][place]
        assert finding.error == finding.details["error"][place]


def test_no_separation_fails():
    series = red([2, 2], 33_000, 83)
    finding = findings(series[:, :1], series[:, 1:])["separation"]
    assert finding.verdict == "fails"
    assert abs(finding.value - 1) < 3.5 * finding.error
    assert finding.sense == "at least"
    assert "expect wrong correlation times" in finding.meaning


def test_rare_strong_bursts_fail_the_tails_only():
    # The product of two independent normals has kurtosis 9 and no skewness: fourth
    # moments 3 times 3 (Isserlis), third moments zero.
    series = red([10, 1, 1], 66_000, 84)
    found = findings(series[:, :1], series[:, 1:2] * series[:, 2:])
    tails = found["normality: tails"]
    assert tails.verdict == "fails"
    assert tails.sense == "at most"
    # The kurtosis of heavy tails scatters more than a normal: five errors.
    assert abs(tails.value - 9) < 5 * tails.error
    assert found["normality: symmetry"].verdict == "holds"


@pytest.mark.parametrize("sign", [1, -1])
def test_pushes_one_way_fail_the_symmetry_only(sign):
    # n + a (n^2 - 1) of a standard normal n, a = 0.2: variance 1 + 2 a^2, third
    # moment 6 a + 8 a^3, fourth 3 + 60 a^2 + 60 a^4 (moments of a normal, by hand).
    a = 0.2
    n = red([10, 1], 66_000, 85)
    skewed = sign * (n[:, 1:] + a * (n[:, 1:] ** 2 - 1))
    found = findings(n[:, :1], skewed, kurtosis=7.0)
    variance = 1 + 2 * a**2
    symmetry, tails = found["normality: symmetry"], found["normality: tails"]
    assert symmetry.verdict == "fails"
    assert tails.verdict == "holds"
    expected = (6 * a + 8 * a**3) / variance**1.5
    assert abs(symmetry.value - expected) < 3.5 * symmetry.error
    expected = (3 + 60 * a**2 + 60 * a**4) / variance**2
    assert abs(tails.value - expected) < 3.5 * tails.error


def test_what_is_linear_in_the_resolved_state_is_taken_off():
    # A restoring force is no noise: it is as slow as the mode, and as skewed.
    n = red([10, 1], 33_000, 86)
    x = n[:, :1] + 0.5 * (n[:, :1] ** 2 - 1)
    coupling = n[:, 1:] - 3 * x + 7
    found = findings(x, coupling)
    for name in NAMES[:3]:
        assert found[name].verdict == "holds"
    (left,) = detrended(coupling[np.newaxis], x[np.newaxis])
    np.testing.assert_allclose(left.mean(axis=0), 0, atol=1e-12)
    np.testing.assert_allclose(x.T @ left / len(x), 0, atol=1e-12)
    # What is left is the noise, but for a slope that chance gives it: about
    # sqrt(2 / 660), times the size of x.
    np.testing.assert_allclose(left, n[:, 1:] - n[:, 1:].mean(), atol=0.6)
    # Least squares as numpy solves it, with the constant as a column.
    columns = np.column_stack([np.ones(len(x)), x])
    fitted = columns @ np.linalg.lstsq(columns, coupling, rcond=None)[0]
    np.testing.assert_allclose(left, coupling - fitted, atol=1e-11)


# --- Short records ----------------------------------------------------------


def test_a_short_record_says_how_long_would_settle_it():
    series = red([6, 1], 1000, 87)
    found = findings(series[:, :1], series[:, 1:])
    finding = found["separation"]
    assert finding.verdict == "undecided"
    more = (CONFIDENCE * finding.error / (finding.value - 3)) ** 2
    assert finding.settle == f"about {more:.1f} times the truth"
    assert 1.1 <= more < 100


def test_a_record_that_settles_it_almost_asks_for_a_tenth_more():
    series = red([10, 1], 3000, 88)
    x, coupling = series[:, :1], series[:, 1:]
    found = findings(x, coupling)["separation"]
    threshold = found.value - 1.95 * found.error
    finding = findings(x, coupling, separation=threshold)["separation"]
    assert finding.verdict == "undecided"
    assert finding.settle == "about 1.1 times the truth"


def test_too_short_a_record_cannot_say_how_long():
    # A drift through the whole record: how long it remembers is not known, nor how
    # far its moments may be off.
    drift = np.linspace(0, 1, 200)[:, np.newaxis] + 0.1 * red([1], 200, 89)
    found = findings(red([1], 200, 90), drift)
    for name in ("normality: tails", "normality: symmetry"):
        assert found[name].error == math.inf
        assert found[name].verdict == "undecided"
        assert found[name].settle == (
            "a truth many times longer: this one is too short to say how long"
        )


def test_gaussian_systems_seldom_fail():
    # Each assumption is true by a quarter (four decay times against a threshold of
    # three) or more. If one in twenty systems failed, more than 13 of 100 would
    # with a probability of 5e-4 (binomial) only.
    most = stats.binom.isf(5e-4, 100, 0.05)
    assert most == 13
    fails = dict.fromkeys(NAMES, 0)
    for replica in range(100):
        series = red([4, 4, 1, 1], 2500, [90, replica])
        found = findings(series[:, :2], series[:, 2:], seed=replica)
        for name, finding in found.items():
            fails[name] += finding.verdict == "fails"
    assert max(fails.values()) <= most, fails


# --- What is refused --------------------------------------------------------


@pytest.mark.parametrize("which", ["x", "coupling"])
def test_a_mode_that_does_not_vary_is_refused(which):
    series = red([10, 10, 1, 1], 500, 91)
    series[:, 1 if which == "x" else 3] = 2.0
    with pytest.raises(DataError, match="mode 1 is constant"):
        findings(series[:, :2], series[:, 2:])
