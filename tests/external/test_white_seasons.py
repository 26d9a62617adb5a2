"""The white-noise limit under forcing that varies in time, where it is known."""

from dataclasses import replace

import numpy as np
import pytest
from slow_fast import faster, random_slow_fast

from eddyshed.reduce.diffusion_schemes import ItoScheme, StratonovichScheme
from eddyshed.reduce.homogenised import white_limit
from eddyshed.reduce.reduced import ReducedModel
from eddyshed.reduce.simulation import simulate
from eddyshed.reduce.variation import Variation
from eddyshed.solver.randomness import stream

PERIOD, AMPLITUDE, PHASE = 4.0, 0.9, 0.4
W = 2 * np.pi / PERIOD
PHASOR = AMPLITUDE * np.exp(1j * PHASE)


def season(resolved, unresolved):
    function = {
        "kind": "seasonal", "period": PERIOD, "amplitude": AMPLITUDE, "phase": PHASE,
    }  # fmt: skip
    return Variation(
        functions=(function,),
        means=np.ones(1),
        resolved=np.atleast_2d(resolved),
        unresolved=np.atleast_2d(unresolved),
    )


def faster_under_forcing(model, eps):
    """As `faster`; the forcing of y is scaled as its mean is."""
    v = model.variation
    return replace(faster(model, eps), variation=season(v.resolved, v.unresolved / eps))


def streams(members, entropy=1):
    return [stream(entropy, member, "test") for member in range(members)]


def linear_model(a, g, p, q, covariance):
    return ReducedModel(
        name="linear",
        x_forcing=np.zeros(1),
        x_from_x=[[-a]],
        x_from_xx=np.zeros((1, 1, 1)),
        x_from_y=[[1.0]],
        rate=[[g]],
        covariance=[[covariance]],
        variation=season([p], [q]),
    )


@pytest.mark.parametrize("scheme", [ItoScheme, StratonovichScheme])
def test_a_linear_system_answers_as_in_the_limit(scheme):
    # dx = -a x + s p + y / eps, dy = s q / eps - g y / eps^2: a sinusoidal s of
    # frequency w is answered by (p + q / (g + i w eps^2)) / (a + i w), by hand; in
    # the limit by (p + q / g) / (a + i w).
    a, g, p, q = 0.5, 1.3, 0.3, -0.8
    model = white_limit(linear_model(a, g, p, q, 0.0)).equation()
    answer = PHASOR * (p + q / g) / (a + 1j * W)
    begin, errors = 1.7, []
    for step in (0.1, 0.05):
        run = simulate(
            model,
            [[(answer * np.exp(1j * W * begin)).real]],
            step=step,
            n_steps=round(8 / step),
            every=round(0.5 / step),
            streams=streams(1),
            start_time=begin,
            scheme=scheme,
        )
        exact = (answer * np.exp(1j * W * run.times)).real
        errors.append(np.abs(run.series[0, :, 0] - exact).max())
    # The trapezoidal rule's error is (w h)^2 / 12 of the forcing's part; that of
    # Heun's method for the rest is a few times that.
    assert errors[0] < 4 * (W * 0.1) ** 2 / 12 * abs(answer)
    assert np.log2(errors[0] / errors[1]) == pytest.approx(2, abs=0.15)


@pytest.mark.parametrize("has_feedback", [True, False])
def test_faster_systems_tend_to_the_limit(has_feedback):
    # Random systems with every term but the noise: the limit is then that of a slow
    # manifold, y = eps Gamma^-1 (g + F2') + ..., with a first correction of order eps
    # by K and M (G. A. Pavliotis & A. M. Stuart, Multiscale Methods, 2008, ch. 15).
    rng = np.random.default_rng(31)
    model = random_slow_fast(rng, 3, 4)
    none = np.zeros((4, 4))
    model = replace(
        model,
        covariance=none,
        x_from_y=model.x_from_y / 2,
        variation=season(rng.standard_normal(3), rng.standard_normal(4)),
    )
    if not has_feedback:
        model = replace(
            model, y_forcing=None, y_from_x=None, y_from_xx=None, y_from_xy=None
        )
    start = np.array([[0.4, -0.3, 0.2]])
    limit = white_limit(model).equation()
    assert np.abs(limit.modulation).max() > 0.05
    step, n_steps = 0.005, 200
    clock = {"start_time": 0.9, "streams": streams(1)}
    white = simulate(limit, start, step=step, n_steps=n_steps, every=100, **clock)
    errors = []
    for eps in (0.2, 0.1, 0.05):
        fine = 0.2 * eps**2
        whole = round(0.5 / fine)
        run = simulate(
            faster_under_forcing(model, eps),
            start,
            start_y=np.zeros((1, 4)),
            step=0.5 / whole,
            n_steps=2 * whole,
            every=whole,
            **clock,
        )
        errors.append(np.abs(run.series - white.series).max())
    orders = np.log2(np.divide(errors[:-1], errors[1:]))
    # First order, as far as that can be seen at these eps; what the forcing does is
    # well above what is left.
    assert np.all(orders > 0.85), errors
    steady = simulate(
        replace(limit, variation=None, modulation=None),
        start, step=step, n_steps=n_steps, every=100, **clock,
    )  # fmt: skip
    assert np.abs(steady.series - white.series).max() > 3 * errors[-1]


def test_growth_by_forced_noise_is_exact():
    # dx = x y / eps, dy = s q / eps - g y / eps^2 + noise. x is the exponential of a
    # normal variable, so with S the integral of s the mean of the limit is
    # x0 exp(q S / g + C t / g), by hand (the noise's spectrum is 2 C / g).
    g, q, c, t = 2.0, 0.7, 0.15, 1.5
    model = ReducedModel(
        name="growth",
        x_forcing=np.zeros(1),
        x_from_x=np.zeros((1, 1)),
        x_from_xx=np.zeros((1, 1, 1)),
        x_from_xy=[[[0.5]]],
        rate=[[g]],
        covariance=[[c]],
        variation=season([0.0], [q]),
    )
    begin, members = 0.6, 4096
    ends = np.sin(W * (begin + np.array([0.0, t])) + PHASE)
    integral = AMPLITUDE * (ends[1] - ends[0]) / W
    exact = np.exp(q * integral / g + c * t / g)
    run = simulate(
        white_limit(model).equation(),
        np.ones((members, 1)),
        step=0.01,
        n_steps=150,
        every=150,
        streams=streams(members, 32),
        start_time=begin,
    )
    x = run.series[:, -1, 0]
    error = x.std(ddof=1) / np.sqrt(members)
    # Weak order one: half of (C / g)^2 h t, a thousandth, is below the error.
    assert abs(x.mean() - exact) < 4 * error
    # Without the forcing of y it would be elsewhere.
    assert abs(np.exp(c * t / g) - exact) > 20 * error


def test_coloured_noise_tends_to_white_under_a_season():
    # A linear system with noise: the mean answers as by hand above, at every eps,
    # and the white one as the limit; both within their errors.
    a, g, p, q, c = 0.5, 1.3, 0.3, -0.8, 0.1
    model = linear_model(a, g, p, q, c)
    members, begin, t = 4096, 0.6, 3.0
    start = np.zeros((members, 1))

    def answer(eps):
        """Mean at the end, from rest and y at rest: a two-by-two linear equation."""
        z = 1j * W
        to_y = q / (g + z * eps**2)  # y / eps
        x = PHASOR * (p + to_y) / (a + z)
        y = PHASOR * to_y
        at = np.exp(z * begin)
        x0, y0 = -(x * at).real, -(y * at).real
        fast = g / eps**2 if eps else np.inf
        free = x0 * np.exp(-a * t)
        if eps:
            free += y0 * (np.exp(-a * t) - np.exp(-fast * t)) / (fast - a)
        return (x * np.exp(z * (begin + t))).real + free

    means = {}
    for eps in (0.8, 0.4, 0.0):
        step = 0.03 if eps == 0 else 0.06 * eps**2
        n_steps = round(t / step)
        run = simulate(
            faster_under_forcing(model, eps) if eps else white_limit(model).equation(),
            start,
            step=t / n_steps,
            n_steps=n_steps,
            every=n_steps,
            streams=streams(members, 33),
            start_time=begin,
        )
        x = run.series[:, -1, 0]
        error = x.std(ddof=1) / np.sqrt(members)
        assert abs(x.mean() - answer(eps)) < 4 * error, eps
        means[eps] = x.mean(), error
    gaps = [abs(answer(eps) - answer(0.0)) for eps in (0.8, 0.4, 0.2)]
    # By order eps^2, as it is from the next term on.
    assert gaps[0] > 2.5 * gaps[1] > 8 * gaps[2]
    # Far from the limit the runs tell the two apart.
    assert gaps[0] > 4 * np.hypot(means[0.8][1], means[0.0][1])
