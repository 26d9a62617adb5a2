"""Gusts and stirring on the real ocean, against closed forms and energy balances."""

from dataclasses import dataclass

import numpy as np
import pytest
from scipy.sparse.linalg import eigs
from scipy.special import gamma
from scipy.stats import norm

from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.integrate import integrate
from eddyshed.solver.settings import TruthConfig
from eddyshed.solver.stepping import IntegratingFactorRK4
from eddyshed.solver.stirring import Stirring, StirringNoise
from eddyshed.solver.truth import random_forcing_of

DAY = 86400.0
CONFIG = """
name = "gusty"
[grid]
points = [16, 16]
lengths = ["1000 km", "1000 km"]
[ocean]
kind = "barotropic"
drag = "0.05 1/d"
{forcing}
[time]
step = "{step}"
spin_up = "0 d"
duration = "64 d"
[output]
state_every = "1 d"
"""
GUSTY_WIND = """
[forcing.wind]
kind = "wave"
amplitude = "5e-12 s-2"
waves = [0, 2]
[forcing.wind.time]
kind = "gusts"
decorrelation = "4 d"
deviation = 1.5
"""
STIRRING = """
[stirring]
energy_rate = "1e-9 m2/s3"
band = [2, 4]
"""
GUST_BAND = """
[forcing.storms]
kind = "gusts"
acceleration = "1e-7 m/s2"
band = [2, 4]
decorrelation = "2 d"
"""


def config_of(forcing, step="1 d", *overrides):
    text = CONFIG.format(forcing=forcing, step=step)
    return parse_config(text, TruthConfig, "gusty.toml", overrides).config


def run(config, steps, member=0):
    """The states and the energy fed, step by step."""
    ocean = build_ocean(config)
    random = random_forcing_of(config, ocean, member)
    z = np.zeros(ocean.size)
    stepper = IntegratingFactorRK4(ocean, config.time.step)
    advance = integrate(
        stepper,
        z,
        first_step=0,
        last_step=steps,
        energy_bound=1e9,
        push=random.push,
        stir=random.stir,
    )
    for _ in advance:
        yield z.copy(), dict(random.fed)


def test_gusts_are_no_part_of_the_ocean():
    for forcing in (GUSTY_WIND, GUST_BAND, STIRRING):
        ocean = build_ocean(config_of(forcing))
        assert not ocean.forcing(0.0).any()
        assert not ocean.explicit(0.0, np.zeros(ocean.size)).any()


def test_gusts_through_a_damped_mode_are_two_filters_in_a_row():
    # A zonal wave is not advected by itself, so dz/dt = -g z + F y with y an
    # Ornstein-Uhlenbeck process of deviation s and time tau: variance F^2 s^2 tau /
    # (g (1 + g tau)) and correlation (a e^(-g t) - g e^(-a t)) / (a - g), a = 1 /
    # tau (Gardiner, Handbook of Stochastic Methods, section 4.4.6; spectra multiply).
    config = config_of(GUSTY_WIND)
    steady = build_ocean(
        config_of(GUSTY_WIND.split("[forcing.wind.time]", maxsplit=1)[0])
    )
    pattern = steady.forcing(0.0)
    index = int(np.argmax(np.abs(pattern)))
    count = 12000
    series = np.array([z[index] for z, _ in run(config, count)])[200:]
    g, a = 0.05 / DAY, 1 / (4 * DAY)
    variance = (1.5 * pattern[index]) ** 2 / (a * g * (1 + g / a))
    lags = np.arange(1, 60, 8)
    exact = (a * np.exp(-g * lags * DAY) - g * np.exp(-a * lags * DAY)) / (a - g)
    # The squares decorrelate with the integral of the squared correlation:
    # relative error sqrt(2 T2 / T) with T2 = 2 int rho^2 = (1/g + 1/a + g a ...);
    # summed here over the closed form itself.
    fine = np.arange(0, 400.0, 0.1) * DAY
    rho = (a * np.exp(-g * fine) - g * np.exp(-a * fine)) / (a - g)
    squares = 2 * np.sum(rho**2) * 0.1 * DAY
    error = np.sqrt(2 * squares / (len(series) * DAY))
    # Four standard errors; the scheme's own is (h / tau)^2 / 12 = 0.5 % at most.
    assert series.var() == pytest.approx(variance, rel=4 * error)
    centred = series - series.mean()
    for lag, expected in zip(lags, exact, strict=True):
        found = np.mean(centred[lag:] * centred[:-lag]) / variance
        # The error of a covariance is at most that of the variance.
        assert abs(found - expected) < 4 * error


def test_a_gust_band_accelerates_as_asked():
    # Push of the first step from rest over many members: its mean square over the
    # coordinates is that of the step's mean of the process.
    config = config_of(GUST_BAND, "0.1 d")
    ocean = build_ocean(config)
    total = []
    for member in range(40):
        random = random_forcing_of(config, ocean, member)
        push = random.push(np.zeros(ocean.size))
        total.append(push @ push)
    moved = np.flatnonzero(push)
    speed = np.hypot(*ocean.waves[moved].T)
    assert speed.min() >= 2
    assert speed.max() <= 4
    # Mean over h = tau / 20: variance 1 - h / (3 tau) = 0.983, to (h / tau)^2 / 12.
    expected = 1e-14 * (1 - 0.05 / 3)
    error = np.std(total, ddof=1) / np.sqrt(len(total))
    assert abs(np.mean(total) - expected) < 4 * error + 3e-4 * expected


@pytest.mark.parametrize(
    ("forcing", "name"),
    [(STIRRING, "stirring"), (GUST_BAND, "gusts"), (GUSTY_WIND, "gusts")],
)
def test_energy_fed_closes_the_budget(forcing, name):
    # With linear drag alone dE/dt = fed - 2 mu E whatever the advection does: the
    # drag is integrated here from the states, step by step.
    config = config_of(forcing, "0.2 d")
    drag = 0.05 / DAY
    energies, fed = [0.0], [0.0]
    for z, so_far in run(config, 400):
        energies.append(z @ z / 2)
        fed.append(so_far[name])
    energies, fed = np.array(energies), np.array(fed)
    assert set(so_far) == {name}
    h = 0.2 * DAY
    if name == "stirring":
        # Kicks come between steps: the drag acts on what follows each of them.
        lost = np.sum(-np.expm1(-2 * drag * h) * energies[:-1])
    else:
        lost = 2 * drag * h * (energies[1:] + energies[:-1]).sum() / 2
    assert fed[-1] > 0
    # Without gusts the balance of each step is exact but for the advection's own
    # error of order h^4. With them both integrals are trapezoids: (h / tau)^2 / 12.
    tolerance = 1e-5 if name == "stirring" else 2e-3
    assert energies[-1] + lost == pytest.approx(fed[-1], rel=tolerance)


def test_stirring_feeds_the_mean_energy_that_it_says():
    # Ito's formula: d<E>/dt = eps - 2 mu <E>, so from rest <E> = eps / (2 mu)
    # (1 - exp(-2 mu t)), whatever the advection does (Gardiner, section 4.3.3).
    config = config_of(STIRRING, "0.5 d")
    steps, drag, rate = 60, 0.05 / DAY, 1e-9
    energies, feds = [], []
    for member in range(40):
        *_, (z, fed) = run(config, steps, member)
        energies.append(z @ z / 2)
        feds.append(fed["stirring"])
    time = steps * 0.5 * DAY
    expected = rate / (2 * drag) * (1 - np.exp(-2 * drag * time))
    error = np.std(energies, ddof=1) / np.sqrt(len(energies))
    # Four standard errors. The noise is exact for the linear part, and the
    # advection conserves energy, so the step has no bias to add.
    assert abs(np.mean(energies) - expected) < 4 * error
    error = np.std(feds, ddof=1) / np.sqrt(len(feds))
    # What the kicks feed is less by the drag on them within their own step, mu h.
    kicks = rate * time * (1 - np.exp(-2 * drag * 0.5 * DAY)) / (2 * drag * 0.5 * DAY)
    assert abs(np.mean(feds) - kicks) < 4 * error


@dataclass(frozen=True)
class Quartic:
    """Many independent unknowns with dx/dt = -x^3: one for each of some values."""

    size: int

    @property
    def waves(self):
        return np.ones((self.size, 2), dtype=int)

    @property
    def damping(self):
        return np.zeros(self.size)

    def exact_flow(self, interval):
        return np.copy

    def explicit(self, t, x):
        return -(x**3)


class Ones:
    """Stands in for a generator: every normal is one."""

    def standard_normal(self, count):
        return np.ones(count)


def test_weak_order_of_stirring_is_one():
    # dx = -x^3 dt + s dW has the stationary density exp(-x^4 / (2 s^2)), so <x^2> =
    # sqrt(2) s Gamma(3/4) / Gamma(1/4) (Gardiner, section 5.2.2). The scheme's own
    # stationary density, without sampling: where a step takes each point of a fine
    # grid, spread by the normal density of the kick.
    grid = np.linspace(-4, 4, 801)
    model = Quartic(len(grid))
    rate = len(grid) / 2  # each unknown its own: s = 1
    errors = []
    for step in (0.08, 0.04, 0.02):
        ends = grid.copy()
        IntegratingFactorRK4(model, step).advance(0.0, ends)
        kick = np.zeros(len(grid))
        stirring = Stirring(energy_rate=rate, band=(1, 2))
        StirringNoise(model, stirring, step).add(kick, Ones())
        spread = norm.pdf(grid[:, None], ends[None, :], kick[None, :])
        spread /= spread.sum(axis=0)
        value, vector = eigs(spread, k=1, v0=np.exp(-(grid**4) / 2))
        assert value[0] == pytest.approx(1, rel=1e-10)
        density = vector[:, 0].real / vector[:, 0].real.sum()
        errors.append(density @ grid**2 - np.sqrt(2) * gamma(0.75) / gamma(0.25))
    orders = np.log2(np.divide(errors[:-1], errors[1:]))
    assert np.all(np.abs(orders - 1) < 0.1), (orders, errors)


def test_weak_error_of_stirring_on_a_linear_ocean_is_nil():
    # With all waves at one K^2 advection vanishes; the scheme is then an exact
    # sample at any step: variance after ten long steps equals that of the process.
    forcing = STIRRING.replace("[2, 4]", "[5, 5]")
    config = config_of(forcing, "4 d", "output.state_every=4 d")
    drag, rate, steps = 0.05 / DAY, 1e-9, 10
    energies = []
    for member in range(200):
        *_, (z, _) = run(config, steps, member)
        energies.append(z @ z / 2)
    expected = rate / (2 * drag) * (1 - np.exp(-2 * drag * steps * 4 * DAY))
    error = np.std(energies, ddof=1) / np.sqrt(len(energies))
    assert abs(np.mean(energies) - expected) < 4 * error
