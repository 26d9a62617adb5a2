"""Likelihood and regression: errors, bias, structures and refusals."""

import numpy as np
import pytest
from scipy import linalg

from eddyshed.reduce.noise.fit import OrnsteinUhlenbeck, fit_ornstein_uhlenbeck
from eddyshed.reduce.noise.lag_pairs import (
    complex_units,
    matrix_pairs,
    regressed_matrices,
    unit_pairs,
)
from eddyshed.reduce.noise.lagged import matrix_bias
from eddyshed.reduce.noise.likelihood import matrix_likelihood, unit_likelihood
from eddyshed.reduce.noise.repair import repaired_rate
from eddyshed.solver.errors import DataError

LAGGED = {"likelihood": {}, "regression": {"lag": 0.5}}
METHODS = {"integral": {}, "product": {}, **LAGGED}
RATE = np.array([[1.0, 2.0], [-0.5, 0.8]])
NOISE = np.array([[0.49, 0.21], [0.21, 0.25]])


def turning():
    """Two coordinates that act on each other (Gardiner, ch. 4)."""
    covariance = linalg.solve_continuous_lyapunov(RATE, NOISE)
    return OrnsteinUhlenbeck(rate=RATE, covariance=covariance)


def wave(decay, frequency):
    rate = [[decay, -frequency], [frequency, decay]]
    return OrnsteinUhlenbeck(rate=rate, covariance=np.eye(2))


def many(process, times, step, number, seed):
    """Independent copies side by side, shape (1, time, copy * n)."""
    series = process.simulate(times, step, np.random.default_rng(seed), members=number)
    return np.moveaxis(series, 0, 1).reshape(1, times, -1)


# --- Coverage ---------------------------------------------------------------

# 400 series of 100 correlation times each. With a true coverage of 92 % (98 %) fewer
# than 88.5 % (more than 99.75 %) of 400 hold the truth in 1 % of cases; products of
# single coordinates were at 91.8 +- 1.0 % of 800, all else at 92.9 to 96.9 %.
LEAST, MOST = 0.885, 0.9975


def held(fit, name, true):
    low, high = fit.interval(name)
    return np.mean((low <= true) & (true <= high))


@pytest.mark.parametrize("method", METHODS)
def test_intervals_of_single_coordinates(method):
    process = OrnsteinUhlenbeck(rate=[[1.0]], covariance=[[1.0]])
    series = many(process, 500, 0.2, 400, 1)
    options = METHODS[method] | ({"lag": 0.4} if method == "regression" else {})
    fit = fit_ornstein_uhlenbeck(
        series, 0.2, method=method, structure="real diagonal", **options
    )
    for name in ("decay", "variance"):
        assert LEAST < held(fit, name, 1.0) < MOST, name
    # Bias: below a quarter of an error, known to 1 / 20 of it.
    off = fit.decay.value.mean() - 1
    assert abs(off) < 0.25 * fit.decay.value.std()


@pytest.mark.parametrize("method", METHODS)
def test_intervals_of_waves(method):
    series = many(wave(1.0, 1.5), 1000, 0.1, 400, 2)
    fit = fit_ornstein_uhlenbeck(
        series, 0.1, method=method, partners=np.arange(800) ^ 1, **METHODS[method]
    )
    for name, true in (("decay", 1.0), ("frequency", 1.5), ("variance", 1.0)):
        assert LEAST < held(fit, name, true) < MOST, name
    off = fit.decay.value.mean() - 1
    assert abs(off) < 0.25 * fit.decay.value.std()


@pytest.mark.slow
@pytest.mark.parametrize("method", ["integral", *LAGGED])
def test_intervals_of_matrices(method):
    # 100 series, for the time it takes (blocks are full matrices of their own, see
    # below): at a true 92 % fewer than 84.5 % hold the truth in 1 % of cases. On 400
    # series of both structures 93.3 to 97.5 % did.
    process = turning()
    times = round(100 / 0.9 / 0.1)
    series = process.simulate(times, 0.1, np.random.default_rng(3), members=100)
    values = np.linalg.eigvals(RATE)
    decays = []
    held = {"decay": [], "frequency": [], "variance": [], "entry": []}
    for one in series:
        fit = fit_ornstein_uhlenbeck(
            one[None], 0.1, method=method, structure="full", **METHODS[method]
        )
        for name, key, true in (
            ("eigen_decay", "decay", values.real),
            ("eigen_frequency", "frequency", np.array([1, -1]) * values.imag.max()),
            ("variance", "variance", np.diag(process.covariance)),
        ):
            low, high = fit.interval(name)
            held[key].append((low <= true) & (true <= high))
        decays.append((fit.eigen_decay.value[0], fit.eigen_decay.error[0]))
        # Student's quantile for 19 degrees of freedom.
        held["entry"].append(np.abs(fit.process.rate - RATE) < 2.093 * fit.rate_error)
    for name, inside in held.items():
        assert np.mean(inside) > 0.845, name
    # Errors that are too large would pass the lines above.
    typical = np.sqrt(np.mean([error**2 for _, error in decays]))
    assert typical < 1.3 * np.std([value for value, _ in decays], ddof=1)


# --- Errors and bias --------------------------------------------------------


def test_errors_of_the_likelihood_are_those_of_theory():
    # Fisher information: sqrt((exp(2 g dt) - 1) / n) / dt for one coordinate (theta =
    # 0.5, dt = 0.1, n = 10000: 0.032430066), sqrt(1 / 2) of it for a wave.
    process = OrnsteinUhlenbeck(rate=[[0.5]], covariance=[[0.64]])
    expected = np.sqrt((np.exp(0.1) - 1) / 10000) / 0.1
    assert expected == pytest.approx(0.032430066, abs=1e-9)
    fit = fit_ornstein_uhlenbeck(
        many(process, 10001, 0.1, 60, 4),
        0.1,
        method="likelihood",
        structure="real diagonal",
    )
    # A jackknife of 20 batches knows an error to a sixth, 60 of them to 2 %.
    typical = np.sqrt((fit.decay.error**2).mean())
    assert typical == pytest.approx(expected, rel=0.08)
    fit = fit_ornstein_uhlenbeck(
        many(wave(0.5, 1.0), 10001, 0.1, 60, 5),
        0.1,
        method="likelihood",
        partners=np.arange(120) ^ 1,
    )
    for found in (fit.decay, fit.frequency):
        typical = np.sqrt((found.error**2).mean())
        assert typical == pytest.approx(expected / np.sqrt(2), rel=0.08)


@pytest.mark.parametrize("lag", [1, 4])
def test_bias_of_a_lag_matrix(lag):
    # Nicholls and Pope (1988) at a lag of one; the rest follows from it (see lagged).
    process, step, times = turning(), 0.3, 200
    series = process.simulate(times, step, np.random.default_rng(6), members=1500)
    true = process.propagator(lag * step)
    found = np.stack(
        [regressed_matrices(matrix_pairs(y[None], lag, 2))[0] for y in series]
    )
    error = found.std(axis=0) / np.sqrt(len(found))
    bias, memory = matrix_bias(process.rate * step, process.covariance, lag)
    expected = bias / (times - lag)
    # Four standard errors and the next order, ten over n squared times the lag.
    tolerance = 4 * error + 10 * lag / times**2
    assert np.all(np.abs(found.mean(axis=0) - true - expected) < tolerance)
    assert np.abs(expected).max() > 1.5 * tolerance.max()
    ahead = sum(process.lag_covariance(k * step) for k in range(1, 400))
    total = ahead + ahead.T + process.covariance
    np.testing.assert_allclose(memory, total, rtol=1e-10, atol=1e-12)


def test_bias_of_one_coordinate_is_kendalls():
    # M. G. Kendall (1954), Biometrika 41, 403: -(1 + 3 phi) / n.
    phi = 0.9
    bias, memory = matrix_bias(np.array([[-np.log(phi)]]), np.array([[2.0]]), 1)
    assert bias[0, 0] == pytest.approx(-(1 + 3 * phi), rel=1e-12)
    assert memory[0, 0] == pytest.approx(2 * (1 + phi) / (1 - phi), rel=1e-12)


def test_the_likelihood_has_no_slope_where_it_is_largest():
    # Against the density of all samples at once, which knows no recursion.
    y = turning().simulate(40, 0.4, np.random.default_rng(7), members=2)
    best = matrix_likelihood(y)

    def density(phi, covariance, mean):
        powers = [np.linalg.matrix_power(phi, k) @ covariance for k in range(40)]
        whole = np.block(
            [
                [powers[i - j] if i >= j else powers[j - i].T for j in range(40)]
                for i in range(40)
            ]
        )
        left = (y - mean).reshape(2, -1)
        _, size = np.linalg.slogdet(2 * np.pi * whole)
        return -0.5 * sum(size + row @ np.linalg.solve(whole, row) for row in left)

    at = (best.propagator, best.covariance, best.mean)
    assert density(*at) == pytest.approx(best.value, abs=1e-8)
    rng = np.random.default_rng(8)
    for _ in range(20):
        tried = [part + 1e-3 * rng.standard_normal(part.shape) for part in at]
        tried[1] = (tried[1] + tried[1].T) / 2
        assert density(*tried) < best.value


def test_waves_have_the_likelihood_of_their_two_parts():
    y = wave(1.0, 2.0).simulate(60, 0.2, np.random.default_rng(9), members=3)
    parts = complex_units(y, np.array([0]), np.array([1]))
    phi, variance, value = unit_likelihood(
        unit_pairs(parts, 1, 4), parts[:, :, 0], np.array([True])
    )
    phi, variance = phi[0, 0], variance[0, 0]
    matrix = np.array([[phi.real, -phi.imag], [phi.imag, phi.real]])
    assert phi.imag < 0  # exp(-i w t)
    # The best matrix of any form is more likely, by a few degrees of freedom.
    free = matrix_likelihood(y)
    assert 0 < free.value - value[0, 0] < 10
    gap = variance / 2 * (1 - abs(phi) ** 2)
    centred = y - y.mean(axis=(0, 1))
    new = centred[:, 1:] - centred[:, :-1] @ matrix.T
    # With the sample mean in place of the best one it is a little less.
    at_mean = -0.5 * (
        (new**2).sum() / gap
        + new.size * np.log(2 * np.pi * gap)
        + (centred[:, 0] ** 2).sum() / (variance / 2)
        + 6 * np.log(2 * np.pi * variance / 2)
    )
    assert 0 <= value[0, 0] - at_mean < 0.5


# --- Structures -------------------------------------------------------------


@pytest.mark.parametrize("method", ["integral", *LAGGED])
def test_blocks_are_full_matrices_of_their_own(method):
    one = many(turning(), 4000, 0.1, 2, 10)
    order = [0, 2, 1, 3]
    options = {"method": method, **METHODS[method]}
    if method == "integral":
        options["window"] = 8.0
    fit = fit_ornstein_uhlenbeck(
        one[:, :, order], 0.1, structure="blocks", groups=list("abab"), **options
    )
    for start in (0, 2):
        part = fit_ornstein_uhlenbeck(
            one[:, :, start : start + 2], 0.1, structure="full", **options
        )
        at = np.ix_([start // 2, start // 2 + 2], [start // 2, start // 2 + 2])
        np.testing.assert_allclose(fit.process.rate[at], part.process.rate, rtol=1e-9)
        np.testing.assert_allclose(fit.rate_error[at], part.rate_error, rtol=1e-9)
    assert not fit.process.rate[0, [1, 3]].any()
    assert not fit.rate_error[0, [1, 3]].any()


def test_the_structure_is_chosen_by_the_data_and_said():
    long, short = many(turning(), 4000, 0.1, 2, 11), many(turning(), 1500, 0.1, 2, 11)
    for series, options, expected in (
        (long, {}, "full"),
        (short, {}, "real diagonal"),
        (short, {"groups": [0, 0, 1, 1]}, "blocks"),
        (long, {"partners": [1, 0, -1, -1]}, "complex diagonal"),
        (long, {"method": "product"}, "real diagonal"),
        (long[:, :, :1], {}, "real diagonal"),
    ):
        fit = fit_ornstein_uhlenbeck(series, 0.1, **options)
        assert fit.structure == expected
        assert fit.notes[0].startswith(f"structure: {expected}, as ")
        chosen = fit_ornstein_uhlenbeck(series, 0.1, structure=expected, **options)
        assert not any("structure:" in note for note in chosen.notes)


def test_a_real_diagonal_knows_no_partners():
    series = many(wave(1.0, 0.0), 2000, 0.1, 1, 12) * [1, 3]
    fit = fit_ornstein_uhlenbeck(
        series, 0.1, structure="real diagonal", partners=[1, 0]
    )
    assert fit.variance.value[1] > 4 * fit.variance.value[0]
    assert not fit.frequency.value.any()


# --- Refusals and repairs ---------------------------------------------------


@pytest.mark.parametrize("structure", ["complex diagonal", "full"])
def test_a_wave_that_turns_too_far_in_a_step_is_refused(structure):
    # w dt = 3.6 looks like -2.68, with a small error: 154 degrees.
    series = many(wave(0.05, 3.0), 4000, 1.2, 1, 13)
    partners = [1, 0] if structure == "complex diagonal" else None
    with pytest.raises(DataError, match=r"turns? by 15[34] degrees in .*aliasing"):
        fit_ornstein_uhlenbeck(
            series, 1.2, method="likelihood", structure=structure, partners=partners
        )


def test_sampling_at_the_nyquist_frequency():
    # H. Nyquist (1928): a third of a circle a step is seen, two thirds seem to be a
    # third the other way, and no series can tell.
    process = wave(0.1, 2 * np.pi / 3)
    for step, seen in ((1.0, 2 * np.pi / 3), (2.0, -np.pi / 3)):
        series = many(process, 4000, step, 1, 14)
        fit = fit_ornstein_uhlenbeck(series, step, method="likelihood", partners=[1, 0])
        assert abs(fit.frequency.value[0] - seen) < 4 * fit.frequency.error[0]


def test_what_decays_within_a_lag_is_refused():
    process = OrnsteinUhlenbeck(rate=[[1.0]], covariance=[[1.0]])
    series = many(process, 20000, 1.5, 1, 15)
    with pytest.raises(DataError, match=r"lag of 1\.5 s with an energy-weighted decay"):
        fit_ornstein_uhlenbeck(series, 1.5, method="likelihood")
    jumpy = np.diff(np.random.default_rng(16).standard_normal(2001))
    with pytest.raises(DataError, match=r"correlation -0\.\d+ at this lag, and a real"):
        fit_ornstein_uhlenbeck(jumpy[None, :, None], 1.0, method="likelihood")


def test_a_smooth_series_is_sampled_too_finely():
    # A moving mean of white noise is smooth; the lag decides what its rate is.
    white = np.random.default_rng(17).standard_normal(20_200)
    bell = np.exp(-(np.linspace(-3, 3, 101) ** 2) / 2)
    smooth = np.convolve(white, bell, "valid")[None, :, None]
    with pytest.raises(DataError, match="series is smooth at this lag"):
        fit_ornstein_uhlenbeck(smooth, 0.1, method="likelihood")
    with pytest.raises(DataError, match="series is smooth at this lag"):
        fit_ornstein_uhlenbeck(smooth, 0.1, method="regression", lag=0.5)
    fit = fit_ornstein_uhlenbeck(smooth, 0.1)
    # Correlation exp(-t^2 / 4 s^2) with s = 100 / 6 steps: its integral is s sqrt(pi).
    expected = 1 / (10 / 6 * np.sqrt(np.pi))
    assert abs(fit.decay.value[0] - expected) < 4 * fit.decay.error[0]


def test_short_records_are_refused():
    process = OrnsteinUhlenbeck(rate=[[1.0]], covariance=[[1.0]])
    series = many(process, 200, 0.01, 1, 18)
    with pytest.raises(DataError, match=r"e-folding times \(by energy\), allowed"):
        fit_ornstein_uhlenbeck(series, 0.01, method="likelihood")
    series = many(process, 400, 0.01, 1, 18)
    with pytest.raises(DataError, match="integral times, allowed are 20"):
        fit_ornstein_uhlenbeck(series, 0.01)
    wide = many(process, 400, 0.1, 12, 19)
    for method in ("integral", "likelihood"):
        with pytest.raises(DataError, match="for a matrix of 12 coordinates"):
            fit_ornstein_uhlenbeck(wide, 0.1, method=method, structure="full")


def test_a_repair_is_small_and_reported():
    # Noise in one direction only: chance makes the other one negative.
    rate = np.array([[1.0, 1.0], [-1.0, 0.5]])
    covariance = linalg.solve_continuous_lyapunov(rate, np.diag([1.0, 1e-6]))
    process = OrnsteinUhlenbeck(rate=rate, covariance=covariance)
    repairs = []
    for seed in range(6):
        series = process.simulate(4000, 0.05, np.random.default_rng(seed))
        fit = fit_ornstein_uhlenbeck(series, 0.05, method="regression", lag=0.2)
        said = any("noise of negative variance" in note for note in fit.notes)
        assert said == (fit.repair > 0)
        repairs.append(fit.repair)
    assert 0 < max(repairs) < 0.05
    assert min(repairs) == 0 or len(set(repairs)) > 1


def test_a_repair_changes_what_is_negative_and_nothing_else():
    covariance = np.array([[1.0, 0.2], [0.2, 2.0]])
    half = np.array([[1.0, 0.9], [-0.7, -0.02]])
    rate = np.linalg.solve(covariance, half.T).T
    repaired, share = repaired_rate(rate, covariance)
    process = OrnsteinUhlenbeck(rate=repaired, covariance=covariance)
    after = repaired @ covariance
    np.testing.assert_allclose(after - after.T, half - half.T, atol=1e-12)
    scale = np.sqrt(np.diag(covariance))
    before = np.linalg.eigvalsh((half + half.T) / np.outer(scale, scale))
    values = np.linalg.eigvalsh(process.diffusion / np.outer(scale, scale))
    np.testing.assert_allclose(values, [1e-3 * before[1], before[1]], rtol=1e-9)
    expected = (1e-3 * before[1] - before[0]) / np.abs(before).sum()
    assert share == pytest.approx(expected, rel=1e-9)
    same, none = repaired_rate(RATE, turning().covariance)
    assert none == 0
    np.testing.assert_array_equal(same, RATE)


def test_noise_beyond_repair_is_refused():
    # An autoregression that no process has: its lag matrix shrinks all states, but its
    # logarithm would let some grow: [[1.2, -2.9], [0, 1.2]] has 1.2 -+ 1.47.
    lag_matrix = np.array([[0.3, 0.88], [0.0, 0.3]])
    root = np.linalg.cholesky(np.eye(2) - lag_matrix @ lag_matrix.T)
    new = np.random.default_rng(20).standard_normal((20_000, 2)) @ root.T
    for k in range(1, len(new)):
        new[k] += lag_matrix @ new[k - 1]
    with pytest.raises(DataError, match=r"noise of negative variance \(9"):
        fit_ornstein_uhlenbeck(new[None], 1.0, method="likelihood", structure="full")


def test_intervals_are_of_what_there_is():
    fit = fit_ornstein_uhlenbeck(many(turning(), 4000, 0.1, 1, 21), 0.1)
    for arguments in (("rate",), ("decay", 1.0), ("decay", 0.0)):
        with pytest.raises(DataError, match="interval of"):
            fit.interval(*arguments)
    low, high = fit.interval("decay", 0.5)
    assert np.all((low < fit.decay.value) & (fit.decay.value < high))
    # The noise is what the decay takes away.
    np.testing.assert_allclose(fit.noise.value, np.diag(fit.process.diffusion))
