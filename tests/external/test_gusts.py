"""Gusts against closed forms of the Ornstein-Uhlenbeck process."""

from decimal import Decimal, localcontext

import numpy as np
import pytest
from scipy.linalg import solve_discrete_lyapunov

from eddyshed.solver.gusts import GustProcess, gust_step


@pytest.mark.parametrize("ratio", ["1e-6", "1e-3", "0.1", "0.4999", "0.5", "3", "40"])
def test_one_step_has_the_exact_joint_law(ratio):
    # Gillespie (1996), Phys. Rev. E 54:2084, eq. 2.10 for value and integral, in
    # arithmetic of 60 digits.
    with localcontext() as context:
        context.prec = 60
        x = Decimal(ratio)
        a = (-x).exp()
        value = 1 - a * a
        integral = 2 * x - 3 + 4 * a - a * a
        together = (1 - a) ** 2
        exact = [float(v) for v in (value, integral / x**2, together / x)]
        means = [float(v) for v in (a, (1 - a) / x)]
    step = gust_step(float(ratio))
    found = [
        step.value_normal**2,
        step.mean_shared**2 + step.mean_own**2,
        step.value_normal * step.mean_shared,
    ]
    # Round-off; the variance of the mean is its square roots squared.
    np.testing.assert_allclose(found, exact, rtol=1e-13)
    np.testing.assert_allclose([step.decay, step.carry], means, rtol=1e-14)


def test_value_is_stationary_with_the_given_correlation():
    # Variance one and correlation exp(-t / tau) (Gardiner, Handbook of Stochastic
    # Methods, section 4.4.4). 2000 independent processes, compared across them.
    rng = np.random.default_rng(11)
    count, ratio = 2000, 0.3
    gust = GustProcess(np.ones(count), 1.0, ratio, rng, where=np.arange(count))
    first = gust.value
    for _ in range(5):
        push = np.zeros(count)
        gust.add_push(push)
    # Four standard errors: sqrt(2 / n) of a variance, and of a covariance with
    # correlation r sqrt((1 + r^2) / n).
    assert abs(gust.value.var() - 1) < 4 * np.sqrt(2 / count)
    r = np.exp(-5 * ratio)
    assert abs(np.mean(first * gust.value) - r) < 4 * np.sqrt((1 + r * r) / count)


def test_push_and_value_of_a_step_go_together():
    # Over many processes: the covariance of the mean over a step with the value at
    # its end is (1 - a)^2 / x + a (1 - a) / x, x the step over the time, a = e^-x.
    rng = np.random.default_rng(12)
    count, x = 20000, 1.5
    gust = GustProcess(np.ones(count), 1.0, x, rng, where=np.arange(count))
    push = np.zeros(count)
    gust.add_push(push)
    a = np.exp(-x)
    expected = (1 - a) ** 2 / x + a * (1 - a) / x
    # Four standard errors of a covariance of normals, at most sqrt(2 / n).
    assert abs(np.mean(push * gust.value) - expected) < 4 * np.sqrt(2 / count)


def test_a_pattern_and_a_band_feel_the_same_process():
    # One process times a pattern; or one for each of three coordinates.
    band = GustProcess(
        np.array([2.0]), 1.0, 0.1, np.random.default_rng(3), where=np.array([1])
    )
    pattern = GustProcess(
        np.array([[0.0, 2.0, 0.0]]), 1.0, 0.1, np.random.default_rng(3)
    )
    for _ in range(3):
        one, other = np.zeros(3), np.zeros(3)
        band.add_push(one)
        pattern.add_push(other)
        np.testing.assert_array_equal(one, other)
    assert one[1] != 0
    assert one[0] == one[2] == 0


def cascade(ratio, damping):
    """Stationary covariance of (gust, mode) that the scheme has, tau = 1.

    The mode obeys dx/dt = -g x + y. A step multiplies by exp(-g h) and adds the
    gust's mean over it times (1 - exp(-g h)) / g: what any scheme that is exact for
    a constant forcing does.
    """
    s = gust_step(ratio)
    gain = -np.expm1(-damping * ratio) / damping
    transition = np.array([[s.decay, 0], [gain * s.carry, np.exp(-damping * ratio)]])
    noise = np.array([[s.value_normal, 0], [gain * s.mean_shared, gain * s.mean_own]])
    return transition, solve_discrete_lyapunov(transition, noise @ noise.T)


def test_weak_order_of_the_gusts_is_two():
    # Two linear filters in a row: variance tau / (g (1 + g tau)) of the second and
    # covariance tau / (1 + g tau) with the first (Gardiner, section 4.4.6). No
    # sampling: the scheme's own stationary covariance.
    damping = 0.7
    exact = np.array([1 / (1 + damping), 1 / (damping * (1 + damping))])
    ratios = 0.4 / 2 ** np.arange(5)
    errors = np.array([np.abs(cascade(r, damping)[1][1] - exact) for r in ratios])
    slopes = np.log2(errors[:-1] / errors[1:])
    # On successive halvings. What the state is to the gust has order two; the
    # variance of a linear mode happens to have four.
    assert np.all(np.abs(slopes - [2, 4]) < 0.1), slopes
