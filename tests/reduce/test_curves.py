"""Curves of the report against formulas that others published."""

import numpy as np
import pytest
from scipy import signal, stats

from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.reduce.report.curves import (
    density,
    large_lag_error,
    process_correlation,
    rotating_units,
    unit_correlation,
)


@pytest.fixture
def rng():
    return np.random.default_rng(20260101)


class TestCorrelation:
    def test_large_lag_error_of_an_autoregression(self, rng):
        """``(1 + a^2) / (1 - a^2) / n`` (Box and Jenkins, ch. 2; from memory)."""
        a, n = 0.9, 200_000
        series = signal.lfilter([1], [1, -a], rng.standard_normal((1, n, 3)), axis=1)
        found = large_lag_error(series, 0.5)
        # The integral of the squared correlation is known to some 4 % from a
        # record of 20000 correlation times, its root to 2 %: four errors.
        expected = np.sqrt((1 + a**2) / (1 - a**2) / n)
        np.testing.assert_allclose(found, expected, rtol=0.08)

    def test_large_lag_error_is_the_scatter_of_correlations(self, rng):
        a, n, members = 0.8, 4000, 400
        noise = rng.standard_normal((n, members))
        series = signal.lfilter([1], [1, -a], noise, axis=0)[500:]
        sample = np.array(
            [
                unit_correlation(series[np.newaxis, :, k : k + 1], 60)[60]
                for k in range(members)
            ]
        )
        expected = np.sqrt((1 + a**2) / (1 - a**2) / len(series))
        # A standard deviation from 400 values is known to 3.5 %: four errors.
        assert sample.std() == pytest.approx(expected, rel=0.15)

    def test_no_error_where_the_record_is_too_short(self, rng):
        drift = np.cumsum(rng.standard_normal((1, 200, 1)), axis=1)
        slow = np.linspace(0, 1, 200)[None, :, None] * 50 + drift
        assert large_lag_error(slow, 1.0).tolist() == [np.inf]

    def test_pairs_are_found_once(self):
        assert rotating_units(np.array([1, 0, -1, 4, 3])) == [(0, 1), (2,), (3, 4)]

    def test_a_turning_pair_keeps_its_amplitude_and_phase(self):
        """Real part of ``exp(-i w lag)``, less the share of lost products."""
        t = np.arange(5000) * 0.1
        series = np.stack([np.cos(0.7 * t), -np.sin(0.7 * t)], axis=1)
        found = unit_correlation(series[np.newaxis], 100)
        lag = np.arange(101)
        expected = np.cos(0.7 * lag * 0.1) * (1 - lag / 5000)
        # The mean over 56 turns that do not end whole is of order 1 / 56 / pi,
        # and enters squared.
        np.testing.assert_allclose(found, expected, atol=2e-4)

    def test_fitted_pair_decays_and_turns(self):
        """``exp(-g lag) cos(w lag)`` (Gardiner, Handbook, sec. 4.4)."""
        g, w = 0.2, 0.9
        process = OrnsteinUhlenbeck(
            rate=[[g, -w, 0], [w, g, 0], [0, 0, 1.5]], covariance=np.diag([2, 2, 3.0])
        )
        lags = np.arange(40) * 0.25
        pair = process_correlation(process, (0, 1), 0.25, 40)
        np.testing.assert_allclose(
            pair, np.exp(-g * lags) * np.cos(w * lags), atol=1e-12
        )
        single = process_correlation(process, (2,), 0.25, 40)
        np.testing.assert_allclose(single, np.exp(-1.5 * lags), atol=1e-12)


class TestDensity:
    def test_counts_as_numpy_does_and_keeps_what_lies_outside(self, rng):
        series = rng.standard_normal((4, 1000))
        edges = np.linspace(-1.5, 2.0, 15)
        found = density(series, edges)
        counts, _ = np.histogram(series, edges)
        np.testing.assert_allclose(found.value, counts / 4000 / 0.25, rtol=1e-12)

    def test_is_normal_for_normal_values_within_its_errors(self, rng):
        edges = np.linspace(-3, 3, 25)
        found = density(rng.standard_normal((1, 100_000)), edges)
        expected = np.diff(stats.norm.cdf(edges)) / np.diff(edges)
        # 24 scores of Student's t with 19 degrees of freedom: their mean square
        # is 1.12 with a standard deviation of 0.4, and below 2.7 four of these on.
        score = (found.value - expected) / found.error
        assert np.mean(score**2) < 2.7
        # Binomial counts (any textbook): the mean ratio of variances is known to
        # sqrt(2 / 19 / 24) = 7 %, four of these.
        share = expected * 0.25
        binomial = share * (1 - share) / 100_000 / 0.25**2
        assert np.mean(found.error**2 / binomial) == pytest.approx(1, abs=0.28)
