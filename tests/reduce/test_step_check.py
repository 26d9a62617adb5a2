"""The check of a time step by half of it."""

import numpy as np
import pytest
from scipy import signal

from eddyshed.reduce.step_check import StepCheck, compare_steps


def euler(step, *, members, times, rng):
    """Euler-Maruyama for dx = -x dt + dW, every unit of time."""
    every = round(1 / step)
    kicks = rng.standard_normal((members, (times + 20) * every)) * np.sqrt(step)
    x = signal.lfilter([1.0], [1.0, -(1 - step)], kicks, axis=1)
    return x[:, 20 * every :: every, np.newaxis]


# Stationary variance of the scheme, .5 / (1 - h / 2): Kloeden & Platen, Numerical
# Solution of Stochastic Differential Equations (1992).
def variance(step):
    return 0.5 / (1 - step / 2)


def test_a_step_that_is_too_long_is_found():
    rng = np.random.default_rng(11)
    whole, half = (euler(step, members=8, times=4000, rng=rng) for step in (0.5, 0.25))
    check = compare_steps(whole, half, interval=1.0, step=0.5, rng=rng)
    assert not check.agrees
    assert check.quantity == "variance"
    expected = np.log(variance(0.25) / variance(0.5))
    assert abs(check.difference - expected) < 4 * check.error
    assert check.error < abs(expected) / 4
    assert "too long" in check.sentence(("x",))


def test_false_alarms_are_rare():
    # One in a hundred; three or more of 100 have a probability of 8 %, five or
    # more of 0.3 %.
    alarms = 0
    for seed in range(100):
        rng = np.random.default_rng(seed)
        whole, half = (
            euler(0.5, members=4, times=times, rng=rng) for times in (400, 100)
        )
        check = compare_steps(whole, half, interval=1.0, step=0.5, rng=rng)
        assert check.compared == 2
        alarms += not check.agrees
    assert alarms < 5


@pytest.mark.parametrize("shift", [0.0, 0.4])
def test_means_are_compared_in_standard_deviations(shift):
    rng = np.random.default_rng(12)
    whole = euler(0.25, members=8, times=2000, rng=rng)
    half = euler(0.25, members=8, times=2000, rng=rng)
    half += shift * np.sqrt(variance(0.25))
    check = compare_steps(whole, half, interval=1.0, step=0.5, rng=rng)
    assert check.agrees == (shift == 0)
    if shift:
        assert check.quantity == "mean"
        assert abs(check.difference - shift) < 4 * check.error


def test_a_check_that_cannot_tell_says_so():
    check = StepCheck(
        step=3600.0,
        quantity="mean",
        mode=0,
        difference=0.1,
        error=float("inf"),
        compared=2,
        agrees=True,
    )
    assert "too short to tell" in check.sentence(("x",))
