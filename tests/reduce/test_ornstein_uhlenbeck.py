import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import linalg

from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.solver.errors import DataError

ROUND_OFF = 1e-11  # of numbers of order 1 to 100 in matrices of condition < 1000


@st.composite
def processes(draw):
    """Random processes: any covariance and noise, any circulation R in
    rate = (D / 2 + R) C^-1."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    size = draw(st.integers(1, 6))

    def positive():
        vectors = linalg.qr(rng.standard_normal((size, size)))[0]
        return vectors * rng.uniform(0.3, 3, size) @ vectors.T

    covariance, diffusion = positive(), positive()
    turning = rng.standard_normal((size, size))
    half = diffusion / 2 + (turning - turning.T)
    process = OrnsteinUhlenbeck(
        rate=np.linalg.solve(covariance, half.T).T, covariance=covariance
    )
    return process, diffusion, linalg.qr(rng.standard_normal((size, size)))[0]


laws = settings(max_examples=40, deadline=None, derandomize=True)
lags = st.floats(0, 5)


@laws
@given(processes())
def test_rate_and_covariance_balance_the_noise(drawn):
    process, diffusion, _ = drawn
    np.testing.assert_allclose(process.diffusion, diffusion, atol=ROUND_OFF)
    found = linalg.solve_continuous_lyapunov(process.rate, process.diffusion)
    np.testing.assert_allclose(found, process.covariance, atol=ROUND_OFF)


@laws
@given(processes(), lags, lags)
def test_steps_follow_one_another(drawn, one, two):
    process = drawn[0]
    np.testing.assert_allclose(
        process.lag_covariance(0.0), process.covariance, atol=ROUND_OFF
    )
    first, second = process.propagator(one), process.propagator(two)
    both = process.propagator(one + two)
    np.testing.assert_allclose(second @ first, both, atol=ROUND_OFF)
    # What is new after two steps: the first, carried on, and the second.
    new = process.innovation_covariance(two)
    new = new + second @ process.innovation_covariance(one) @ second.T
    found = process.innovation_covariance(one + two)
    np.testing.assert_allclose(found, new, atol=ROUND_OFF)
    assert np.linalg.eigvalsh(found)[0] > -ROUND_OFF


@laws
@given(processes(), st.floats(-20, 20))
def test_spectrum_is_a_spectrum(drawn, omega):
    process = drawn[0]
    found = process.spectrum(omega)
    np.testing.assert_allclose(found, found.conj().T, atol=ROUND_OFF)
    assert np.linalg.eigvalsh(found)[0] > 0
    np.testing.assert_allclose(process.spectrum(-omega), found.T, atol=ROUND_OFF)
    np.testing.assert_allclose(
        process.spectrum(0.0), process.zero_frequency, atol=ROUND_OFF
    )


@laws
@given(processes(), lags)
def test_everything_turns_with_the_coordinates(drawn, lag):
    process, _, turn = drawn
    turned = OrnsteinUhlenbeck(
        rate=turn @ process.rate @ turn.T,
        covariance=turn @ process.covariance @ turn.T,
    )
    for quantity in (
        lambda p: p.diffusion,
        lambda p: p.integral_covariance,
        lambda p: p.zero_frequency,
        lambda p: p.propagator(lag),
        lambda p: p.lag_covariance(lag),
        lambda p: p.innovation_covariance(lag),
        lambda p: p.spectrum(lag),
    ):
        expected = turn @ quantity(process) @ turn.T
        np.testing.assert_allclose(quantity(turned), expected, atol=ROUND_OFF)


def test_many_lags_at_once():
    process = OrnsteinUhlenbeck(rate=[[1.0, -2.0], [2.0, 1.0]], covariance=np.eye(2))
    grid = np.array([[0.0, 0.5, 1.0], [2.0, 3.0, 4.0]])
    for name in (
        "propagator",
        "lag_covariance",
        "innovation_covariance",
        "spectrum",
    ):
        function = getattr(process, name)
        found = function(grid)
        assert found.shape == (2, 3, 2, 2)
        np.testing.assert_allclose(found[1, 0], function(2.0), atol=1e-15)


# --- Simulation -------------------------------------------------------------


@pytest.mark.parametrize("n_times", [1, 2, 7, 10])
def test_simulation_has_the_covariance_between_all_times(n_times):
    # Ten times are made in pieces of four: every pair of times is compared, so
    # that a wrong joint between pieces would show.
    process = OrnsteinUhlenbeck(
        rate=[[0.5, -1.0, 0.2], [1.0, 0.5, 0.0], [0.0, 0.3, 2.0]],
        covariance=linalg.solve_continuous_lyapunov(
            np.array([[0.5, -1.0, 0.2], [1.0, 0.5, 0.0], [0.0, 0.3, 2.0]]),
            np.diag([1.0, 2.0, 0.5]),
        ),
    )
    step, members = 0.7, 40_000
    series = process.simulate(n_times, step, np.random.default_rng(1), members)
    assert series.shape == (members, n_times, 3)
    flat = series.reshape(members, -1)
    expected = np.block(
        [
            [
                process.lag_covariance((i - j) * step)
                if i >= j
                else process.lag_covariance((j - i) * step).T
                for j in range(n_times)
            ]
            for i in range(n_times)
        ]
    )
    variance = np.diag(expected)
    error = np.sqrt((np.outer(variance, variance) + expected**2) / members)
    distance = (flat.T @ flat / members - expected) / error
    # 465 numbers at most: one beyond 4.5 errors in 300 streams; this is fixed.
    assert np.abs(distance).max() < 4.5


def test_simulation_of_many_pairs():
    # Mostly zeros: the steps are made with sparse matrices.
    decay = np.linspace(0.5, 2.0, 10)
    turn = np.linspace(-1.0, 1.0, 10)
    rate = linalg.block_diag(
        *([[g, -w], [w, g]] for g, w in zip(decay, turn, strict=True))
    )
    process = OrnsteinUhlenbeck(rate=rate, covariance=np.eye(20))
    series = process.simulate(5, 0.4, np.random.default_rng(2), members=40_000)
    for lag in (0, 3):
        found = np.einsum("mi,mj->ij", series[:, 1 + lag], series[:, 1]) / 40_000
        error = np.sqrt((1 + process.lag_covariance(0.4 * lag) ** 2) / 40_000)
        distance = (found - process.lag_covariance(0.4 * lag)) / error
        assert np.abs(distance).max() < 4.5  # 400 numbers, as above


def test_simulation_depends_on_the_stream_alone():
    process = OrnsteinUhlenbeck(rate=[[1.0]], covariance=[[1.0]])
    one, two, three = (
        process.simulate(50, 0.1, np.random.default_rng(k), members=2)
        for k in (1, 1, 2)
    )
    np.testing.assert_array_equal(one, two)
    assert np.all(one != three)


def test_simulation_of_a_degenerate_process():
    # The second coordinate does not move, the third is the first.
    covariance = np.array([[1.0, 0.0, 1.0], [0.0, 0.0, 0.0], [1.0, 0.0, 1.0]])
    process = OrnsteinUhlenbeck(rate=np.eye(3), covariance=covariance)
    series = process.simulate(100, 0.3, np.random.default_rng(3))
    np.testing.assert_array_equal(series[:, :, 1], 0)
    # Square roots of round-off in a covariance.
    np.testing.assert_allclose(series[:, :, 0], series[:, :, 2], atol=1e-7)


@pytest.mark.parametrize(
    "changes", [{"n_times": 0}, {"members": 0}, {"step": 0.0}, {"step": np.nan}]
)
def test_simulation_refuses_empty_series(changes):
    process = OrnsteinUhlenbeck(rate=[[1.0]], covariance=[[1.0]])
    arguments = {"n_times": 5, "step": 0.1, "members": 1, **changes}
    with pytest.raises(DataError, match="allowed are positive numbers"):
        process.simulate(rng=np.random.default_rng(0), **arguments)


# --- Construction -----------------------------------------------------------


def test_there_may_be_no_noise():
    process = OrnsteinUhlenbeck(rate=np.zeros((0, 0)), covariance=np.zeros((0, 0)))
    assert process.size == 0
    assert process.diffusion.shape == (0, 0)
    assert process.zero_frequency.shape == (0, 0)
    assert process.propagator(1.0).shape == (0, 0)
    assert process.innovation_covariance(1.0).shape == (0, 0)
    assert process.spectrum(np.zeros(4)).shape == (4, 0, 0)
    assert process.simulate(5, 1.0, np.random.default_rng(0), 2).shape == (2, 5, 0)
    assert "no coordinates" in repr(process)


def test_processes_say_what_they_are_and_cross_process_borders():
    process = OrnsteinUhlenbeck(rate=np.diag([0.5, 4.0]), covariance=np.eye(2))
    expected = "OrnsteinUhlenbeck(2 coordinates, e-folding times 0.25 to 2 s)"
    assert repr(process) == expected
    copy = pickle.loads(pickle.dumps(process))
    np.testing.assert_array_equal(copy.rate, process.rate)


def test_processes_keep_their_own_numbers():
    rate = np.array([[1.0]])
    process = OrnsteinUhlenbeck(rate=rate, covariance=[[1.0]])
    rate[0, 0] = -5
    assert process.rate[0, 0] == 1
    with pytest.raises(ValueError, match="read-only"):
        process.rate[0, 0] = 2


UNIT = np.eye(2)


@pytest.mark.parametrize(
    ("rate", "covariance", "words"),
    [
        (np.ones((2, 3)), UNIT, r"rate of shape \(2, 3\).*square"),
        (UNIT, np.eye(3), r"covariance of shape \(3, 3\)"),
        ([[1, np.nan], [0, 1]], UNIT, r"rate\[0, 1\] is nan"),
        (UNIT, [[1, 0], [0, np.inf]], r"covariance\[1, 1\] is inf"),
        (
            UNIT,
            [[1, 0.5], [0, 1]],
            r"covariance\[0, 1\] = 0.5 but covariance\[1, 0\] = 0",
        ),
        (UNIT, [[1, 2], [2, 1]], "covariance has a negative eigenvalue"),
        (UNIT, [[-1e-30, 0], [0, 1]], "covariance has a negative eigenvalue"),
        (np.diag([1.0, -0.1]), UNIT, "eigenvalue -0.1.*positive real part"),
        ([[0, -1], [1, 0]], UNIT, "eigenvalue .*positive real part"),
        ([[1, -4], [0, 1]], UNIT, "noise of negative variance"),
        # A weak coordinate counts as well: its diffusion is 1e-12 of the other.
        ([[1, 0], [-4e-6, 1]], np.diag([1, 1e-12]), "noise of negative variance"),
    ],
)
def test_impossible_processes_are_refused(rate, covariance, words):
    with pytest.raises(DataError, match=words):
        OrnsteinUhlenbeck(rate=rate, covariance=covariance)


@pytest.mark.parametrize("lag", [-0.1, np.inf, np.nan])
def test_lags_run_forward(lag):
    process = OrnsteinUhlenbeck(rate=[[1.0]], covariance=[[1.0]])
    with pytest.raises(DataError, match="finite lag of zero or more"):
        process.lag_covariance(lag)
