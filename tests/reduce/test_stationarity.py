"""Halves and trends of a record: calibrated for serial correlation, and not blind."""

import numpy as np
import pytest
from scipy import stats
from scipy.signal import lfilter

from eddyshed.reduce.statistics.stationarity import stationarity, stationarity_notes
from eddyshed.solver.errors import DataError

TIME = 10.0  # correlation time in samples
PHI = np.exp(-1 / TIME)


def red_noise(members, times, modes, seed=1):
    """Stationary series of unit variance with exponential correlation."""
    rng = np.random.default_rng(seed)
    noise = rng.standard_normal((members, times + 150, modes))
    return lfilter([np.sqrt(1 - PHI**2)], [1, -PHI], noise, axis=1)[:, 150:]


@pytest.mark.parametrize("members", [1, 4])
def test_stationary_series_are_seldom_suspected(members):
    # An AR(1) process is an exponentially correlated series (Box & Jenkins). Of 800
    # of 100 correlation times each a share of 5 % lies beyond Student's interval if
    # errors and freedom are right; allowed are three standard errors of that share,
    # 2.3 %, and below it the 2 % by which the variances, whose times are found too
    # long in so short a record, are on the safe side.
    found = stationarity(red_noise(members, 1000 // members, 800), 1.0)
    quantile = stats.t.ppf(0.975, found.freedom)
    for estimate in (found.mean_shift, found.variance_shift, found.trend):
        beyond = np.mean(np.abs(estimate.value) > quantile * estimate.error)
        assert 0.05 - 0.02 - 0.023 < beyond < 0.05 + 0.023
        # Nor do they lean to one side: the mean is zero to three of its errors.
        score = estimate.value / estimate.error  # nought where it is not known
        assert abs(score.mean()) < 3 * score.std() / np.sqrt(800)
    # One note in a hundred records of eight modes; a share of 4 in 100 is three
    # standard errors above.
    notes = [
        stationarity_notes(stationarity(red_noise(1, 1000, 8, seed=k), 1.0), "abcdefgh")
        for k in range(40)
    ]
    assert sum(map(bool, notes)) <= 2


def test_errors_are_those_of_the_process():
    # For AR(1) in closed form: integral time 1 / (1 - phi) - 1/2 with the trapezoid,
    # that of the square (1 + phi^2) / (1 - phi^2), two-sided.
    times = 20_000
    found = stationarity(red_noise(1, times, 20), 1.0)
    tau = 1 / (1 - PHI) - 0.5
    squared = (1 + PHI**2) / (1 - PHI**2)
    for estimate, expected in (
        (found.mean_shift, np.sqrt(8 * tau / times)),
        (found.trend, np.sqrt(24 * tau / times)),
        (found.variance_shift, np.sqrt(8 * squared / times)),
    ):
        # Times are known to sqrt(12 tau / T) = 8 %, of which the root takes half,
        # and 20 of them to a fifth: three such, and 1 % for first order.
        assert np.mean(estimate.error) == pytest.approx(expected, rel=0.04)
    # A twentieth of the integral is beyond its end.
    assert np.mean(found.length) == pytest.approx(times / (0.95 * tau), rel=0.06)


def test_departures_are_found_and_named():
    series = red_noise(1, 3000, 3)
    ramp = np.linspace(0, 1, 3000)
    drifting = series.copy()
    drifting[0, :, 1] += 2 * ramp
    found = stationarity(drifting, 1.0)
    # A ramp of 2 has the change 2 and halves that differ by 1.
    for estimate, expected in ((found.trend, 2.0), (found.mean_shift, 1.0)):
        assert abs(estimate.value[1] - expected) < 4 * estimate.error[1]
    notes = stationarity_notes(found, ("a", "b", "c"))
    assert any("b is not stationary: a line through the record" in n for n in notes)
    growing = series.copy()
    growing[0, 1500:, 2] *= 2
    found = stationarity(growing, 1.0)
    expected = np.log(4)
    off = abs(found.variance_shift.value[2] - expected)
    assert off < 4 * found.variance_shift.error[2]
    notes = stationarity_notes(found, ("a", "b", "c"))
    assert any("c is not stationary: the logarithm of" in n for n in notes)
    assert stationarity_notes(stationarity(series, 1.0), ("a", "b", "c")) == []


def test_members_are_compared_at_equal_times():
    # Members that lie at different levels do not drift.
    series = red_noise(2, 1500, 1)
    shifted = series + np.array([5.0, -5.0])[:, np.newaxis, np.newaxis]
    one, other = stationarity(series, 1.0), stationarity(shifted, 1.0)
    spread = np.sqrt(26)  # of both levels, and of the series
    np.testing.assert_allclose(
        other.mean_shift.value * spread, one.mean_shift.value, rtol=0.05, atol=0.02
    )


def test_what_is_not_known_is_not_said():
    # A single rise: the correlation never ends, its times have no error.
    rise = np.linspace(-1, 1, 60)[np.newaxis, :, np.newaxis]
    found = stationarity(rise + 1e-3 * red_noise(1, 60, 1), 1.0)
    assert found.length[0] < 60
    wave = np.sin(np.linspace(0, 5, 60))[np.newaxis, :, np.newaxis]
    found = stationarity(np.concatenate([wave, wave], axis=2), 1.0)
    assert stationarity_notes(found, ("a", "b")) == []
    # Halves of fewer than eight values have no correlation times.
    found = stationarity(red_noise(1, 15, 2), 1.0)
    assert np.isinf(found.mean_shift.error).all()
    assert (found.length == 0).all()
    assert (found.freedom == 1).all()
    assert stationarity_notes(found, ("a", "b")) == []
    with pytest.raises(DataError, match=r"halves less a line each: mode 0 is constant"):
        stationarity(np.repeat([0.0, 1.0], 20).reshape(1, 40, 1), 1.0)
    with pytest.raises(DataError, match=r"stationarity: mode 0 is constant"):
        stationarity(np.ones((1, 50, 1)), 1.0)
