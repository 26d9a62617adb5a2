"""Forcing that varies in time: exact responses, and the clock of reduced runs."""

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from splits import divided
from toys import Quadratic, orthonormal_vectors, random_model

from eddyshed.reduce.closures import closure
from eddyshed.reduce.closures.data import ClosureData
from eddyshed.reduce.contract import check_model, tendency
from eddyshed.reduce.coupling import coupling, covariance
from eddyshed.reduce.noise.fit import fit_ornstein_uhlenbeck
from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.reduce.operators import galerkin
from eddyshed.reduce.reduced import ReducedModel
from eddyshed.reduce.simulation import simulate, step_rule
from eddyshed.reduce.store import read_one, write_all
from eddyshed.reduce.variation import Variation
from eddyshed.solver.errors import ContractError, DataError
from eddyshed.solver.randomness import stream
from eddyshed.solver.time_functions import Ramp, Seasonal, Step

PERIOD = 5.0
SEASON = Seasonal(period=PERIOD, amplitude=0.8, phase=0.3)


class Driven(Quadratic):
    """A model under a season in one direction and a second in another."""

    def patterns(self):
        first, second = np.zeros(self.size), np.zeros(self.size)
        first[0], second[-1] = 1.0, -0.7
        return first, second

    @property
    def variations(self):
        first, second = self.patterns()
        return (SEASON, first), (Seasonal(period=2 * PERIOD, amplitude=0.5), second)

    def forcing(self, t):
        return self.constant + sum(f.factor(t) * p for f, p in self.variations)


def season(resolved, unresolved=None, function=SEASON):
    resolved = np.atleast_2d(resolved)
    unresolved = np.zeros((1, 0)) if unresolved is None else np.atleast_2d(unresolved)
    fields = {
        name: getattr(function, name) for name in ("period", "amplitude", "phase")
    }
    return Variation(
        functions=({"kind": "seasonal", **fields},),
        means=np.ones(1),
        resolved=resolved,
        unresolved=unresolved,
    )


def silent_streams(count=1):
    return [stream(1, k, "test") for k in range(count)]


def test_a_linear_model_answers_a_season_exactly():
    # dx/dt = -a x + y + s(t) p, dy/dt = -g y + s(t) q without noise, s the departure
    # of the season: the periodic solution is the real part of the complex one.
    a, g, p, q = 0.3, 1.2, 0.7, -0.4
    model = ReducedModel(
        name="linear",
        x_forcing=np.zeros(1),
        x_from_x=[[-a]],
        x_from_xx=np.zeros((1, 1, 1)),
        x_from_y=[[1.0]],
        rate=[[g]],
        covariance=[[0.0]],
        variation=season([p], [q]),
    )
    w = 2 * np.pi / PERIOD
    phasor = SEASON.amplitude * np.exp(1j * SEASON.phase)
    y = phasor * q / (g + 1j * w)
    x = (phasor * p + y) / (a + 1j * w)
    begin, errors = 2.0, []
    for step in (0.1, 0.05):
        run = simulate(
            model,
            [[(x * np.exp(1j * w * begin)).real]],
            start_y=[[(y * np.exp(1j * w * begin)).real]],
            step=step,
            n_steps=round(20 / step),
            every=round(0.5 / step),
            streams=silent_streams(),
            start_time=begin,
        )
        exact = (x * np.exp(1j * w * run.times)).real
        errors.append(np.abs(run.series[0, :, 0] - exact).max())
    # Splitting is of second order; its error is some (w h)^2 / 12 of x.
    assert errors[0] < (w * 0.1) ** 2 / 12 * abs(x)
    assert np.log2(errors[0] / errors[1]) == pytest.approx(2, abs=0.1)


def test_without_unresolved_modes_the_reduced_equation_is_the_model():
    rng = np.random.default_rng(3)
    model = Driven(**vars(random_model(rng, 4)))
    check_model(model)
    vectors = orthonormal_vectors(rng, model.weights, 4)
    begin = 7.3
    found = solve_ivp(
        lambda t, z: tendency(model, t, z),
        (begin, begin + 300.0),
        rng.standard_normal(4),
        t_eval=begin + np.arange(0, 300.0, 0.5),
        rtol=1e-10,
        atol=1e-10,
    )
    data, _ = data_of(model, found.y.T, vectors, 4, start=begin)
    # Nothing is left of the tendency, at any phase of the seasons.
    left = coupling(data.split, data.operators)
    assert np.abs(left).max() < 1e-11 * np.abs(data.split.tendency).max()
    reduced = closure("bare_mean")(data)
    run = simulate(
        reduced,
        data.split.x[0, :1],
        step=0.01,
        n_steps=1000,
        every=50,
        streams=silent_streams(),
        start_time=data.split.start,
    )
    # Two solvers with errors below a millionth over ten units of time.
    np.testing.assert_allclose(run.series[0], data.split.x[0, :21], atol=1e-5)
    # On another clock it goes another way.
    shifted = simulate(
        reduced,
        data.split.x[0, :1],
        step=0.01,
        n_steps=1000,
        every=50,
        streams=silent_streams(),
        start_time=data.split.start + PERIOD / 2,
    )
    assert np.abs(shifted.series - run.series).max() > 0.1


def data_of(model, states, vectors, nx, *, start=0.0, step=0.5):
    split, y = divided(model, states, vectors, nx, step=step)
    times = start + step * np.arange(len(states))
    rate = np.array(
        [tendency(model, *both) for both in zip(times, states, strict=True)]
    )
    fields = {name: getattr(split, name) for name in split.__slots__}
    fields["tendency"] = (rate @ model.weights @ vectors[:, :nx])[np.newaxis]
    split = type(split)(**{**fields, "start": start})
    operators = galerkin(
        model, vectors[:, :nx], vectors[:, nx:], split.mean, times=split.times
    )
    forced = np.zeros(y.shape[1:])
    if y.shape[2]:
        forced = operators.variation.cycle(y, split.times)
    return ClosureData(
        model=model,
        split=split,
        operators=operators,
        noise=fit_ornstein_uhlenbeck(y - forced, step, window=4.0),
        covariance_y=covariance(y, y),
        covariance_xy=covariance(split.x, y),
        mean_calibration=True,
        forced_covariance=covariance(forced[np.newaxis], forced[np.newaxis]),
    ), y


def test_every_closure_takes_its_parts_of_the_forcing(tmp_path):
    rng = np.random.default_rng(4)
    model = Driven(**vars(random_model(rng, 6)))
    vectors = orthonormal_vectors(rng, model.weights, 6)
    red = OrnsteinUhlenbeck(rate=np.eye(6), covariance=np.eye(6))
    states = red.simulate(4000, 0.5, rng)[0]
    data, _ = data_of(model, states, vectors, 2, start=11.0)
    patterns = np.array(model.patterns())
    for name in ("bare", "bare_mean", "damped", "residual", "coloured"):
        made = closure(name)(data)
        variation = made.variation
        np.testing.assert_allclose(
            variation.resolved, patterns @ vectors[:, :2], atol=1e-14
        )
        expected = np.zeros((2, made.ny))
        if name == "coloured":
            expected = patterns @ vectors[:, 2:]
        np.testing.assert_allclose(variation.unresolved, expected, atol=1e-14)
        # A file gives it back.
        path = tmp_path / f"{name}.h5"
        write_all(path, "stamp", "title", "closures", {"model": made})
        again = read_one(path, "closures", "model", ReducedModel)
        assert again.variation.functions == variation.functions
        np.testing.assert_array_equal(
            again.variation.driver()(3.1), variation.driver()(3.1)
        )


def test_the_constant_knows_of_the_forced_part_of_y():
    # Over the truth the mean drift of the coloured closure vanishes with the
    # covariance of the noise and that of what follows the clock together.
    rng = np.random.default_rng(14)
    model = Driven(**vars(random_model(rng, 6)))
    vectors = orthonormal_vectors(rng, model.weights, 6)
    red = OrnsteinUhlenbeck(rate=np.eye(6), covariance=np.eye(6))
    states = red.simulate(4000, 0.5, rng)[0]
    states += np.cos(2 * np.pi / PERIOD * 0.5 * np.arange(4000))[:, np.newaxis]
    data, _ = data_of(model, states, vectors, 2)
    made = closure("coloured")(data)
    both = made.covariance + data.forced_covariance
    # A cosine of amplitude one in six directions, projected on four.
    assert np.trace(data.forced_covariance) > 0.5
    drift = (
        made.x_forcing
        + np.einsum("ijk,jk->i", made.x_from_xx, data.covariance_x)
        + 2 * np.einsum("ijm,jm->i", made.x_from_xy, data.covariance_xy)
        + np.einsum("imn,mn->i", made.x_from_yy, both)
    )
    # Round-off of sums of a hundred products of order ten.
    np.testing.assert_allclose(drift, 0, atol=1e-11)


def test_the_cycle_is_no_noise():
    # y is red noise with a season of twice its variance on it; the fit must see
    # the noise alone, and the driven noise must have the season again.
    g, step, n = 1.0, 0.25, 40_000
    rng = np.random.default_rng(8)
    times = 3.0 + step * np.arange(n)
    variation = season(np.zeros(1), [1.0])
    keep = np.exp(-g * step)
    noise = np.empty(n)
    noise[0] = rng.standard_normal()
    for k, kick in enumerate(rng.standard_normal(n - 1) * np.sqrt(1 - keep**2)):
        noise[k + 1] = keep * noise[k] + kick
    w = 2 * np.pi / PERIOD
    wave = 2 * np.cos(w * times + 1.0) + 0.3 * np.sin(2 * w * times)
    series = (noise + wave)[np.newaxis, :, np.newaxis]
    series -= series.mean()
    cycle = variation.cycle(series, times)
    # Amplitudes of four waves, each known to sqrt(2 * 2 / (n g h)) of the noise,
    # spectrum at zero frequency; four errors of their sum.
    error = np.sqrt(4 * 4 / (n * g * step))
    assert np.abs(cycle[:, 0] - (wave - wave.mean())).max() < 4 * error


def test_phases_that_are_alike():
    times = 2.0 + 0.7 * np.arange(400)
    variation = season(np.zeros(1))
    alike = variation.alike(times)
    assert alike[0] == 0
    away = np.mod(times[alike] - times[0] + PERIOD / 2, PERIOD) - PERIOD / 2
    # A sixteenth of a period, less than half an interval here.
    assert np.abs(away).max() <= PERIOD / 16
    assert len(alike) > 400 / 8 * 0.8


def test_a_jump_between_two_steps_is_met_exactly():
    # dx/dt = s(t) with s from 0 to 1 at t = 1: x is the time since then.
    jump = Variation(
        functions=({"kind": "step", "at": 1.0, "before": 0.0, "after": 1.0},),
        means=np.zeros(1),
        resolved=np.ones((1, 1)),
        unresolved=np.zeros((1, 0)),
    )
    assert jump.is_transient
    model = ReducedModel(
        name="jump",
        x_forcing=np.zeros(1),
        x_from_x=np.zeros((1, 1)),
        x_from_xx=np.zeros((1, 1, 1)),
        variation=jump,
    )
    run = simulate(
        model, [[0.0]], step=0.25, n_steps=12, every=1, streams=silent_streams()
    )
    # Round-off of a dozen sums.
    expected = np.maximum(run.times - 1.0, 0.0)
    np.testing.assert_allclose(run.series[0, :, 0], expected, atol=1e-14)


def test_steps_resolve_the_season():
    model = ReducedModel(
        name="still",
        x_forcing=np.zeros(1),
        x_from_x=np.zeros((1, 1)),
        x_from_xx=np.zeros((1, 1, 1)),
        variation=season([1.0]),
    )
    step, _ = step_rule(model, np.ones(1), interval=1.0)
    assert step <= 0.2 * PERIOD / (2 * np.pi)


def test_variations_that_do_not_fit_are_refused():
    rng = np.random.default_rng(5)
    with pytest.raises(DataError, match="variation for 2 and 0 coordinates, must be"):
        ReducedModel(
            name="short",
            x_forcing=np.zeros(1),
            x_from_x=np.zeros((1, 1)),
            x_from_xx=np.zeros((1, 1, 1)),
            variation=season(np.ones(2)),
        )

    class Wrong(Quadratic):
        variations = ((Ramp(start=0.0, end=1.0), np.ones(2)),)

    model = Wrong(**vars(random_model(rng, 3)))
    with pytest.raises(ContractError, match=r"must be a pair .* of shape \(3,\)"):
        galerkin(model, np.eye(3)[:, :1], np.eye(3)[:, 1:], np.zeros(3))
    assert Step(at=1.0).factor(1.0) == 1.0
