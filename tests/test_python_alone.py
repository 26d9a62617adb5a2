"""A stranger's model, basis and closure through Python alone, by public names."""

import numpy as np
import pytest

from eddyshed import reduce
from eddyshed.solver import EddyshedError, stream


class Convection:
    """E. N. Lorenz (1963), J. Atmos. Sci. 20, 130, eq. 25 to 27."""

    size, energy_conserving = 3, True

    def forcing(self, t):
        return np.zeros(3)

    def linear(self, z):
        return z @ np.array([[-10, 28, 0], [10, -1, 0], [0, 0, -8 / 3]])

    def bilinear(self, u, w):
        made = np.zeros(np.broadcast_shapes(u.shape, w.shape))
        made[..., 1] = -(u[..., 0] * w[..., 2] + w[..., 0] * u[..., 2]) / 2
        made[..., 2] = (u[..., 0] * w[..., 1] + w[..., 0] * u[..., 1]) / 2
        return made

    def inner(self, u, w):
        return np.sum(u * w, axis=-1)


def truth(model, members=8, records=1500, step=0.02, inner=4):
    """States by the classical Runge-Kutta method, after a spin-up."""
    z = np.random.default_rng(1).standard_normal((members, 3))
    z[:, 2] += 25
    h, states = step / inner, np.empty((members, records, 3))

    def rate(z):
        return model.linear(z) + model.bilinear(z, z)

    for k in range(-500, records):
        for _ in range(inner):
            a = rate(z)
            b = rate(z + h / 2 * a)
            c = rate(z + h / 2 * b)
            z = z + h / 6 * (a + 2 * b + 2 * c + rate(z + h * c))
        if k >= 0:
            states[:, k] = z
    return states


def wind_down(data):
    """A closure of the stranger's own: damping and additive white noise."""
    variance = data.split.x.var()
    noise = np.zeros((2, 1, 2, 1))
    noise[0, 0, 0, 0] = 2 * variance
    drift = reduce.Polynomial(constant=[0.0], linear=[[-1.0]])
    return reduce.DiffusionModel(name="wind_down", drift=drift, noise=noise)


@pytest.fixture(scope="module")
def data():
    model = Convection()
    reduce.check_model(model)
    direction = np.array([[np.cos(0.7)], [np.sin(0.7)], [0.0]])
    return reduce.closure_data(model, truth(model), 0.02, direction, window=1.0)


def test_the_division_is_that_of_the_equation(data):
    # d/dt of c X + s Y along itself: c s (10 + 28 - Zbar) - 10 c^2 - s^2.
    c, s = np.cos(0.7), np.sin(0.7)
    mean = data.split.mean
    expected = c * s * (38 - mean[2]) - 10 * c**2 - s**2
    np.testing.assert_allclose(data.operators.A11, [[expected]], rtol=1e-12)
    assert 20 < mean[2] < 27  # below its value at rest, heating - 1
    y = data.split.unresolved
    np.testing.assert_allclose(y.vectors.T @ y.vectors, np.eye(2), atol=1e-12)
    assert y.variance[0] > y.variance[1]
    assert sum(data.split.shares) == pytest.approx(1)


def test_a_closure_of_ones_own_is_run_and_scored(data):
    x, step = data.split.x, data.split.step
    model = wind_down(data)
    short, every = reduce.step_rule(model, x.std(axis=(0, 1)), interval=step)
    run = reduce.simulate(
        model,
        x[:, 0],
        step=short,
        n_steps=1500 * every,
        every=every,
        streams=[stream(1, k, "noise") for k in range(len(x))],
    )
    series = run.series[:, 250:]  # five memories
    rng = np.random.default_rng(2)
    of_truth, of_run = (reduce.summarise(s, step, rng) for s in (x, series))
    # A variance of that of the truth, by construction: within four errors of a
    # process of memory one in 8 members of 25: sqrt(2 / 200) (Bartlett 1946).
    assert of_run.variance.value[0] == pytest.approx(x.var(), rel=4 * np.sqrt(2 / 200))
    settings = reduce.BenchmarkSettings()
    scores = reduce.score(settings, x, step, of_truth, series, step, of_run, rng)
    assert reduce.judge(scores, data.split.resolved.labels).reason


@pytest.mark.parametrize("name", ["bare_mean", "residual", "coloured", "white"])
def test_the_closures_of_the_house_are_made(name, data):
    model = reduce.closure(name)(data)
    assert model.nx == 1
    assert model.name == name


def test_what_does_not_fit_is_refused():
    model, states = Convection(), np.zeros((1, 9, 3))
    for shape, resolved, words in (
        ((9, 3), np.eye(3)[:, :1], "must be .member, time, 3."),
        ((1, 9, 3), np.eye(3), "n from 1 to 2"),
        ((1, 9, 3), np.ones((3, 1)), "off from orthonormal by 2"),
    ):
        with pytest.raises(EddyshedError, match=words):
            reduce.closure_data(model, states.reshape(shape), 1.0, resolved)
