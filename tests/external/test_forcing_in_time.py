"""Forcing that varies in time, against closed forms of a damped mode's response.

The forced wave does not vary in x, so nothing advects it and its coordinate obeys
dz/dt = -g z + F f(t), z(0) = 0, whatever the amplitude.
"""

import numpy as np
import pytest

from eddyshed.reduce.contract import check_model
from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.exponential import stepper_of
from eddyshed.solver.integrate import integrate
from eddyshed.solver.settings import TruthConfig

CONFIG = """
name = "response"
[grid]
points = [16, 16]
lengths = ["1000 km", "1000 km"]
[ocean]
kind = "barotropic"
beta = "2e-11 m-1 s-1"
drag = "0.05 1/d"
[forcing.wind]
kind = "wave"
amplitude = "5e-12 s-2"
waves = [0, 2]
[forcing.wind.time]
{time}
[time]
step = "1 d"
spin_up = "0 d"
duration = "64 d"
scheme = "{scheme}"
[output]
state_every = "1 d"
"""
DAY = 86400.0
DAMPING = 0.05 / DAY
LENGTH = 64 * DAY
BEHAVIOURS = {
    "seasonal": 'kind = "seasonal"\nperiod = "40 d"\namplitude = 0.8\nphase = 0.6',
    "ramp": 'kind = "ramp"\nstart = "16 d"\nend = "48 d"\nbefore = 0.5\nafter = 2',
    "step": 'kind = "step"\nat = "32 d"\nbefore = 0.5\nafter = -1',
}
SCHEMES = ("integrating factor", "exponential differencing")


def config_of(behaviour, scheme=SCHEMES[0], *overrides):
    text = CONFIG.format(time=behaviour, scheme=scheme)
    return parse_config(text, TruthConfig, "response.toml", overrides).config


def forced_coordinate(ocean):
    return int(np.argmax(np.abs(ocean.forcing(40 * DAY))))


def response(config, steps):
    """The forced coordinate at the end, over what a steady unit forcing holds it at."""
    ocean = build_ocean(config)
    steady = build_ocean(config_of('kind = "steady"'))
    index = forced_coordinate(ocean)
    z = np.zeros(ocean.size)
    stepper = stepper_of(config.time.scheme, ocean, LENGTH / steps)
    run = integrate(stepper, z, first_step=0, last_step=steps, energy_bound=1e9)
    assert sum(1 for _ in run) == steps
    assert np.count_nonzero(np.abs(z) > 1e-12 * abs(z[index])) == 1
    return z[index] * DAMPING / steady.forcing(0.0)[index]


def ramp_response(g, t, start, end, before, after):
    """Response at t > end: the ramp is a difference of two integrated steps."""
    slope = (after - before) / (end - start)

    def since(s):
        return (t - s) - (1 - np.exp(-g * (t - s))) / g

    return before * (1 - np.exp(-g * t)) + slope * (since(start) - since(end))


def exact(name):
    """Closed form at the end, over the steady response to a unit forcing."""
    g, t = DAMPING, LENGTH
    if name == "seasonal":
        # Particular solution by complex amplitude; the transient starts at rest.
        omega = 2 * np.pi / (40 * DAY)
        gain = 0.8 * np.exp(0.6j) * g / (g + 1j * omega)
        settled = 1 + (gain * np.exp(1j * omega * t)).real
        return settled - (1 + gain.real) * np.exp(-g * t)
    if name == "ramp":
        return ramp_response(g, t, 16 * DAY, 48 * DAY, 0.5, 2.0)
    at = 32 * DAY
    return 0.5 * (1 - np.exp(-g * t)) - 1.5 * (1 - np.exp(-g * (t - at)))


@pytest.mark.parametrize("scheme", SCHEMES)
@pytest.mark.parametrize("name", BEHAVIOURS)
def test_response_of_a_damped_mode(name, scheme):
    config = config_of(BEHAVIOURS[name], scheme)
    counts = 32, 64, 128
    errors = [abs(response(config, n) - exact(name)) for n in counts]
    if scheme == "exponential differencing" and name != "seasonal":
        # Exact for forcing that is linear between steps, but for how far the stages
        # at the ends look inside: 4e-9 of a step, times (g h)^2 = 0.01.
        assert max(errors) < 1e-11
        return
    # Of order four although the forcing jumps or bends: it does so between steps.
    orders = np.log2(np.divide(errors[:-1], errors[1:]))
    assert np.all(np.abs(orders - 4) < 0.1), orders
    assert errors[-1] < 1e-6


@pytest.mark.parametrize("name", BEHAVIOURS)
def test_parts_agree_and_the_model_keeps_its_promises(name):
    ocean = build_ocean(config_of(BEHAVIOURS[name]))
    rng = np.random.default_rng(2)
    z = rng.standard_normal(ocean.size) * 0.1
    for t in (0.0, 20 * DAY, 50 * DAY):
        whole = ocean.forcing(t) + ocean.linear(z) + ocean.bilinear(z, z)
        np.testing.assert_allclose(
            ocean.tendency(t, z), whole, atol=1e-13 * np.abs(whole).max()
        )
    check_model(ocean)


@pytest.mark.parametrize("name", BEHAVIOURS)
def test_work_of_varying_forcing_is_in_the_budget(name):
    ocean = build_ocean(config_of(BEHAVIOURS[name]))
    z = np.random.default_rng(2).standard_normal(ocean.size) * 0.1
    for t in (0.0, 20 * DAY, 50 * DAY):
        budget = ocean.budget(t, z)
        assert budget["work"] == pytest.approx(ocean.forcing(t) @ z, rel=1e-12)
        rates = [
            value
            for key, value in budget.items()
            if ocean.budget_units[key][0] == "m2 s-3"
        ]
        # Advection does no work, to round-off of its terms.
        size = np.abs(z * ocean.bilinear(z, z)).sum()
        assert abs(z @ ocean.tendency(t, z) - sum(rates)) < 1e-12 * size


def test_forcings_add_up():
    # A seasonal pattern beside a steady one: each is its own.
    text = CONFIG.format(time=BEHAVIOURS["step"], scheme=SCHEMES[0]) + (
        '[forcing.trades]\nkind = "wave"\namplitude = "1e-12 s-2"\nwaves = [1, 1]\n'
    )
    both = build_ocean(parse_config(text, TruthConfig, "x").config)
    one = build_ocean(config_of(BEHAVIOURS["step"]))
    steady = both.forcing(0.0) - one.forcing(0.0)
    assert np.count_nonzero(np.abs(steady) > 1e-20) in (1, 2)
    np.testing.assert_allclose(
        both.forcing(40 * DAY), one.forcing(40 * DAY) + steady, rtol=1e-12, atol=1e-25
    )
