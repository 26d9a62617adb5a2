import pickle

import numpy as np
import pytest
from scipy import linalg, stats

from eddyshed.reduce.bases.basis import Basis
from eddyshed.reduce.noise.fit import (
    OrnsteinUhlenbeck,
    fit_ornstein_uhlenbeck,
    window_rule,
)
from eddyshed.reduce.noise.of_split import fit_noise, wave_groups
from eddyshed.reduce.settings import NoiseFitSettings
from eddyshed.solver.errors import DataError

# Errors come from 20 batches: intervals are Student's with 19 degrees of freedom.
STUDENT = stats.t.ppf(0.975, 19)
# Exceeded by chance in 8e-4 of cases (19 degrees of freedom); streams are fixed.
FAR = 4.0


def waves(decays, frequencies, variance=1.0):
    """Process of independent pairs (real part, imaginary part)."""
    blocks = [[[g, -w], [w, g]] for g, w in zip(decays, frequencies, strict=True)]
    rate = linalg.block_diag(*blocks)
    return OrnsteinUhlenbeck(rate=rate, covariance=variance * np.eye(len(rate)))


def pairs(number):
    """Partners of neighbouring coordinates."""
    return np.arange(2 * number) ^ 1


def red_series(shape, entropy=0):
    """Series of unit variance and rate at a step of 0.1."""
    members, times, modes = shape
    process = OrnsteinUhlenbeck(rate=[[1.0]], covariance=[[1.0]])
    rng = np.random.default_rng(entropy)
    series = process.simulate(times, 0.1, rng, members=members * modes)
    return np.ascontiguousarray(
        series.reshape(members, modes, times).transpose(0, 2, 1)
    )


# --- Known processes are recovered ------------------------------------------


def test_pairs_and_single_coordinates_are_recovered():
    # Coordinates 0 and 3 are one wave, 1 and 4 another; 2 is alone.
    order = np.array([0, 3, 1, 4, 2])
    rate = linalg.block_diag([[0.5, -1.5], [1.5, 0.5]], [[2, 1], [-1, 2]], [[1.0]])
    covariance = np.diag([4.0, 4.0, 0.1, 0.1, 1.0])
    back = np.argsort(order)
    process = OrnsteinUhlenbeck(
        rate=rate[np.ix_(back, back)], covariance=covariance[np.ix_(back, back)]
    )
    series = process.simulate(60_000, 0.1, np.random.default_rng(1)) + 7.0
    fit = fit_ornstein_uhlenbeck(series, 0.1, window=8.0, partners=[3, 4, -1, 0, 1])
    expected = {
        "decay": [0.5, 2, 1, 0.5, 2],
        "frequency": [1.5, -1, 0, 1.5, -1],
        "variance": [4, 0.1, 1, 4, 0.1],
        "double_window_decay": [0.5, 2, 1, 0.5, 2],
    }
    for name, true in expected.items():
        found = getattr(fit, name)
        assert np.all(np.abs(found.value - true) <= FAR * found.error), name
    assert np.all(np.abs(fit.process.rate - process.rate) <= FAR * fit.rate_error)
    # Where the structure has no entry, it has no error either.
    np.testing.assert_array_equal(fit.rate_error != 0, process.rate != 0)
    np.testing.assert_array_equal(np.diag(fit.process.rate), fit.decay.value)
    np.testing.assert_array_equal(np.diag(fit.process.covariance), fit.variance.value)
    assert not fit.uncorrected.any()
    assert (fit.window, fit.step) == (8, 0.1)
    assert (fit.structure, fit.batches) == ("complex diagonal", 20)


def test_a_full_matrix_is_recovered():
    rate = np.array([[1.0, 2.0, 0.0], [-0.5, 0.8, 0.3], [0.2, 0.0, 0.6]])
    diffusion = np.array([[0.5, 0.2, 0.0], [0.2, 0.3, 0.0], [0.0, 0.0, 1.0]])
    covariance = linalg.solve_continuous_lyapunov(rate, diffusion)
    process = OrnsteinUhlenbeck(rate=rate, covariance=covariance)
    series = process.simulate(60_000, 0.1, np.random.default_rng(2))
    fit = fit_ornstein_uhlenbeck(series, 0.1, window=10.0, structure="full")
    assert np.all(np.abs(fit.process.rate - rate) < FAR * fit.rate_error)
    found = fit.variance
    assert np.all(np.abs(found.value - np.diag(covariance)) < FAR * found.error)
    np.testing.assert_array_equal(np.diag(fit.process.rate), fit.decay.value)
    np.testing.assert_array_equal(fit.frequency.value, 0)
    # Uncorrected, the decay is too fast by about one over the window.
    assert np.all(fit.raw_decay.value > fit.decay.value)


def test_errors_are_what_they_say():
    # 100 e-folding times each. 93 to 98 % measured on 600 (decay, frequency),
    # 88 to 94 % (variance). At a true 92 %, fewer than 85 % of 200 have a
    # probability of 5e-4 (binomial).
    process = waves(np.ones(200), np.full(200, 1.5))
    series = process.simulate(1000, 0.1, np.random.default_rng(3))
    fit = fit_ornstein_uhlenbeck(series, 0.1, window=4.0, partners=pairs(200))
    for found, true in ((fit.decay, 1.0), (fit.frequency, 1.5), (fit.variance, 1.0)):
        inside = np.abs(found.value - true) < STUDENT * found.error
        assert inside[::2].mean() >= 0.85
        # Errors that are too large would pass the line above.
        typical = np.sqrt((found.error[::2] ** 2).mean())
        assert typical < 1.3 * found.value[::2].std(ddof=1)


def test_errors_of_single_coordinates_are_what_they_say():
    fit = fit_ornstein_uhlenbeck(red_series((1, 2000, 200), 4), 0.1, window=4.0)
    # As above, at 200 e-folding times, where the variance is at 92 %.
    for found in (fit.decay, fit.variance):
        assert (np.abs(found.value - 1) < STUDENT * found.error).mean() >= 0.85


def test_members_count_as_one_record():
    # Ten members of 60 e-folding times know as much as one of 600.
    process = waves([1.0], [1.5])
    series = process.simulate(600, 0.1, np.random.default_rng(5), members=10)
    fit = fit_ornstein_uhlenbeck(series, 0.1, window=5.0, partners=[1, 0])
    assert np.all(np.abs(fit.decay.value - 1) < FAR * fit.decay.error)
    assert np.all(np.abs(fit.frequency.value - 1.5) < FAR * fit.frequency.error)
    # A relative error of sqrt(4 window / 3 T) = 0.1, for this much data.
    assert 0.05 < fit.decay.error[0] < 0.2


# --- Notes ------------------------------------------------------------------


def test_a_short_window_is_noted():
    fit = fit_ornstein_uhlenbeck(red_series((1, 2000, 1), 14), 0.1, window=0.5)
    assert any("shorter than one e-folding time" in note for note in fit.notes)
    assert not fit.uncorrected.any()


def test_two_time_scales_are_noted():
    # Correlation exp(-t) / 2 + exp(-t / 10) / 2: the rate at a window of 4 is
    # not that at 8, nor one over the integral time, 1 / 5.5.
    fast = red_series((1, 40_000, 1), 15)
    slow = OrnsteinUhlenbeck(rate=[[0.1]], covariance=[[1.0]]).simulate(
        40_000, 0.1, np.random.default_rng(16)
    )
    series = (fast + slow) / np.sqrt(2)
    fit = fit_ornstein_uhlenbeck(series, 0.1, window=4.0)
    assert any("decay from twice the window differs" in note for note in fit.notes)
    assert fit.double_window_decay.value < fit.decay.value
    wide = fit_ornstein_uhlenbeck(series, 0.1, window=180.0)
    error = wide.decay.error[0]
    # The window is 18 of the slow times: its bias, 5 %, is mostly corrected.
    assert abs(wide.decay.value[0] - 1 / 5.5) < FAR * error + 0.05 / 5.5


def test_what_chance_explains_is_not_noted():
    series = waves(np.ones(150), np.linspace(0, 3, 150)).simulate(
        2000, 0.1, np.random.default_rng(23)
    )
    options = {"partners": pairs(150), "structure": "complex diagonal"}
    fit = fit_ornstein_uhlenbeck(series, 0.1, window=5.0, **options)
    assert fit.notes == ()
    # One wave out of many is not lost among them.
    series[:, :, 7] *= 2
    fit = fit_ornstein_uhlenbeck(series, 0.1, window=5.0, **options)
    assert len(fit.notes) == 1
    assert "2 of 300 coordinates (mode 6, mode 7): the two parts" in fit.notes[0]


def test_what_each_hides_is_noted_if_many_show_it():
    # Parts unequal by 1.2, an imbalance of 0.18, which is known to about 0.06:
    # beyond three errors in many pairs, beyond five (one in 100) in hardly any.
    series = waves(np.ones(100), np.full(100, 0.5)).simulate(
        2000, 0.1, np.random.default_rng(24)
    )
    series[:, :, ::2] *= 1.2
    fit = fit_ornstein_uhlenbeck(series, 0.1, window=5.0, partners=pairs(100))
    (note,) = (note for note in fit.notes if "differ in variance" in note)
    assert int(note.split()[0]) > 60


def test_unequal_parts_of_a_pair_are_noted():
    series = waves([1.0], [0.5]).simulate(5000, 0.1, np.random.default_rng(17))
    fit = fit_ornstein_uhlenbeck(series * [1, 2], 0.1, window=4.0, partners=[1, 0])
    assert any("differ in variance" in note for note in fit.notes)
    assert fit.variance.value[0] == fit.variance.value[1]


def test_a_matrix_too_large_for_the_record_is_noted():
    series = red_series((1, 1000, 5), 18)
    fit = fit_ornstein_uhlenbeck(series, 0.1, window=2.0, structure="full")
    assert any("effective samples for each coordinate" in note for note in fit.notes)


# --- Refusals ---------------------------------------------------------------


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"window": 0.3}, "window of 0.3 s.*4 steps or more"),
        ({"window": np.nan}, "window of nan"),
        ({"window": 5.1}, "1000 samples with a window of 51 .*run on to 1020"),
        ({"batches": 3}, "3 batches, allowed are 4 to 25"),
        ({"batches": 26}, "26 batches"),
        ({"structure": "banded"}, '"banded", allowed are "auto"'),
        ({"structure": "blocks"}, 'no groups of 3 coordinates, structure "blocks"'),
        ({"structure": "blocks", "groups": [1, 2]}, r"groups of shape \(2,\)"),
        ({"structure": "blocks", "groups": [1.0, 2.0, 2.0]}, "needs the label"),
        ({"method": "likelihood"}, 'window of 4.0 s with method "likelihood"'),
        ({"lag": 0.5}, 'lag of 0.5 s with method "integral"'),
        ({"method": "regression", "window": None}, "lag of None s"),
        ({"method": "regression", "window": None, "lag": 30.0}, "lag of 30.0 s"),
        ({"partners": [1, 0]}, r"partners of shape \(2,\)"),
        ({"partners": [1.0, 0.0, -1.0]}, "type float64"),
        ({"partners": [1, 2, 0]}, "partner 1 of coordinate 0"),
        ({"partners": [0, -1, -1]}, "partner 0 of coordinate 0"),
        ({"partners": [-1, -1, 3]}, "partner 3 of coordinate 2"),
        ({"partners": [-1, -2, -1]}, "partner -2 of coordinate 1"),
        ({"labels": ("a", "b")}, "2 labels for 3 modes"),
        ({"step": 0.0}, "step of 0.0 s"),
    ],
)
def test_impossible_requests_are_refused(changes, words):
    arguments = {"step": 0.1, "window": 4.0, **changes}
    with pytest.raises(DataError, match=words):
        fit_ornstein_uhlenbeck(red_series((1, 1000, 3)), **arguments)


def test_unusable_coordinates_are_named():
    series = red_series((1, 1000, 3))
    series[:, :, 1] = 2.5
    with pytest.raises(DataError, match="mode middle is constant"):
        fit_ornstein_uhlenbeck(
            series, 0.1, window=4.0, labels=("first", "middle", "last")
        )
    series[0, 5, 1] = np.nan
    with pytest.raises(DataError, match="mode 1 holds NaN"):
        fit_ornstein_uhlenbeck(series, 0.1, window=4.0)


def test_short_members_are_refused():
    with pytest.raises(DataError, match=r"40 members of 70 samples.*run on to 80"):
        fit_ornstein_uhlenbeck(red_series((40, 70, 1)), 0.1, window=4.0)


def test_dependent_coordinates_have_no_full_matrix():
    series = red_series((1, 1000, 3))
    series[:, :, 2] = series[:, :, 0] - series[:, :, 1]
    with pytest.raises(DataError, match="singular"):
        fit_ornstein_uhlenbeck(series, 0.1, window=4.0, structure="full")


def test_coarse_sampling_is_refused_with_a_step_that_would_do():
    # White noise, and a wave that turns by a third of a circle in a step: half
    # as often sampled it would seem to turn the other way (Nyquist).
    white = np.random.default_rng(19).standard_normal((1, 1000, 2))
    wave = waves([0.1], [2 * np.pi / 3])
    for series, partners in (
        (white, None),
        (wave.simulate(2000, 1.0, np.random.default_rng(20)), [1, 0]),
    ):
        with pytest.raises(DataError, match=r"allowed is a step of 0\..*s at most"):
            fit_ornstein_uhlenbeck(series, 1.0, window=10.0, partners=partners)
    fine = wave.simulate(10_000, 0.2, np.random.default_rng(21))
    fit = fit_ornstein_uhlenbeck(fine, 0.2, window=40.0, partners=[1, 0])
    distance = np.abs(fit.frequency.value - 2 * np.pi / 3)
    assert np.all(distance < FAR * fit.frequency.error)


# --- Odds and ends ----------------------------------------------------------


@pytest.mark.parametrize("structure", ["real diagonal", "complex diagonal", "full"])
def test_there_may_be_no_coordinates(structure):
    fit = fit_ornstein_uhlenbeck(
        np.zeros((1, 1000, 0)), 0.1, window=4.0, structure=structure
    )
    assert fit.process.size == 0
    assert fit.decay.value.shape == (0,)
    assert fit.rate_error.shape == (0, 0)
    assert fit.notes == ()
    assert fit.structure == structure


def test_fits_print_and_cross_process_borders():
    fit = fit_ornstein_uhlenbeck(red_series((1, 1000, 2)), 0.1, window=2.0)
    assert repr(fit).startswith("NoiseFit(integral, full, window 2 s, OrnsteinUhlen")
    copy = pickle.loads(pickle.dumps(fit))
    np.testing.assert_array_equal(copy.process.rate, fit.process.rate)
    np.testing.assert_array_equal(copy.decay.error, fit.decay.error)


def test_window_is_eight_mean_times():
    assert window_rule([1.0, 3.0], [3.0, 1.0], 0.1) == pytest.approx(8 * 1.5)
    assert window_rule([0.01, 0.03], [3.0, 1.0], 0.1) == pytest.approx(0.4)
    assert window_rule([], [], 0.5) == 2.0
    for times, variances, words in (
        ([1.0], [1.0, 2.0], "two arrays"),
        ([np.nan], [1.0], "not finite"),
        ([1.0], [-1.0], "negative"),
    ):
        with pytest.raises(DataError, match=words):
            window_rule(times, variances, 0.1)


# --- From a study -----------------------------------------------------------


def fourier(labels, waves, vectors):
    index = np.arange(vectors.shape[1])
    return Basis(
        vectors=vectors,
        variance=np.ones(len(index)),
        labels=labels,
        partners=index ^ 1,
    ), np.array(waves)


def test_blocks_of_a_study_are_its_zonal_wavenumbers():
    # Two waves of one wavenumber in x, of either sign, and one of another.
    numbers = [[1, 1], [1, 1], [-1, 2], [-1, 2], [2, 1], [2, 1]]
    labels = ("a", "b", "c", "d", "e", "f")
    basis, waves_of = fourier(labels, numbers, np.eye(6))
    np.testing.assert_array_equal(wave_groups(basis, waves_of), [1, 1, 1, 1, 2, 2])
    series = red_series((1, 6000, 6), 30)
    settings = NoiseFitSettings(structure="blocks")
    options = {"product": True, "basis": basis, "waves": waves_of}
    fit = fit_noise(settings, series, 0.1, **options)
    assert (fit.method, fit.structure) == ("integral", "blocks")
    assert fit.process.rate[0, 3] != 0
    assert not fit.process.rate[:4, 4:].any()
    # By default waves, and the method that their coupling asks for.
    for product, method in ((True, "product"), (False, "integral")):
        fit = fit_noise(
            NoiseFitSettings(), series, 0.1, **(options | {"product": product})
        )
        assert (fit.method, fit.structure) == (method, "complex diagonal")
    settings = NoiseFitSettings(method="regression", lag=0.3, structure="real diagonal")
    fit = fit_noise(settings, series, 0.1, **options)
    assert (fit.method, fit.window) == ("regression", pytest.approx(0.3))
    # Modes that mix wavenumbers have no blocks.
    turn = np.eye(6)
    turn[np.ix_([0, 4], [0, 4])] = [[0.6, -0.8], [0.8, 0.6]]
    mixed, _ = fourier(labels, numbers, turn)
    with pytest.raises(DataError, match="mode a is made of several wavenumbers"):
        wave_groups(mixed, waves_of)


@pytest.mark.parametrize(
    ("keys", "words"),
    [
        ({"method": "regression"}, "needs lag"),
        ({"lag": 3.0}, "lag has no meaning"),
        ({"method": "likelihood", "window": 3.0}, "window has no meaning"),
        ({"method": "product", "structure": "full"}, 'no structure = "full"'),
    ],
)
def test_settings_that_contradict_each_other(keys, words):
    (problem,) = NoiseFitSettings(**keys).problems()
    assert words in problem
    assert not list(NoiseFitSettings(method="regression", lag=3.0).problems())
