"""Simulation of reduced models against exact solutions and exact statistics."""

import math

import numpy as np
import pytest
from scipy import integrate, linalg, special
from toys import coloured_model, orthonormal_vectors, random_model

from eddyshed.reduce.operators import galerkin
from eddyshed.reduce.reduced import ReducedModel
from eddyshed.reduce.simulation import (
    make_scheme,
    simulate,
    step_rule,
)
from eddyshed.reduce.splitting import ornstein_uhlenbeck_step
from eddyshed.solver.errors import DataError
from eddyshed.solver.randomness import stream


def streams(entropy, members):
    """One random stream for each member."""
    return [stream(entropy, member, "test") for member in range(members)]


NOBODY = streams(0, 1)


@pytest.fixture
def rng():
    return np.random.Generator(np.random.PCG64(53))


def ode(forcing, linear, quadratic):
    """A model without noise."""
    return ReducedModel(
        name="ode", x_forcing=forcing, x_from_x=linear, x_from_xx=quadratic
    )


def lorenz_1960():
    """The maximum simplification with k = 2, l = 1 for (A, F, G)."""
    tensor = np.zeros((3, 3, 3))
    for i, j, k, value in ((0, 1, 2, -1 / 10), (1, 0, 2, 8 / 5), (2, 0, 1, -3 / 4)):
        tensor[i, j, k] = tensor[i, k, j] = value / 2
    return ode(np.zeros(3), np.zeros((3, 3)), tensor)


def lorenz_1960_solution(t):
    """Exact solution from (A, F, G) = (1, 0.5, 0).

    E. N. Lorenz (1960), Tellus 12, 243, solves the three equations by
    elliptic functions. From A' = -F G / 10, F' = 8 A G / 5, G' = -3 A F / 4
    both A^2 + F^2 / 16 = A1^2 and F^2 + 32 G^2 / 15 = F0^2 are conserved, so
    F = F0 sin p, G = F0 sqrt(15 / 32) cos p with p' = w sqrt(1 - m sin^2 p).
    """
    f0 = 0.5
    a1 = math.sqrt(1 + f0**2 / 16)
    m = f0**2 / (16 * a1**2)
    w = a1 * math.sqrt(6 / 5)
    sn, cn, dn, _ = special.ellipj(w * t + special.ellipk(m), m)
    return np.array([a1 * dn, f0 * sn, f0 * math.sqrt(15 / 32) * cn])


def observed_order(steps, errors):
    return np.polyfit(np.log(steps), np.log(errors), 1)[0]


# --- without noise ----------------------------------------------------------


def test_ode_is_integrated_to_order_four():
    model, start = lorenz_1960(), np.array([[1.0, 0.5, 0.0]])
    steps, errors = [], []
    for n in (20, 40, 80, 160):
        found = simulate(
            model, start, step=5 / n, n_steps=n, every=n, streams=NOBODY
        ).series[0, -1]
        steps.append(5 / n)
        errors.append(np.linalg.norm(found - lorenz_1960_solution(5.0)))
    assert observed_order(steps, errors) == pytest.approx(4, abs=0.1)
    assert errors[-1] < 1e-7


def test_outputs_are_at_their_times():
    found = simulate(
        lorenz_1960(),
        np.array([[1.0, 0.5, 0.0]]),
        step=0.01,
        n_steps=300,
        every=60,
        streams=NOBODY,
        start_time=100.0,
    )
    np.testing.assert_allclose(
        found.times, [100, 100.6, 101.2, 101.8, 102.4, 103], rtol=1e-15
    )
    exact = [lorenz_1960_solution(t) for t in found.times - 100]
    # Error of the method at this step, by the order test above.
    np.testing.assert_allclose(found.series[0], exact, rtol=0, atol=1e-8)
    assert found.lost == ()


def test_splitting_is_of_order_two_without_noise(rng):
    """Against an independent integrator, for a coupled system with C = 0."""
    model = random_model(rng, 7)
    vectors = orthonormal_vectors(rng, model.weights, 7)
    op = galerkin(model, vectors[:, :3], vectors[:, 3:], np.zeros(7))
    rate = 2 * np.eye(4) + 0.5 * rng.standard_normal((4, 4))
    reduced = coloured_model(op, rate=rate, covariance=np.zeros((4, 4)))
    start_x, start_y = 0.3 * rng.standard_normal(3), 0.3 * rng.standard_normal(4)

    def tendency(_, z):
        x, y = z[:3], z[3:]
        dx = op.F1 + op.A11 @ x + np.einsum("ijk,j,k", op.B111, x, x) + op.A12 @ y
        dx = dx + 2 * np.einsum("ijm,j,m", op.B112, x, y)
        dx = dx + np.einsum("imn,m,n", op.B122, y, y)
        dy = op.F2 + op.A21 @ x + np.einsum("mjk,j,k", op.B211, x, x)
        return np.append(dx, dy + 2 * np.einsum("mjn,j,n", op.B212, x, y) - rate @ y)

    exact = integrate.solve_ivp(
        tendency,
        (0, 0.4),
        np.append(start_x, start_y),
        method="DOP853",
        rtol=1e-12,
        atol=1e-13,
    ).y[:3, -1]
    counts = (64, 128, 256, 512)
    errors = [
        np.linalg.norm(
            simulate(
                reduced,
                start_x[np.newaxis],
                start_y=start_y[np.newaxis],
                step=0.4 / n,
                n_steps=n,
                every=n,
                streams=NOBODY,
            ).series[0, -1]
            - exact
        )
        for n in counts
    ]
    steps = 0.4 / np.array(counts)
    assert observed_order(steps, errors) == pytest.approx(2, abs=0.1)


# --- the noise alone --------------------------------------------------------


@pytest.mark.parametrize("step", [1e-3, 0.5, 1.0, 30.0])
def test_noise_step_is_exact_at_any_length(step):
    """A two-dimensional process that is neither diagonal nor reversible.

    The covariance solves Gamma C + C Gamma^T = D, the propagator is the
    matrix exponential, and the increment has the covariance
    int_0^h exp(-Gamma s) D exp(-Gamma^T s) ds (C. W. Gardiner, Handbook of
    Stochastic Methods, 1985, section 4.4), here by quadrature.
    """
    gamma = np.array([[1.0, 2.0], [-0.5, 0.8]])
    root = np.array([[0.7, 0.0], [0.3, 0.4]])
    d = root @ root.T
    c = linalg.solve_continuous_lyapunov(gamma, d)
    propagator, factor = ornstein_uhlenbeck_step(gamma, c, step)
    np.testing.assert_allclose(
        propagator, linalg.expm(-gamma * step), rtol=0, atol=1e-15
    )
    increment, _ = integrate.quad_vec(
        lambda s: linalg.expm(-gamma * s) @ d @ linalg.expm(-gamma.T * s),
        0,
        step,
        epsabs=1e-14,
        points=[0.5, 1, 2, 4, 8] if step > 8 else None,
    )
    np.testing.assert_allclose(factor @ factor.T, increment, rtol=0, atol=1e-13)
    # Whatever the step, the stationary covariance is kept.
    kept = propagator @ c @ propagator.T + factor @ factor.T
    np.testing.assert_allclose(kept, c, rtol=0, atol=1e-15)


def test_noise_step_of_a_rotating_pair():
    """dz = -(g + i w) z dt + noise: decay and rotation, in closed form."""
    g, w, c, h = 0.3, 5.0, 2.0, 0.7
    gamma = np.array([[g, -w], [w, g]])
    propagator, factor = ornstein_uhlenbeck_step(gamma, c * np.eye(2), h)
    turn = np.array([[np.cos(w * h), np.sin(w * h)], [-np.sin(w * h), np.cos(w * h)]])
    # A dozen roundings of numbers of order one, within the exponential.
    tolerance = {"rtol": 0, "atol": 1e-13}
    np.testing.assert_allclose(propagator, np.exp(-g * h) * turn, **tolerance)
    variance = c * (1 - np.exp(-2 * g * h))
    np.testing.assert_allclose(factor @ factor.T, variance * np.eye(2), **tolerance)


def test_separate_groups_stay_separate(rng):
    """Coordinates that nothing connects get zeros, wherever they stand."""
    pairs = [(0, 5), (1, 3), (2,), (4, 6)]
    gamma = np.zeros((7, 7))
    for pair in pairs:
        block = np.ix_(pair, pair)
        gamma[block] = np.eye(len(pair)) + 0.2 * rng.standard_normal(gamma[block].shape)
    propagator, factor = ornstein_uhlenbeck_step(gamma, np.eye(7), 0.4)
    allowed = np.zeros((7, 7), dtype=bool)
    for pair in pairs:
        allowed[np.ix_(pair, pair)] = True
    assert not propagator[~allowed].any()
    assert not factor[~allowed].any()
    np.testing.assert_allclose(propagator, linalg.expm(-0.4 * gamma), atol=1e-15)
    kept = propagator @ propagator.T + factor @ factor.T
    np.testing.assert_allclose(kept, np.eye(7), rtol=0, atol=1e-15)


def test_scheme_draws_the_stationary_noise(rng):
    """Sample covariance of y at the start and after steps, 20000 members."""
    gamma = np.array([[1.0, 2.0, 0.0], [-2.0, 1.0, 0.3], [0.0, 0.0, 0.5]])
    root = rng.standard_normal((3, 3))
    c = linalg.solve_continuous_lyapunov(gamma, root @ root.T)
    model = ReducedModel(
        name="noise",
        x_forcing=[0.0],
        x_from_x=[[0.0]],
        x_from_xx=[[[0.0]]],
        rate=gamma,
        covariance=c,
    )
    members = 20000
    scheme = make_scheme(model, 0.8)
    state = scheme.begin(
        np.zeros((1, members)), None, rng.standard_normal((6, members))
    )
    increments = scheme.colour(rng.standard_normal((3, 3, members)))
    before = state[1:].copy()
    for step in range(3):
        scheme.advance(state, increments[:, step], 0.0)
    for y in (before, state[1:]):
        # Standard error of a sample covariance of normals; with 6 numbers
        # twice, 5 standard errors fail once in 10^5 streams.
        error = np.sqrt((np.outer(np.diag(c), np.diag(c)) + c**2) / members)
        assert np.all(np.abs(y @ y.T / members - c) < 5 * error)
    lagged = state[1:] @ before.T / members
    expected = linalg.expm(-gamma * 2.4) @ c
    error = np.sqrt(np.outer(np.diag(c), np.diag(c)) + expected**2) / members**0.5
    assert np.all(np.abs(lagged - expected) < 5 * error)


def test_noise_that_is_none_is_refused():
    step = 0.1
    with pytest.raises(DataError, match=r"lets its coordinates grow, by 0\.2"):
        ornstein_uhlenbeck_step(np.diag([1.0, -0.2]), np.eye(2), step)
    gamma = np.array([[1.0, 5.0], [0.0, 1.0]])
    with pytest.raises(DataError, match="together ask for noise of a negative"):
        ornstein_uhlenbeck_step(gamma, np.eye(2), step)
    model = ReducedModel(
        name="noise",
        x_forcing=[0.0],
        x_from_x=[[0.0]],
        x_from_xx=[[[0.0]]],
        rate=np.zeros((2, 2)),
        covariance=[[1.0, 2.0], [2.0, 1.0]],
    )
    with pytest.raises(DataError, match="covariance has the negative variance -1"):
        make_scheme(model, step)


# --- noise and coupling: exact statistics -----------------------------------


def triad(eps, b=(1.0, -0.6, -0.4), gamma=(1.0, 2.0), sigma=(1.0, 2**0.5)):
    """One slow mode and two fast ones that act on each other.

    A. J. Majda, I. Timofeyev and E. Vanden-Eijnden (2001), Comm. Pure Appl.
    Math. 54, 891: dx = b1 y1 y2 / eps, dy1 = b2 x y2 / eps - g1 y1 / eps^2
    + s1 dW / eps, dy2 = b3 x y1 / eps - g2 y2 / eps^2 + s2 dW / eps.
    """
    yy, xy = np.zeros((1, 2, 2)), np.zeros((2, 1, 2))
    yy[0, 0, 1] = yy[0, 1, 0] = b[0] / (2 * eps)
    xy[0, 0, 1], xy[1, 0, 0] = b[1] / (2 * eps), b[2] / (2 * eps)
    return ReducedModel(
        name="triad",
        x_forcing=[0.0],
        x_from_x=[[0.0]],
        x_from_xx=[[[0.0]]],
        x_from_yy=yy,
        y_from_xy=xy,
        rate=np.diag(gamma) / eps**2,
        covariance=np.diag(np.square(sigma) / (2 * np.array(gamma))),
    )


@pytest.mark.parametrize(("eps", "step"), [(1.0, 0.25), (0.5, 0.0625)])
def test_triad_at_equal_temperatures_stays_gibbs(eps, step):
    """Both fast modes have variance s^2 / 2 g = 1/2: so has x, for every eps.

    The coupling conserves energy and volume and each fast mode relaxes to the
    same normal law, so the product of three such laws is invariant. Members
    start from it; the time in which x would find another variance is the
    memory of the reduced equation, 6, so that a wrong scheme shows in the
    mean over times from 6 to 24.
    """
    members, model = 4000, triad(eps)
    noise = streams(61, members)
    start = math.sqrt(0.5) * np.array([s.standard_normal(1) for s in noise])
    n_steps = round(24 / step)
    found = simulate(
        model, start, step=step, n_steps=n_steps, every=n_steps // 8, streams=noise
    )
    x = found.series[:, 2:, 0]
    # Members are independent, times are not: errors from the means of members.
    for sample, expected in ((x, 0), (x**2, 1 / 2), (x**4, 3 / 4)):
        of_member = sample.mean(axis=1)
        error = of_member.std() / math.sqrt(members)
        # 4 standard errors: three numbers fail once in 5000 streams.
        assert abs(of_member.mean() - expected) < 4 * error
    assert (x**2).mean(axis=1).std() / math.sqrt(members) < 0.01


@pytest.mark.parametrize(("eps", "expected"), [(1.0, 0.5), (0.5, 0.719101)])
def test_rotating_noise_drives_a_mean(eps, expected):
    """A mean that comes from the rotation of the noise alone.

    dx1 = -x1 + y1 / eps, dx2 = -x2 / 2 + x1 y2 / eps, with the rate
    [[1, 2], [-2, 1]] / eps^2 and unit covariance. Ito's rule for x1 y_j gives
    the stationary v_j = E x1 y_j from (1 + Gamma / eps^2) v = e_1 / eps, and
    the mean of the second equation is E x2 = 2 v_2 / eps.
    """
    gamma = np.array([[1.0, 2.0], [-2.0, 1.0]])
    v = np.linalg.solve(np.eye(2) + gamma / eps**2, [1 / eps, 0])
    exact = 2 * v[1] / eps
    assert exact == pytest.approx(expected, abs=5e-7)
    xy = np.zeros((2, 2, 2))
    xy[1, 0, 1] = 1 / (2 * eps)
    model = ReducedModel(
        name="area",
        x_forcing=np.zeros(2),
        x_from_x=np.diag([-1.0, -0.5]),
        x_from_xx=np.zeros((2, 2, 2)),
        x_from_y=[[1 / eps, 0], [0, 0]],
        x_from_xy=xy,
        rate=gamma / eps**2,
        covariance=np.eye(2),
    )
    members = 2000
    # In closed form (the coupling is linear in x, and y is frozen in it) the
    # composition is 0.16 % low at this step: a tenth of the standard error.
    step = 0.05 * eps**2
    n_steps = round(24 / step)
    found = simulate(
        model,
        np.tile([0.0, exact], (members, 1)),
        step=step,
        n_steps=n_steps,
        every=n_steps // 12,
        streams=streams(62, members),
    )
    # From time 12 on: what the start left decays as exp(-t / 2).
    of_member = found.series[:, 6:, 1].mean(axis=1)
    error = of_member.std() / math.sqrt(members)
    assert error < 0.02
    assert abs(of_member.mean() - exact) < 4 * error


# dx = (-a x + y) dt with red noise y of rate g and variance C: in closed form.
A, G, C = 0.5, 2.0, 1.0


def filtered(step):
    """The scheme for filtered red noise, and the model."""
    model = ReducedModel(
        name="filter",
        x_forcing=np.zeros(1),
        x_from_x=[[-A]],
        x_from_xx=np.zeros((1, 1, 1)),
        x_from_y=[[1.0]],
        rate=[[G]],
        covariance=[[C]],
    )
    return make_scheme(model, step)


def test_splitting_is_of_weak_order_two():
    # The scheme is linear, z' = M z + increment: its stationary covariance solves a
    # discrete Lyapunov equation, without any sampling. The exact variance of x is
    # C / (a (a + g)) (Gardiner, Handbook of Stochastic Methods, 1985, ch. 3).
    exact, errors = C / (A * (A + G)), []
    steps = (0.4, 0.2, 0.1, 0.05)
    for step in steps:
        scheme = filtered(step)
        columns = np.eye(2, 16)
        scheme.advance(columns, np.zeros((1, 16)), 0.0)
        matrix = columns[:, :2]
        noise = np.zeros((2, 2))
        noise[1, 1] = scheme.colour(np.ones((1, 1, 16)))[0, 0, 0] ** 2
        found = linalg.solve_discrete_lyapunov(matrix, noise)
        # The variance of y is exact at any step.
        assert found[1, 1] == pytest.approx(C, rel=1e-12)
        errors.append(abs(found[0, 0] - exact))
    assert observed_order(steps, errors) == pytest.approx(2, abs=0.05)
    # The rule's step, 0.3 / g, costs one percent of the variance.
    assert errors[1] < (0.2 / 0.15) ** 2 * 0.015 * exact


def test_splitting_is_of_strong_order_one():
    # Pathwise: y is exact at the points where the scheme holds it, the middles of
    # steps, but what it does between them is not known: an error of variance h^3 a
    # step. A path at 32 times the finest step stands for the exact one.
    rng = np.random.default_rng(19)
    members, end, fine = 512, 2.0, 2.0**-9
    keep = np.exp(-G * fine)
    y = np.empty((round(end / fine) + 1, members))
    y[0] = rng.standard_normal(members)
    for k in range(1, len(y)):
        kick = rng.standard_normal(members) * np.sqrt(C * (1 - keep**2))
        y[k] = keep * y[k - 1] + kick
    # The filter's integral over the fine path, by trapezia.
    weights = fine * np.exp(-A * (end - fine * np.arange(len(y))))
    weights[[0, -1]] /= 2
    exact = weights @ y
    steps, errors = (0.5, 0.25, 0.125, 0.0625), []
    for step in steps:
        scheme, stride = filtered(step), round(step / fine)
        middles = y[stride // 2 :: stride]
        state = np.vstack([np.zeros(members), middles[0]])
        for k in range(round(end / step)):
            following = middles[min(k + 1, len(middles) - 1)]
            increment = following - np.exp(-G * step) * middles[k]
            scheme.advance(state, increment[np.newaxis], 0.0)
        errors.append(np.sqrt(np.mean((state[0] - exact) ** 2)))
    # Root mean squares of 512 members are known to 3 %, a slope over three halvings
    # to 0.02; four of those, and as much for the smoother end of large steps.
    assert observed_order(steps, errors) == pytest.approx(1, abs=0.15)


# --- members ----------------------------------------------------------------


def projected(rng, keep=1.0, ny=40):
    """A random coupled model, dense or sparse."""
    model = random_model(rng, 3 + ny)
    vectors = np.eye(3 + ny)
    op = galerkin(model, vectors[:, :3], vectors[:, 3:], np.zeros(3 + ny))
    reduced = coloured_model(op, rate=4 * np.eye(ny), covariance=0.01 * np.eye(ny))
    if keep == 1:
        return reduced
    fields = {name: getattr(reduced, name) for name in ReducedModel.__slots__}
    for name in ("x_from_xy", "x_from_yy", "y_from_xy", "y_from_x", "x_from_y"):
        fields[name] = fields[name] * (rng.random(fields[name].shape) < keep)
    return ReducedModel(**fields)


@pytest.mark.parametrize("keep", [1.0, 0.03])
def test_a_member_does_not_depend_on_the_others(keep, rng):
    """The same bits in ensembles of 1, 5 and 40, and in two groups."""
    model = projected(rng, keep)

    def run(members, n_steps=60, every=20):
        return simulate(
            model,
            np.tile([0.1, 0.2, -0.1], (members, 1)),
            step=0.01,
            n_steps=n_steps,
            every=every,
            streams=streams(63, members),
        ).series

    many = run(40)
    assert np.unique(many[:, -1, 0]).size == 40
    for members in (1, 5):
        assert np.array_equal(run(members), many[:members])
    assert np.array_equal(run(40, every=10)[:, ::2], many)
    assert np.array_equal(run(40, n_steps=20), many[:, :2])


def test_large_ensembles_are_stepped_in_groups():
    """More members than one group holds: each still has its own path."""
    model = triad(1.0)
    members = 1500

    def run(members):
        return simulate(
            model,
            np.ones((members, 1)),
            step=0.1,
            n_steps=10,
            every=5,
            streams=streams(64, members),
        )

    many = run(members)
    assert np.array_equal(run(3).series, many.series[:3])
    assert np.unique(many.series[:, -1, 0]).size == members


def test_noise_at_the_start_can_be_given():
    """Without noise of its own y decays as exp(-t), and x gathers it up."""
    model = ReducedModel(
        name="decay",
        x_forcing=[0.0],
        x_from_x=[[0.0]],
        x_from_xx=[[[0.0]]],
        x_from_y=[[1.0]],
        rate=[[1.0]],
        covariance=[[0.0]],
    )
    found = simulate(
        model,
        np.zeros((2, 1)),
        start_y=[[1.0], [-3.0]],
        step=1e-3,
        n_steps=1000,
        every=1000,
        streams=streams(65, 2),
    )
    gathered = 1 - math.exp(-1)
    # The composition is off by step^2 / 24 of it.
    np.testing.assert_allclose(
        found.series[:, 1, 0], [gathered, -3 * gathered], rtol=1e-7
    )


# --- members that are lost --------------------------------------------------


def test_lost_members_are_recorded_and_the_rest_go_on():
    """dx/dt = x^2 from x0 is x0 / (1 - x0 t): gone at t = 1 / x0."""
    model = ode([0.0], [[0.0]], [[[1.0]]])
    start = np.array([[-1.0], [1.0], [-2.0], [2.0]])
    found = simulate(
        model,
        start,
        step=1e-3,
        n_steps=2000,
        every=100,
        bound=50.0,
        start_time=10.0,
        streams=streams(66, 4),
    )
    assert [member for member, _ in found.lost] == [1, 3]
    for member, time in found.lost:
        x0 = start[member, 0]
        crossing = 10 + 1 / x0 - 1 / 50
        # Found at the first step beyond it.
        assert crossing < time < crossing + 1.001e-3
        before = found.times < time
        np.testing.assert_allclose(
            found.series[member, before, 0],
            x0 / (1 - x0 * (found.times[before] - 10)),
            rtol=1e-6,
        )
        assert np.all(np.isnan(found.series[member, ~before]))
    for member in (0, 2):
        x0 = start[member, 0]
        exact = x0 / (1 - x0 * (found.times - 10))
        np.testing.assert_allclose(found.series[member, :, 0], exact, rtol=1e-9)


def test_members_beyond_the_finite_numbers_are_lost_without_a_bound():
    model = ode([0.0], [[0.0]], [[[1.0]]])
    found = simulate(
        model,
        np.array([[1.0], [-1.0]]),
        step=0.01,
        n_steps=200,
        every=200,
        streams=streams(67, 2),
    )
    ((member, time),) = found.lost
    assert member == 0
    # The method steps over the pole and then explodes within a few steps.
    assert 1 < time < 1.2
    assert np.isnan(found.series[0, 1, 0])
    assert found.series[1, 1, 0] == pytest.approx(-1 / 3, rel=1e-6)


def test_a_lost_member_changes_no_other(rng):
    """The same bits whether a neighbour explodes or not."""
    model = projected(rng)
    start = np.zeros((3, 3))
    wild = start.copy()
    wild[1] = 1e4
    runs = [
        simulate(
            model,
            first,
            step=0.01,
            n_steps=50,
            every=10,
            bound=2e4,
            streams=streams(68, 3),
        )
        for first in (start, wild)
    ]
    assert runs[0].lost == ()
    assert [member for member, _ in runs[1].lost] == [1]
    for member in (0, 2):
        assert np.array_equal(runs[0].series[member], runs[1].series[member])


# --- steps ------------------------------------------------------------------


def test_step_rule_by_hand():
    """A limit set by each of the three operators and by the noise in turn."""

    def limit(**fields):
        zeros = {"x_from_x": np.zeros((2, 2)), "x_from_xx": np.zeros((2, 2, 2))}
        model = ReducedModel(name="rule", x_forcing=np.zeros(2), **{**zeros, **fields})
        step, every = step_rule(model, np.array([2.0, 1.0]), interval=10.0)
        assert step * every == pytest.approx(10.0, rel=1e-15)
        return every

    noise = {"rate": np.array([[3.0, -4.0], [4.0, 3.0]]), "covariance": np.eye(2)}
    assert limit(**noise) == math.ceil(10 * 5 / 0.3)  # |3 + 4 i|
    assert limit(x_from_x=np.diag([-7.0, 1.0])) == math.ceil(10 * 7 / 0.2)
    # 2 B(x, .) with x = (2, 1): amplitudes 2 * 2 * 3 and 2 * 1 * 5, in squares.
    squares = np.zeros((2, 2, 2))
    squares[:, 0], squares[:, 1] = 3 * np.eye(2), 5 * np.eye(2)
    expected = math.ceil(10 * math.hypot(12, 10) / 0.2)
    assert limit(x_from_xx=squares) == expected
    slow = {"rate": 1e-3 * np.eye(2), "covariance": np.eye(2)}
    assert limit(y_from_xy=squares, **slow) == expected
    assert limit() == 1


def test_step_rule_takes_a_step_that_just_fits():
    model = ode([0.0], [[-2.0]], [[[0.0]]])
    assert step_rule(model, np.ones(1), interval=0.3) == (pytest.approx(0.1), 3)


# --- bad input --------------------------------------------------------------


@pytest.mark.parametrize(
    ("changes", "complaint"),
    [
        ({"start": np.zeros((2, 2))}, r"start has shape \(2, 2\), must be \(member, 1"),
        ({"start": np.zeros(1)}, r"start has shape \(1,\)"),
        ({"start": np.zeros((3, 1))}, "3 members with 2 streams"),
        (
            {"start_y": np.zeros((2, 3))},
            r"start_y has shape \(2, 3\), must be \(2, 2\)",
        ),
        ({"start": np.array([[0.0], [np.nan]])}, "member 1 starts with norm nan"),
        ({"bound": 0.5, "start": np.ones((2, 1))}, "at most 0.5"),
        ({"step": 0.0}, "step = 0.0 must be positive"),
        ({"every": 3}, "n_steps = 10 must be a multiple of every = 3"),
        ({"step": -1.0, "every": 3}, "step = -1.0 must be positive; n_steps"),
    ],
)
def test_bad_arguments_are_refused(changes, complaint):
    arguments = {
        "start": np.zeros((2, 1)),
        "step": 0.1,
        "n_steps": 10,
        "every": 5,
        "streams": streams(69, 2),
    }
    arguments |= changes
    with pytest.raises(DataError, match=complaint):
        simulate(triad(1.0), arguments.pop("start"), **arguments)


def test_unknown_kinds_of_model_are_refused():
    with pytest.raises(DataError, match="no scheme is known for a dict"):
        make_scheme({}, 0.1)


def test_progress_counts_member_steps():
    calls = []
    simulate(
        triad(1.0),
        np.zeros((3, 1)),
        step=0.1,
        n_steps=200,
        every=100,
        streams=streams(70, 3),
        progress=lambda done, total: calls.append((done, total)),
    )
    assert calls == [(192, 600), (384, 600), (576, 600), (600, 600)]
