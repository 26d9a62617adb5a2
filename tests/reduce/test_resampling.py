import numpy as np
import pytest
from scipy import stats

from eddyshed.reduce.noise.fit import OrnsteinUhlenbeck
from eddyshed.reduce.statistics.blocks import Blocks, resampled_means
from eddyshed.reduce.statistics.correlation import correlation_scales
from eddyshed.reduce.statistics.resampling import (
    central_moments,
    kolmogorov_smirnov,
    moments,
    wasserstein,
)
from eddyshed.solver.errors import DataError


def ou_series(record, step, modes, entropy):
    """Independent series of unit rate and variance, one member."""
    process = OrnsteinUhlenbeck(rate=[[1.0]], covariance=[[1.0]])
    rng = np.random.default_rng(entropy)
    times = round(record / step)
    return np.swapaxes(process.simulate(times, step, rng, members=modes), 0, 2)


# --- Blocks -----------------------------------------------------------------


def test_blocks_do_not_cross_members():
    # Values are the number of the member: a block inside one has a whole mean.
    columns = np.repeat(np.arange(5.0), 12).reshape(5, 12, 1)
    drawn = resampled_means(columns, 4, np.random.default_rng(0), 500)
    sums = drawn * 15  # blocks in a record
    np.testing.assert_allclose(sums, np.round(sums), atol=1e-12)
    assert len(np.unique(np.round(sums))) > 10


def test_blocks_wrap_and_start_anywhere():
    # All values of a circle count alike: the mean of the means is that of the
    # series, and their variance that of the 10 block means over 2 blocks.
    values = np.array([3.0, 1, 4, 1, 5, 9, 2, 6, 5, 3])
    drawn = resampled_means(values[None, :, None], 5, np.random.default_rng(1), 40_000)
    circular = np.array([np.roll(values, -k)[:5].mean() for k in range(10)])
    error = np.sqrt(circular.var() / 2 / 40_000)
    assert drawn.mean() == pytest.approx(values.mean(), abs=4 * error)
    # Relative error of a variance from 40 000 draws: 0.7 %.
    assert drawn.var() == pytest.approx(circular.var() / 2, rel=4 * 0.007)


def test_blocks_last_eight_times_within_bounds():
    series = ou_series(record=2000.0, step=0.1, modes=3, entropy=2)
    length = Blocks.of(series, 0.1).length * 0.1
    # The longer scale, 1, is known to 4 sqrt(1 / 2000) = 9 % here.
    np.testing.assert_allclose(length, 8, rtol=4 * 0.09)
    white = np.random.default_rng(3).standard_normal((1, 50_000, 1))
    assert Blocks.of(white, 1.0).length == 50  # a thousandth, not four samples
    # Amplitudes of a wave outlast its quarter period of 0.16: 8 of 0.505.
    process = OrnsteinUhlenbeck(rate=[[1.0, -10.0], [10.0, 1.0]], covariance=np.eye(2))
    wave = process.simulate(20_000, 0.05, np.random.default_rng(3))
    assert np.all(Blocks.of(wave, 0.05).length * 0.05 > 8 * 0.4)
    short = series[:, :300]
    assert np.all(Blocks.of(short, 0.1).length <= 100)  # a third


# --- Moments ----------------------------------------------------------------


def test_moments_agree_with_scipy():
    series = np.random.default_rng(4).gamma(2.0, size=(2, 500, 3))
    found = moments(series, 1.0, rng=np.random.default_rng(5))
    flat = series.reshape(-1, 3)
    np.testing.assert_allclose(found.mean.value, flat.mean(axis=0))
    np.testing.assert_allclose(found.variance.value, flat.var(axis=0))
    np.testing.assert_allclose(found.skewness.value, stats.skew(flat))
    np.testing.assert_allclose(found.kurtosis.value, stats.kurtosis(flat, fisher=False))


def test_moments_about_zero_become_central_ones():
    values = np.random.default_rng(6).gamma(3.0, size=(2, 50))
    raw = np.stack([(values**power).mean(axis=1) for power in (1, 2, 3, 4)], axis=-1)
    expected = np.stack(
        [
            values.mean(axis=1),
            values.var(axis=1),
            stats.skew(values, axis=1),
            stats.kurtosis(values, axis=1, fisher=False),
        ],
        axis=-1,
    )
    np.testing.assert_allclose(central_moments(raw), expected, rtol=1e-10)


def test_moments_follow_units_and_origin():
    series = np.random.default_rng(6).gamma(2.0, size=(1, 500, 1))
    first = moments(series, 1.0, rng=np.random.default_rng(7))
    # Origin and unit that cost four digits of the sixteen, then the fourth power.
    other = moments(1e4 - 3 * series, 60.0, rng=np.random.default_rng(7))
    np.testing.assert_allclose(other.mean.value, 1e4 - 3 * first.mean.value)
    for name, factor in (
        ("mean", 3),
        ("variance", 9),
        ("skewness", 1),
        ("kurtosis", 1),
    ):
        one, two = getattr(first, name), getattr(other, name)
        np.testing.assert_allclose(two.error, factor * one.error, rtol=1e-9)
    np.testing.assert_allclose(other.skewness.value, -first.skewness.value, rtol=1e-9)
    np.testing.assert_allclose(other.kurtosis.value, first.kurtosis.value, rtol=1e-9)
    np.testing.assert_allclose(other.block, 60 * first.block)


def test_moments_depend_on_the_stream_alone():
    series = ou_series(record=50.0, step=0.5, modes=2, entropy=8)
    one, two, three = (
        moments(series, 0.5, rng=np.random.default_rng(k)).mean.error for k in (1, 1, 2)
    )
    np.testing.assert_array_equal(one, two)
    assert np.all(one != three)


def test_moments_are_known_as_well_as_they_say():
    series = ou_series(record=100.0, step=0.1, modes=400, entropy=9)
    found = moments(series, 0.1, rng=np.random.default_rng(10), samples=200)
    # Measured on 4000: 94 % and 91 %; four binomial errors of 400 are 5 and 6 %.
    for estimate, true, least in (
        (found.mean, 0.0, 0.89),
        (found.variance, 1.0, 0.85),
    ):
        assert (np.abs(estimate.value - true) < 1.96 * estimate.error).mean() > least


def test_variance_of_an_oscillation_is_known_as_well_as_it_says():
    # Blocks of eight quarter periods would miss that amplitudes last longer.
    process = OrnsteinUhlenbeck(rate=[[1.0, -10.0], [10.0, 1.0]], covariance=np.eye(2))
    series = process.simulate(2000, 0.05, np.random.default_rng(11), members=300)
    series = np.swapaxes(series[:, :, :1], 0, 2)
    found = moments(series, 0.05, rng=np.random.default_rng(12), samples=200)
    covered = np.abs(found.variance.value - 1) < 1.96 * found.variance.error
    # 90.6 % measured on 1000; four binomial errors of 300 are 7 %.
    assert covered.mean() > 0.84


def test_moments_of_too_short_a_record_have_no_error():
    series = np.linspace(0, 1, 400).reshape(2, 200, 1)  # two levels, two slopes
    found = moments(series, 1.0, rng=np.random.default_rng(13))
    assert found.mean.value == pytest.approx(0.5)
    assert np.isinf(found.mean.error)


def test_moments_name_a_constant_mode():
    series = np.stack([np.arange(100.0), np.ones(100)], axis=-1)[None]
    with pytest.raises(DataError, match="mode 1 is constant"):
        moments(series, 1.0, rng=np.random.default_rng(0))


def test_a_single_resample_has_no_scatter():
    series = ou_series(record=50.0, step=0.5, modes=1, entropy=14)
    with pytest.raises(DataError, match="1 resampled records"):
        moments(series, 0.5, rng=np.random.default_rng(0), samples=1)
    with pytest.raises(DataError, match="1 resampled records"):
        wasserstein(series, series, 0.5, 0.5, rng=np.random.default_rng(0), samples=1)


# --- Kolmogorov-Smirnov -----------------------------------------------------


def test_test_of_independent_values_is_the_textbook_one():
    rng = np.random.default_rng(15)
    a, b = rng.standard_normal((1, 400, 5)), rng.normal(0.15, 1, (1, 700, 5))
    found = kolmogorov_smirnov(a, b, 1.0, 1.0)
    for mode in range(5):
        expected = stats.ks_2samp(a[0, :, mode], b[0, :, mode], method="asymp")
        assert found.statistic[mode] == pytest.approx(expected.statistic, abs=1e-15)
        # Effective sizes are the true ones to the 5 % that r1 is known to, and
        # scipy's asymptotic p has another small-sample term.
        assert found.p_value[mode] == pytest.approx(expected.pvalue, abs=0.03)


def test_false_alarms_are_as_many_as_they_should_be():
    a = ou_series(record=100.0, step=0.2, modes=600, entropy=16)
    b = ou_series(record=200.0, step=0.1, modes=600, entropy=17)
    rate = (kolmogorov_smirnov(a, b, 0.2, 0.1).p_value < 0.05).mean()
    # Four binomial standard errors of 600 about the nominal 5 %.
    assert abs(rate - 0.05) < 4 * np.sqrt(0.05 * 0.95 / 600)


def test_effective_sizes_are_the_lesser_of_two():
    process = OrnsteinUhlenbeck(rate=[[0.2, -2.0], [2.0, 0.2]], covariance=np.eye(2))
    wave = process.simulate(2000, 0.2, np.random.default_rng(18), members=2)
    coarse = ou_series(record=3000.0, step=1.5, modes=2, entropy=19)
    found = kolmogorov_smirnov(wave, coarse, 0.2, 1.5).effective_size
    np.testing.assert_allclose(
        found[0], 800 / correlation_scales(wave, 0.2).squared.value
    )
    time = correlation_scales(coarse, 1.5).time.value
    np.testing.assert_allclose(found[1], 3000 / (time + 0.75))


def test_different_distributions_are_told_apart():
    a = ou_series(record=300.0, step=0.2, modes=20, entropy=18)
    b = ou_series(record=300.0, step=0.2, modes=20, entropy=19)
    # Half a deviation is 0.20 between distributions; 1 % is at 0.13.
    assert (kolmogorov_smirnov(a, b + 0.5, 0.2, 0.2).p_value < 0.05).mean() > 0.8


def test_nothing_is_told_from_too_short_a_record():
    level = np.repeat([0.0, 1.0], 200).reshape(2, 200, 1)
    level = level + 1e-3 * np.sin(np.arange(200) * 0.5)[:, None]
    other = ou_series(record=300.0, step=0.2, modes=1, entropy=20) + 10
    found = kolmogorov_smirnov(level, other, 1.0, 0.2)
    assert found.effective_size[0] == 1
    assert found.p_value > 0.2


# --- Wasserstein ------------------------------------------------------------


def test_distance_of_shifted_and_stretched_copies():
    b = ou_series(record=200.0, step=0.2, modes=3, entropy=21)
    rng = np.random.default_rng(22)
    found = wasserstein(b + 0.7, b, 0.2, 0.2, rng=rng)
    np.testing.assert_allclose(found.value, 0.7 / b.std(axis=(0, 1)), rtol=1e-12)
    # A centred copy of factor 2 is at the mean absolute deviation.
    b = b - b.mean(axis=(0, 1))
    found = wasserstein(2 * b, b, 0.2, 0.2, rng=rng)
    expected = np.abs(b).mean(axis=(0, 1)) / b.std(axis=(0, 1))
    np.testing.assert_allclose(found.value, expected, rtol=1e-12)


def test_distance_follows_units():
    a = ou_series(record=100.0, step=0.2, modes=2, entropy=23) + 0.3
    b = ou_series(record=100.0, step=0.5, modes=2, entropy=24)
    one = wasserstein(a, b, 0.2, 0.5, rng=np.random.default_rng(0))
    two = wasserstein(5 - 9 * a, 5 - 9 * b, 2.0, 5.0, rng=np.random.default_rng(0))
    np.testing.assert_allclose(one.value, two.value, rtol=1e-12)
    # Mirrored steps of the distribution lie to the other side of a quantile.
    np.testing.assert_allclose(one.error, two.error, rtol=0.02)


@pytest.mark.parametrize(
    ("shift", "factor", "distance"),
    # A normal of thrice the deviation: mean absolute value of 2 of its own.
    [(0.5, 1, 0.5), (0.0, 3, 2 * np.sqrt(2 / np.pi))],
)
def test_distance_is_known_as_well_as_it_says(shift, factor, distance):
    a = factor * ou_series(record=300.0, step=0.2, modes=100, entropy=25) + shift
    b = ou_series(record=300.0, step=0.2, modes=100, entropy=26)
    found = wasserstein(a, b, 0.2, 0.2, rng=np.random.default_rng(27), samples=200)
    scatter = found.value.std(ddof=1)
    # 100 distances give their scatter to 7 %.
    assert np.sqrt((found.error**2).mean()) == pytest.approx(scatter, rel=4 * 0.07)
    # 95 % measured on 500; four binomial errors of 100 are 9 %.
    assert (np.abs(found.value - distance) < 1.96 * found.error).mean() > 0.86


def test_pairs_of_series_must_have_the_same_modes():
    a, b = np.random.default_rng(0).standard_normal((2, 1, 100, 2))
    with pytest.raises(DataError, match="2 modes against 1"):
        kolmogorov_smirnov(a, b[:, :, :1], 1.0, 1.0)
    with pytest.raises(DataError, match="second: a step of 0"):
        wasserstein(a, b, 1.0, 0.0, rng=np.random.default_rng(0))
