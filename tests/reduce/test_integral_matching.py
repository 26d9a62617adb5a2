"""The estimate behind the noise fit: against its definition, and its symmetries."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from scipy import linalg, stats

from eddyshed.reduce.noise.fit import OrnsteinUhlenbeck, fit_ornstein_uhlenbeck
from eddyshed.reduce.noise.integral_matching import match_units, windowed_rate
from eddyshed.reduce.noise.lag_integrals import (
    bartlett_kernels,
    matrix_means,
    unit_means,
)
from eddyshed.reduce.statistics import series as series_module
from eddyshed.reduce.statistics.jackknife import jackknife_error


def waves(decays, frequencies, variance=1.0):
    """Process of independent pairs (real part, imaginary part)."""
    blocks = [[[g, -w], [w, g]] for g, w in zip(decays, frequencies, strict=True)]
    rate = linalg.block_diag(*blocks)
    return OrnsteinUhlenbeck(rate=rate, covariance=variance * np.eye(len(rate)))


def red_series(shape, entropy=0):
    """Series of unit variance and rate at a step of 0.1."""
    members, times, modes = shape
    process = OrnsteinUhlenbeck(rate=[[1.0]], covariance=[[1.0]])
    rng = np.random.default_rng(entropy)
    series = process.simulate(times, 0.1, rng, members=members * modes)
    return np.ascontiguousarray(
        series.reshape(members, modes, times).transpose(0, 2, 1)
    )


# --- The estimate itself ----------------------------------------------------


def direct(series, step, lags):
    """C and its windowed integral as the definition has them, lag by lag."""
    members, times, _ = series.shape
    centred = series - series.mean(axis=(0, 1))

    def lagged(lag):
        products = np.einsum("mti,mtj->ij", centred[:, lag:], centred[:, : times - lag])
        return products / (members * times)

    integral = step * lagged(0) / 2
    for lag in range(1, lags):
        integral = integral + step * (1 - lag / lags) * lagged(lag)
    lost = (integral + integral.T) / (members * times * step)
    return lagged(0) + lost, integral + lost * lags * step / 2


def test_integrals_are_those_of_the_definition():
    series = red_series((3, 400, 3), 6)
    series[:, :, 1] += 0.5 * np.roll(series[:, :, 0], 7, axis=1)
    covariance, integral = direct(series, 0.1, 40)
    full = fit_ornstein_uhlenbeck(series, 0.1, window=4.0, structure="full")
    raw = np.linalg.solve(integral.T, covariance).T
    np.testing.assert_allclose(full.raw_decay.value, np.diag(raw), rtol=1e-9)
    np.testing.assert_allclose(full.process.covariance, covariance, rtol=1e-9)

    fit = fit_ornstein_uhlenbeck(series, 0.1, window=4.0, partners=[1, 0, -1])
    expected = covariance[2, 2] / integral[2, 2]
    assert fit.raw_decay.value[2] == pytest.approx(expected, rel=1e-9)
    pair = integral[0, 0] + integral[1, 1] + 1j * (integral[1, 0] - integral[0, 1])
    expected = (covariance[0, 0] + covariance[1, 1]) / pair
    assert fit.raw_decay.value[0] == pytest.approx(expected.real, rel=1e-9)
    assert fit.raw_frequency.value[0] == pytest.approx(expected.imag, rel=1e-9)
    assert fit.variance.value[1] == pytest.approx(np.trace(covariance[:2, :2]) / 2)


def test_one_coordinate_is_fitted_alike_by_both_structures():
    series = red_series((2, 800, 1), 7)
    one = fit_ornstein_uhlenbeck(series, 0.1, window=4.0)
    two = fit_ornstein_uhlenbeck(series, 0.1, window=4.0, structure="full")
    for name in ("decay", "raw_decay", "variance", "double_window_decay"):
        first, second = getattr(one, name), getattr(two, name)
        np.testing.assert_allclose(first.value, second.value, rtol=1e-9)
        np.testing.assert_allclose(first.error, second.error, rtol=1e-6)
    np.testing.assert_allclose(one.rate_error, two.rate_error, rtol=1e-6)


def test_time_reversed_waves_turn_the_other_way():
    series = waves([0.5], [1.0]).simulate(2000, 0.1, np.random.default_rng(8))
    forward = fit_ornstein_uhlenbeck(series, 0.1, window=5.0, partners=[1, 0])
    backward = fit_ornstein_uhlenbeck(series[:, ::-1], 0.1, window=5.0, partners=[1, 0])
    swapped = fit_ornstein_uhlenbeck(
        series[:, :, ::-1], 0.1, window=5.0, partners=[1, 0]
    )
    assert forward.frequency.value[0] > 0.5
    # The integral at a time looks ahead, so that batches differ at their edges
    # between the two directions, and with them the bias that is taken off.
    for other, least in ((backward, 0.1), (swapped, 1e-9)):
        for name, sign in (("frequency", -1), ("decay", 1)):
            first, second = getattr(forward, name), getattr(other, name)
            far = np.abs(second.value - sign * first.value)
            assert np.all(far < least * first.error), name
    for name, sign in (("raw_frequency", -1), ("raw_decay", 1)):
        first, second = getattr(forward, name), getattr(backward, name)
        np.testing.assert_allclose(second.value, sign * first.value, rtol=1e-9)


@settings(max_examples=20, deadline=None, derandomize=True)
@given(st.integers(0, 2**32 - 1), st.floats(0.1, 10))
def test_fits_turn_with_the_coordinates(entropy, unit):
    rng = np.random.default_rng(entropy)
    series = red_series((1, 600, 3), entropy)
    turn = linalg.qr(rng.standard_normal((3, 3)))[0]
    fit = fit_ornstein_uhlenbeck(series, 0.1, window=3.0, structure="full")
    other = fit_ornstein_uhlenbeck(
        unit * series @ turn.T, 0.1, window=3.0, structure="full"
    )
    # Round-off of the eigenvectors of nearly equal rates.
    np.testing.assert_allclose(
        other.process.rate, turn @ fit.process.rate @ turn.T, atol=1e-8
    )
    np.testing.assert_allclose(
        other.process.covariance,
        unit**2 * turn @ fit.process.covariance @ turn.T,
        rtol=1e-9,
        atol=1e-9 * unit**2,
    )
    # A pair has no preferred phase.
    angle = rng.uniform(0, 2 * np.pi)
    phase = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    pair = series[:, :, :2]
    one = fit_ornstein_uhlenbeck(pair, 0.1, window=3.0, partners=[1, 0])
    two = fit_ornstein_uhlenbeck(pair @ phase.T, 0.1, window=3.0, partners=[1, 0])
    np.testing.assert_allclose(one.process.rate, two.process.rate, atol=1e-9)


@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    # Steps of 1e-4: what a fit is given has passed the check that no coordinate is
    # constant, and the square of 1e-284 is zero.
    hnp.arrays(int, (30, 4), elements=st.integers(-(10**6), 10**6), unique=True),
    st.sampled_from(["line", "step", "smooth"]),
)
def test_any_series_gives_a_process_that_exists(values, shape):
    # Slow series of any kind: each value is held, or passed on the way.
    values = values / 1e4
    times = np.arange(600) / 20
    if shape == "step":
        series = np.repeat(values, 20, axis=0)
    else:
        series = np.stack(
            [np.interp(times, np.arange(30), column) for column in values.T], axis=1
        )
        if shape == "smooth":
            series = series**3
    fit = match_units(
        series[None],
        0.1,
        30,
        20,
        first=np.array([0, 2, 3]),
        second=np.array([1, -1, -1]),
    )
    # Of the whole record: with a batch left out the triangle has a hole, and its
    # integral no sign.
    assert np.all(fit.decay[0] > 0)
    assert np.all(fit.raw_decay[0] > 0)
    process = OrnsteinUhlenbeck(rate=fit.rate, covariance=fit.covariance)
    assert np.linalg.eigvalsh(process.diffusion)[0] > 0


def test_blocks_of_modes_make_no_difference(monkeypatch):
    series = red_series((2, 500, 5), 9)
    partners = [1, 0, -1, 4, 3]
    together = fit_ornstein_uhlenbeck(series, 0.1, window=4.0, partners=partners)
    full = fit_ornstein_uhlenbeck(series, 0.1, window=4.0, structure="full")
    monkeypatch.setattr(series_module, "WORKING_MEMORY", 1)
    apart = fit_ornstein_uhlenbeck(series, 0.1, window=4.0, partners=partners)
    np.testing.assert_allclose(together.process.rate, apart.process.rate, rtol=1e-12)
    other = fit_ornstein_uhlenbeck(series, 0.1, window=4.0, structure="full")
    np.testing.assert_allclose(full.process.rate, other.process.rate, rtol=1e-9)


# --- The correction for the window ------------------------------------------


@pytest.mark.parametrize("lags", [4, 20, 400])
def test_the_windowed_sum_is_inverted(lags):
    # Against the sum itself, term by term: decays up to three e-foldings a
    # step, turns up to the Nyquist frequency.
    rng = np.random.default_rng(10)
    decay = np.exp(rng.uniform(np.log(0.05 / lags), np.log(3.0), 500))
    lag = np.arange(lags)
    weight = (1 - lag / lags) / np.where(lag == 0, 2, 1)
    for turn in (np.zeros(500), rng.uniform(-3.1, 3.1, 500)):
        true = decay + 1j * turn
        total = (weight * np.exp(-true[:, None] * lag)).sum(axis=1)
        found, solved = windowed_rate(total, lags, turn != 0)
        assert solved.all()
        # Cancellation where a window sees 0.05 e-foldings: 1e-16 / 0.05**2 of
        # sums of up to 400 terms.
        np.testing.assert_allclose(found, true, rtol=1e-12, atol=2e-11)


def test_impossible_sums_have_no_rate():
    # No decay (half the window), growth, none left after a sample, negative.
    sums = np.array([50.0, 60.0, 0.5, 0.3, -1.0])
    assert not windowed_rate(sums, 100, np.zeros(5, bool))[1].any()


def test_a_fit_corrects_for_its_window():
    # Mean decay of 100 series: to within four standard errors of it 1 after the
    # correction, at windows that leave 1.2 to 1.8 before (and of the bias of a
    # ratio, 4 w / (3 T) = 1 %).
    series = red_series((1, 10_000, 100), 11)
    for window in (2.0, 4.0, 8.0):
        fit = fit_ornstein_uhlenbeck(series, 0.1, window=window)
        error = np.sqrt((fit.decay.error**2).mean() / 100)
        assert abs(fit.decay.value.mean() - 1) < 4 * error + 4 * window / 3000
        # Uncorrected, for a window of x e-folding times.
        raw = 1 / (1 - (1 - np.exp(-window)) / window)
        assert fit.raw_decay.value.mean() == pytest.approx(raw, rel=0.03)


def test_a_rate_without_correction_is_marked():
    # Beside a slow coordinate a weak one that jumps back at each step.
    series = red_series((1, 2000, 2), 12)
    noise = np.random.default_rng(13).standard_normal(2001)
    series[0, :, 1] = 0.01 * np.diff(noise)
    fit = fit_ornstein_uhlenbeck(
        series,
        0.1,
        window=4.0,
        structure="real diagonal",
        labels=("slow", "jumpy"),
    )
    np.testing.assert_array_equal(fit.uncorrected, [False, True])
    assert fit.decay.value[1] == fit.raw_decay.value[1]
    marked = [note for note in fit.notes if note.startswith("1 of 2")]
    assert any("(jumpy): the rate has no correction" in note for note in marked)
    assert any("(jumpy): the series turns or decays within" in note for note in marked)


def test_jackknife_of_a_mean_is_its_standard_error():
    # Efron and Tibshirani (1993), ch. 11: s / sqrt(n) exactly.
    values = np.random.default_rng(22).gamma(2.0, size=12)
    left_out = (values.sum() - values) / 11
    found = jackknife_error(np.concatenate([[values.mean()], left_out]))
    assert found == pytest.approx(stats.sem(values), rel=1e-12)


def test_means_without_a_batch_are_those_of_the_rest():
    series = red_series((2, 100, 2), 24)
    kernels = bartlett_kernels(5, 0.1)
    units = unit_means(series, kernels, 7, np.array([0]), np.array([1])).square
    matrix = matrix_means(series, kernels, 7).square
    flat = series.reshape(200, 2) - series.mean(axis=(0, 1))
    for batch in range(7):  # not of equal length: 28 or 29 samples
        rest = np.delete(
            flat, np.arange(batch * 200 // 7, (batch + 1) * 200 // 7), axis=0
        )
        expected = rest.T @ rest / len(rest)
        np.testing.assert_allclose(matrix[batch + 1], expected, rtol=1e-12)
        np.testing.assert_allclose(units[:, batch + 1, 0], np.diag(expected))
    np.testing.assert_allclose(matrix[0], flat.T @ flat / 200, rtol=1e-12)
