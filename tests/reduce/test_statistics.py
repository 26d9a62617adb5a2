import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from scipy import linalg
from statsmodels.tsa.stattools import acovf

from eddyshed.reduce.noise.fit import OrnsteinUhlenbeck
from eddyshed.reduce.statistics import series as series_module
from eddyshed.reduce.statistics.correlation import (
    Estimate,
    autocovariance,
    correlation_function,
    correlation_scales,
    covariance,
    effective_size,
    integral_time,
)
from eddyshed.solver.errors import DataError


def ou_series(record, step, modes, entropy, rate=1.0):
    """Independent Ornstein-Uhlenbeck series of unit variance, one member."""
    process = OrnsteinUhlenbeck(rate=[[rate]], covariance=[[1.0]])
    rng = np.random.default_rng(entropy)
    times = round(record / step)
    return np.swapaxes(process.simulate(times, step, rng, members=modes), 0, 2)


# --- Estimate ---------------------------------------------------------------


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [
        (0.2911, 0.0263, "0.291 +- 0.026"),
        (-0.2911, 0.0263, "-0.291 +- 0.026"),
        (12345.0, 1234.0, "12300 +- 1200"),
        (3.0, 0.0996, "3.00 +- 0.10"),
        (0.0, 0.1, "0.00 +- 0.10"),
        (2.91e-8, 2.6e-9, "(2.91 +- 0.26)e-08"),
        (1e8, 3e6, "(1.000 +- 0.030)e+08"),
        (1.5, np.inf, "1.5 +- inf"),
        (2.0, 0.0, "2 +- 0"),
    ],
)
def test_estimates_print_what_is_known(value, error, text):
    assert f"{Estimate(value, error)}" == text
    assert repr(Estimate(value, error)) == f"Estimate({text})"


def test_estimates_print_with_more_figures_and_as_arrays():
    assert f"{Estimate(0.2911, 0.0263):3}" == "0.2911 +- 0.0263"
    assert str(Estimate([1.0, 2.0], [0.1, 0.2])) == "[1.00 +- 0.10, 2.00 +- 0.20]"
    long = str(Estimate(np.ones((50, 50)), np.ones((50, 50))))
    assert "..." in long
    assert len(long) < 1000
    with pytest.raises(ValueError, match="number of figures"):
        format(Estimate(1.0, 1.0), ".3f")


def test_estimates_cross_process_borders():
    copy = pickle.loads(pickle.dumps(Estimate([1.0], [0.5])))
    assert copy.value == 1.0
    assert copy.error == 0.5


def test_estimates_refuse_nonsense():
    with pytest.raises(DataError, match="one error to each"):
        Estimate([1.0, 2.0], [1.0])
    with pytest.raises(DataError, match="-1"):
        Estimate([1.0], [-1.0])


# --- Input ------------------------------------------------------------------


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda s: s[0], r"shape \(100, 3\).*add the missing axes"),
        (lambda s: s + 0j, "complex128.*real and imaginary"),
        (lambda s: s[:, :5], "1 members of 5 times"),
        (lambda s: np.where(np.arange(3) == 1, np.nan, s), "mode 1 holds NaN"),
        (lambda s: np.where(np.arange(3) == 2, 0.1, s), "mode 2 is constant"),
        (lambda s: 0 * s, r"mode 0 \(and 2 more\) is constant"),
    ],
)
def test_unusable_series_are_named(change, words):
    series = change(np.random.default_rng(0).standard_normal((1, 100, 3)))
    for function in (integral_time, effective_size):
        with pytest.raises(DataError, match=words):
            function(series, 1.0)


@pytest.mark.parametrize("step", [0.0, -1.0, np.inf, np.nan])
def test_steps_are_positive(step):
    with pytest.raises(DataError, match="positive number"):
        integral_time(np.random.default_rng(0).standard_normal((1, 100, 1)), step)


def test_labels_name_the_mode():
    with pytest.raises(DataError, match="mode second is constant"):
        series_module.checked_series(
            np.stack([np.arange(10.0), np.ones(10)], axis=-1)[None],
            "here",
            ("first", "second"),
        )
    with pytest.raises(DataError, match="2 labels for 1 modes"):
        series_module.checked_series(np.arange(10.0)[None, :, None], "here", "ab")


def test_there_may_be_no_modes():
    series = np.zeros((2, 100, 0))
    assert integral_time(series, 1.0).value.shape == (0,)
    assert effective_size(series, 1.0).variance.value.shape == (0,)
    assert covariance(series).value.shape == (0, 0)


# --- Autocovariance ---------------------------------------------------------


def test_autocovariance_agrees_with_statsmodels():
    rng = np.random.default_rng(1)
    series = rng.standard_normal((1, 301, 4)).cumsum(axis=1)
    found = autocovariance(series, 300)
    for mode in range(4):
        expected = acovf(series[0, :, mode], adjusted=False, demean=True, fft=False)
        # Round-off of transforms of 600 numbers, relative to the variance.
        atol = 1e-13 * expected[0] * 600**0.5
        np.testing.assert_allclose(found[:, mode], expected, rtol=0, atol=atol)


def test_autocovariance_averages_members_about_one_mean():
    series = np.random.default_rng(2).standard_normal((3, 50, 2)) + 5
    series[1] += 1
    centred = series - series.mean(axis=(0, 1))
    for lag in (0, 1, 7, 49):
        expected = (centred[:, lag:] * centred[:, : 50 - lag]).sum(axis=(0, 1)) / 150
        np.testing.assert_allclose(
            autocovariance(series, 49)[lag], expected, atol=1e-14
        )


@settings(max_examples=50, deadline=None, derandomize=True)
@given(hnp.arrays(float, (2, 12, 1), elements=st.floats(-1e3, 1e3)))
def test_autocovariance_is_positive_semi_definite(series):
    if np.ptp(series) < 1e-6:
        series = series + np.arange(12)[:, None]
    found = autocovariance(series, 11)[:, 0]
    lowest = np.linalg.eigvalsh(linalg.toeplitz(found))[0]
    assert lowest > -1e-12 * found[0]  # round-off of a 12 x 12 matrix


@pytest.mark.parametrize("lags", [-1, 50])
def test_autocovariance_refuses_lags_beyond_the_series(lags):
    with pytest.raises(DataError, match=f"lag of {lags} samples in members of 50"):
        autocovariance(np.random.default_rng(0).standard_normal((1, 50, 1)), lags)


def test_correlation_starts_at_one():
    found = correlation_function(np.random.default_rng(3).normal(2, 3, (2, 60, 3)), 5)
    np.testing.assert_allclose(found[0], 1)
    assert np.all(np.abs(found) <= 1 + 1e-15)


# --- Integral scales --------------------------------------------------------


def test_integral_time_of_an_exponential():
    # Both scales of exp(-t / 2): twice 0.95 (cut at 0.05) and 2.
    series = ou_series(record=20_000.0, step=0.2, modes=10, entropy=4, rate=0.5)
    scales = correlation_scales(series, 0.2)
    for scale, expected in ((scales.time, 1.9), (scales.squared, 2.0)):
        error = np.sqrt((scale.error**2).mean() / 10)
        # Four standard errors, and the trapezoid's step**2 / 12 rate**2 of it.
        assert abs(scale.value.mean() - expected) < 4 * error + 0.001 * expected


def test_integral_time_of_white_noise_is_half_a_step():
    series = np.random.default_rng(5).standard_normal((1, 20_000, 20))
    found = integral_time(series, 3.0).value / 3.0
    # 0.95 of a step under a line from 1 to 0.05, and r1 (its error 0.007).
    assert np.abs(found.mean() - 0.95 * 1.05 / 2) < 4 * 0.007 / np.sqrt(20)


def test_integral_time_is_known_as_well_as_it_says():
    series = ou_series(record=100.0, step=0.1, modes=400, entropy=6)
    found = integral_time(series, 0.1)
    covered = np.abs(found.value - 0.95) < 1.96 * found.error
    # 94 % measured on 2000; four binomial standard errors of 400 are 5 %.
    assert covered.mean() > 0.89


def test_scale_of_the_square_outlives_an_oscillation():
    # The square of exp(-t) cos(10 t) has the integral (1 + 1 / 101) / 2.
    decay, frequency = 1.0, 10.0
    process = OrnsteinUhlenbeck(
        rate=[[decay, -frequency], [frequency, decay]], covariance=np.eye(2)
    )
    series = process.simulate(80_000, 0.05, np.random.default_rng(7))
    scales = correlation_scales(series, 0.05)
    expected = (1 + decay**2 / (decay**2 + frequency**2)) / 2 / decay
    assert np.all(scales.time.value < 0.2)  # a quarter of a period: 0.16
    distance = np.abs(scales.squared.value - expected)
    # The trapezoid of a curve that turns by 2 * 10 * 0.05 = 1 in a step: 4 %.
    assert np.all(distance < 4 * scales.squared.error + 0.04 * expected)


def test_too_short_a_record_is_a_finding():
    trend = np.linspace(0, 1, 200)[None, :, None] ** 2
    # An undamped wave never forgets its amplitude.
    wave = np.sin(np.arange(200) * 0.5)[None, :, None]
    level = np.repeat([0.0, 1.0], 200).reshape(2, 200, 1) + 1e-3 * wave
    found = integral_time(level, 2.0)
    assert np.isinf(found.error)
    assert 2.0 * 40 < found.value <= 2.0 * 100  # up to half a member
    assert np.isfinite(integral_time(trend, 1.0).error)
    assert np.isinf(effective_size(wave, 1.0).variance.error)


def test_sizes_stay_below_the_number_of_samples():
    alternating = np.random.default_rng(8).standard_normal((1, 2001, 3))
    found = effective_size(np.diff(alternating, axis=1), 1.0)
    assert np.all(found.mean.value <= 2000)
    assert np.all(found.variance.value <= 2000)


def test_blocks_of_modes_make_no_difference(monkeypatch):
    series = ou_series(record=50.0, step=0.5, modes=7, entropy=9)
    together = correlation_scales(series, 0.5)
    monkeypatch.setattr(series_module, "WORKING_MEMORY", 1)
    apart = correlation_scales(series, 0.5)
    for name in ("time", "squared"):
        one, other = getattr(together, name), getattr(apart, name)
        np.testing.assert_allclose(one.value, other.value, rtol=1e-12)
        np.testing.assert_allclose(one.error, other.error, rtol=1e-12)


# --- Covariance -------------------------------------------------------------


def test_covariance_and_its_errors():
    mixing = np.array([[1.0, 0.0, 0.0], [0.5, 1.0, 0.0], [0.0, -1.0, 2.0]])
    rng = np.random.default_rng(10)
    series = rng.standard_normal((40, 500, 3)) @ mixing.T
    found = covariance(series, batches=400)
    flat = series.reshape(-1, 3)
    np.testing.assert_allclose(found.value, np.cov(flat.T, bias=True), rtol=1e-12)
    true = mixing @ mixing.T
    # Isserlis: variance (C_ii C_jj + C_ij**2) / n for independent samples.
    expected = np.sqrt((np.outer(np.diag(true), np.diag(true)) + true**2) / len(flat))
    # An error from 400 batches is known to 1 / sqrt(800) = 3.5 %.
    np.testing.assert_allclose(found.error, expected, rtol=4 * 0.035)
    assert np.all(np.abs(found.value - true) < 4 * expected)


@pytest.mark.parametrize("batches", [1, 101])
def test_covariance_refuses_batches_without_scatter(batches):
    series = np.random.default_rng(0).standard_normal((1, 100, 2))
    with pytest.raises(DataError, match=f"{batches} batches of a record of 100"):
        covariance(series, batches=batches)
