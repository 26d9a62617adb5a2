"""Fits that keep the integral of squared correlations, against closed forms."""

import numpy as np
import pytest
from scipy import signal, stats

from eddyshed.reduce.noise.fit import fit_ornstein_uhlenbeck
from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.solver.errors import DataError

STEP = 0.1
# Errors come from 20 batches: intervals are Student's with 19 degrees of freedom.
STUDENT = stats.t.ppf(0.975, 19)
FAR = 4.0  # standard errors; exceeded by chance in 8e-4 of cases, streams are fixed


def waves(decay, frequency, times, seed, *, number=1, step=STEP, variance=1.0):
    """Independent pairs of one rate in one member, shape (1, time, 2 number)."""
    process = OrnsteinUhlenbeck(
        rate=[[decay, -frequency], [frequency, decay]], covariance=variance * np.eye(2)
    )
    series = process.simulate(times, step, np.random.default_rng(seed), members=number)
    return series.transpose(1, 0, 2).reshape(1, times, 2 * number)


def red(times, seed, number=1):
    """Independent unpaired coordinates of rate 1, shape (1, time, number)."""
    process = OrnsteinUhlenbeck(rate=[[1.0]], covariance=[[1.0]])
    series = process.simulate(times, STEP, np.random.default_rng(seed), members=number)
    return series.transpose(1, 2, 0)[:, 0][np.newaxis]


def fitted(series, window, *, step=STEP, paired=True, method="product", **options):
    partners = np.arange(series.shape[2]) ^ 1 if paired else None
    return fit_ornstein_uhlenbeck(
        series, step, window=window, partners=partners, method=method, **options
    )


def near(estimate, true, errors=FAR):
    return np.all(np.abs(estimate.value - true) <= errors * estimate.error)


def mean_of(estimate):
    """Mean over independent pairs, and its error by their scatter."""
    value = estimate.value[::2]
    return value.mean(), value.std(ddof=1) / np.sqrt(len(value))


# --- Ornstein-Uhlenbeck processes -------------------------------------------


@pytest.mark.parametrize("frequency", [0.0, 0.3, -1.5, 5.0])
def test_rate_and_frequency_of_a_pair_are_recovered(frequency):
    series = waves(0.7, frequency, 60_000, [1, 1], variance=4.0) + 7.0
    fit = fitted(series, 8.0)
    assert near(fit.decay, 0.7)
    assert near(fit.frequency, frequency)
    assert near(fit.variance, 4.0)
    assert near(fit.double_window_decay, 0.7)
    # Known to a few percent: 4200 e-folding times.
    assert np.all(fit.decay.error < 0.03)
    assert np.all(fit.frequency.error < 0.03)
    expected = [[0.7, -frequency], [frequency, 0.7]]
    assert np.all(np.abs(fit.process.rate - expected) <= FAR * fit.rate_error)
    assert (fit.method, fit.structure, fit.window) == (
        "product",
        "complex diagonal",
        8.0,
    )
    assert not fit.uncorrected.any()
    assert len(fit.notes) == 1
    assert fit.notes[0].startswith("structure: complex diagonal")


def test_pairs_and_single_coordinates_stand_side_by_side():
    # Coordinates 0 and 3 are one wave, 1 and 4 another; 2 is alone.
    one, other = waves(0.5, 1.5, 60_000, 21), waves(2.0, -1.0, 60_000, 3)
    alone = red(60_000, 4)
    series = np.concatenate([one, other, alone], axis=2)[:, :, [0, 2, 4, 1, 3]]
    fit = fit_ornstein_uhlenbeck(
        series, STEP, window=8.0, partners=[3, 4, -1, 0, 1], method="product"
    )
    assert near(fit.decay, [0.5, 2, 1, 0.5, 2])
    assert near(fit.frequency, [1.5, -1, 0, 1.5, -1])
    assert fit.frequency.value[2] == fit.frequency.error[2] == 0
    # Turned round, the pair turns the other way.
    fit = fit_ornstein_uhlenbeck(
        series[:, :, [3, 1, 2, 0, 4]],
        STEP,
        window=8.0,
        partners=[3, 4, -1, 0, 1],
        method="product",
    )
    assert near(fit.frequency, [-1.5, -1, 0, -1.5, -1])


def test_an_unpaired_coordinate_keeps_its_real_rate():
    # The integral of exp(-2 g t) is 1 / 2 g for a real process as well.
    fit = fitted(red(60_000, 5, number=3), 8.0, paired=False)
    assert near(fit.decay, 1.0)
    assert near(fit.variance, 1.0)
    np.testing.assert_array_equal(fit.frequency.value, 0)
    np.testing.assert_array_equal(fit.process.rate, np.diag(fit.decay.value))


@pytest.mark.parametrize("frequency", [0.0, 1.5, 4.0])
def test_errors_are_what_they_say(frequency):
    # 100 pairs, 200 e-folding times each. At a true 92 %, fewer than 82 of 100
    # intervals that hold the truth have a probability of 5e-4 (binomial). Measured
    # on 200 pairs: 92 to 94 % for the decay, 94 to 98 % for the frequency.
    assert stats.binom.ppf(5e-4, 100, 0.92) == 82
    fit = fitted(waves(1.0, frequency, 2000, 6, number=100), 5.0)
    for found, true in ((fit.decay, 1.0), (fit.frequency, frequency)):
        inside = np.abs(found.value - true) < STUDENT * found.error
        assert inside[::2].sum() >= 82
        # Errors that are too large would pass the line above.
        typical = np.sqrt((found.error[::2] ** 2).mean())
        assert typical < 1.3 * found.value[::2].std(ddof=1)


def test_errors_of_single_coordinates_are_what_they_say():
    # As above.
    fit = fitted(red(2000, 7, number=100), 5.0, paired=False)
    inside = np.abs(fit.decay.value - 1.0) < STUDENT * fit.decay.error
    assert inside.sum() >= 82
    typical = np.sqrt((fit.decay.error**2).mean())
    assert typical < 1.3 * fit.decay.value.std(ddof=1)


@pytest.mark.parametrize("frequency", [0.0, 1.5])
def test_both_matches_agree_on_an_ornstein_uhlenbeck_process(frequency):
    series = waves(1.0, frequency, 20_000, 8, number=10)
    product, integral = (
        fitted(series, 8.0, method=method) for method in ("product", "integral")
    )
    for name in ("decay", "frequency", "variance"):
        one, other = getattr(product, name), getattr(integral, name)
        error = np.hypot(one.error, other.error)
        assert np.all(np.abs(one.value - other.value) <= FAR * error), name
    assert product.method != integral.method
    # Squares need no phase: the product's decay is the better known one.
    assert np.mean(product.decay.error) < np.mean(integral.decay.error)


def test_a_short_window_is_corrected_for():
    # The integral of exp(-2 g t) up to 1 / g lacks exp(-2): uncorrected, the rate is
    # too fast by 1 / (1 - exp(-2)) = 1.157.
    fit = fitted(waves(1.0, 1.5, 20_000, 9, number=10), 1.0)
    raw, error = mean_of(fit.raw_decay)
    # The trapezoid rule adds (g step)^2 / 3 to the integral: 0.3 %.
    assert abs(raw - 1 / (1 - np.exp(-2))) < FAR * error + 0.004
    decay, error = mean_of(fit.decay)
    assert abs(decay - 1) < FAR * error
    assert error < 0.02
    wide, error = mean_of(fit.double_window_decay)
    assert abs(wide - 1) < FAR * error
    np.testing.assert_array_equal(fit.raw_frequency.value, fit.frequency.value)


def test_coarse_samples_are_corrected_for():
    # Sums of exp(-2 g t) over steps of 0.7 / g are far from the integral.
    fit = fitted(waves(1.0, 0.3, 20_000, 10, number=10, step=0.7), 7.0, step=0.7)
    decay, error = mean_of(fit.decay)
    assert abs(decay - 1) < FAR * error
    assert error < 0.02
    raw, error = mean_of(fit.raw_decay)
    # The trapezoid sum is step / 2 / tanh(g step), by the geometric series.
    assert abs(raw - np.tanh(0.7) / 0.7) < FAR * error


def test_sampling_noise_is_taken_off():
    # A wide window on a short record: noise alone would add a fifth to the integral,
    # since each of its squares adds 2 windows / record.
    fit = fitted(waves(1.0, 1.5, 1000, 11, number=100), 5.0, batches=4)
    raw, error = mean_of(fit.raw_decay)
    # A ratio of means scatters by a tenth: second order, 0.1^2 to 0.3^2 / 2.
    assert abs(raw - 1) < FAR * error + 0.05


def test_members_count_as_one_record():
    # Ten members of 60 e-folding times know as much as one of 600.
    process = OrnsteinUhlenbeck(rate=[[1, -1.5], [1.5, 1]], covariance=np.eye(2))
    series = process.simulate(600, STEP, np.random.default_rng(12), members=10)
    fit = fitted(series, 5.0)
    assert near(fit.decay, 1.0)
    assert near(fit.frequency, 1.5)
    # sqrt(2 g / T) / 2 to sqrt(2 g / T), of an efficient fit and of half the data.
    assert 0.025 < fit.decay.error[0] < 0.12
    # In another order they are the same record, but for the order of sums.
    again = fitted(series[::-1], 5.0)
    np.testing.assert_allclose(again.decay.value, fit.decay.value, rtol=1e-12)


def test_members_do_not_run_into_one_another():
    # Each member is another stretch of one wave, the last first: the joints are
    # jumps, which would fake a fast decay.
    series = waves(0.05, 0.5, 6000, 13)
    members = series.reshape(6, 1000, 2)[::-1]
    whole, cut = fitted(series, 20.0), fitted(members, 20.0)
    assert near(cut.decay, 0.05)
    error = np.hypot(whole.decay.error, cut.decay.error)
    assert np.all(np.abs(whole.decay.value - cut.decay.value) < FAR * error)


# --- What it is for ---------------------------------------------------------


def spread_waves(frequencies, decay, times, step, seed, number):
    """Pairs that turn at several frequencies at once, with equal variances."""
    parts = [
        waves(decay, frequency, times, [seed, k], number=number, step=step)
        for k, frequency in enumerate(frequencies)
    ]
    return sum(parts) / np.sqrt(len(parts))


def integral_of_squares(frequencies, decay, window=1e6):
    """``int |rho|^2`` with rho the mean of ``exp(-(g + i w) t)``, term by term."""
    exponents = 2 * decay + 1j * np.subtract.outer(frequencies, frequencies)
    return np.mean((1 - np.exp(-exponents * window)) / exponents).real


@pytest.mark.parametrize(
    ("frequencies", "decay", "times", "step", "window", "slower"),
    [
        # Two lines, and nine over a fifth of the frequency to either side.
        ([1.2, 2.8], 0.1, 40_000, 0.1, 40.0, 1.5),
        (np.linspace(1.6, 2.4, 9), 0.02, 60_000, 0.2, 150.0, 5.0),
    ],
)
def test_a_wave_of_spread_frequency(frequencies, decay, times, step, window, slower):
    # It loses its phase by interference, long before its parts decay. Products with
    # its conjugate feel the integral of |rho|^2, here in closed form; the integral of
    # rho itself hardly knows of the interference.
    series = spread_waves(frequencies, decay, times, step, 14, 10)
    product = fitted(series, window, step=step)
    integral = fitted(series, window, step=step, method="integral")

    found, error = mean_of(product.raw_decay)
    exact = 1 / (2 * integral_of_squares(frequencies, decay, window))
    assert abs(found - exact) < FAR * error
    # The window holds all but a thousandth of the integral: corrected for its end
    # or not, the fit has what is felt through products.
    found, error = mean_of(product.decay)
    exact = 1 / (2 * integral_of_squares(frequencies, decay))
    assert abs(found - exact) < FAR * error + 2e-3 * exact
    assert error < 0.03 * exact
    # It turns as the lines do on average, equal in variance.
    found, error = mean_of(product.frequency)
    assert abs(found - np.mean(frequencies)) < FAR * error

    # What is felt through linear terms is the integral of rho.
    line = 1 / np.mean(1 / (decay + 1j * np.array(frequencies)))
    for estimate, true in (
        (integral.decay, line.real),
        (integral.frequency, line.imag),
    ):
        found, error = mean_of(estimate)
        # The correction for the window takes the shape for an exponential.
        assert abs(found - true) < FAR * error + 0.02 * abs(true)
    # A process of that rate would feel far too persistent through products.
    assert exact > slower * line.real
    assert np.all(product.decay.value > 0.8 * slower * integral.decay.value)


def test_the_fit_gives_the_product_of_two_waves_its_integral():
    # The very use: integrals of lag covariances of the product of a wave with the
    # conjugate of another like it, of the series and of the process that is fitted.
    frequencies, decay, step = np.linspace(1.6, 2.4, 9), 0.02, 0.2
    series = spread_waves(frequencies, decay, 60_000, step, 15, 10)
    z = series[0, :, ::2] + 1j * series[0, :, 1::2]
    beat = z[:, ::2] * z[:, 1::2].conj()
    lags = 750
    power = np.abs(np.fft.fft(beat, 2 * len(beat), axis=0)) ** 2
    covariance = np.fft.ifft(power, axis=0)[:lags].real / len(beat)
    measured = step * (covariance.sum(axis=0) - covariance[0] / 2)
    # E|z|^2 = 2 for either wave: 4 int |rho|^2 (Isserlis 1918, Biometrika 12, 134).
    exact = 4 * integral_of_squares(frequencies, decay)
    error = measured.std(ddof=1) / np.sqrt(len(measured))
    # Student's with 4 degrees of freedom is beyond 9 in 8e-4 of cases.
    assert abs(measured.mean() - exact) < 9 * error
    fit = fitted(series, 150.0, step=step)
    variance = 2 * fit.variance.value[::2]
    of_fit = (
        variance[::2] * variance[1::2] / (fit.decay.value[::4] + fit.decay.value[2::4])
    )
    error = of_fit.std(ddof=1) / np.sqrt(len(of_fit))
    assert abs(of_fit.mean() - exact) < 9 * error
    assert abs(of_fit.mean() / exact - 1) < 0.1


# --- Limits -----------------------------------------------------------------


def test_a_rate_that_cannot_be_known_is_marked():
    # A wave that never fades: no rate gives so long an integral.
    phase = 0.03 * np.arange(200_000)
    fit = fitted(np.stack([np.cos(phase), np.sin(phase)], axis=1)[np.newaxis], 1.0)
    assert fit.uncorrected.all()
    assert any("no correction for the window" in note for note in fit.notes)
    np.testing.assert_array_equal(fit.decay.value, fit.raw_decay.value)
    assert np.all(fit.decay.value > 0)


def test_samples_that_do_not_know_their_neighbours_are_refused():
    white = np.random.default_rng(17).standard_normal((1, 2000, 2))
    with pytest.raises(DataError, match="energy-weighted rate"):
        fitted(white, 1.0)


@pytest.mark.parametrize(
    "options", [{"structure": "full"}, {"method": "square"}, {"method": None}]
)
def test_impossible_requests_are_refused(options):
    with pytest.raises(DataError, match=r'method ".*", allowed are'):
        fitted(red(1000, 18, number=2), 4.0, paired=False, **options)


def test_there_may_be_no_coordinates():
    fit = fitted(np.zeros((1, 1000, 0)), 4.0, paired=False)
    assert fit.process.size == 0
    assert fit.method == "product"


def test_blocks_do_not_matter(monkeypatch):
    # Many waves are worked on in blocks that fit the memory; here one at a time.
    series = waves(1.0, 1.5, 1000, 19, number=4)
    whole = fitted(series, 4.0)
    monkeypatch.setattr("eddyshed.reduce.statistics.series.WORKING_MEMORY", 1)
    single = fitted(series, 4.0)
    for name in ("decay", "frequency", "variance", "double_window_decay"):
        one, other = getattr(whole, name), getattr(single, name)
        # Sums in another order at most.
        np.testing.assert_allclose(other.value, one.value, rtol=1e-12)
        np.testing.assert_allclose(other.error, one.error, rtol=1e-9)


def test_lag_covariances_are_those_of_scipy():
    # The rate at zero lag of a series whose correlation is given exactly: a moving
    # sum of white noise, of which scipy's correlate knows all lags.
    rng = np.random.default_rng(20)
    series = signal.lfilter(
        np.ones(30) / 30, 1, rng.standard_normal((1, 3000, 2)), axis=1
    )
    fit = fitted(series, 4.0, batches=4)
    z = series[0, :, 0] + 1j * series[0, :, 1]
    z = z - z.mean()
    lags = 40
    found = signal.correlate(z, z)[len(z) - 1 :][: lags + 1] / len(z)
    squared = np.abs(found / found[0]) ** 2
    weights = np.full(lags + 1, STEP)
    weights[[0, -1]] /= 2
    noise = 1 + 2 * lags / len(z)
    expected = noise / (2 * weights @ squared)
    # Transforms of 3000 points.
    assert fit.raw_decay.value[0] == pytest.approx(expected, rel=1e-10)
