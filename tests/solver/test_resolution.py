"""Scales that a grid or a step does not resolve, and by how much."""

import numpy as np
import pytest

from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.forecast import forecast_run
from eddyshed.solver.resolution import (
    LARGEST_COURANT,
    flow_scales,
    laminar_state,
    unresolved_lengths,
)
from eddyshed.solver.settings import TruthConfig
from eddyshed.solver.stepping import IntegratingFactorRK4

TINY = """
name = "tiny"
[grid]
points = [32, 32]
lengths = ["1000 km", "1000 km"]
[ocean]
kind = "barotropic"
beta = "2e-11 m-1 s-1"
drag = "0.01 1/d"
hyperviscosity_time = "0.25 d"
[forcing.wind]
kind = "wave"
amplitude = "5e-12 s-2"
waves = [2, 1]
[initial]
kind = "noise"
energy = "0.01 m2/s2"
band = [1, 3]
[time]
step = "0.1 d"
spin_up = "0 d"
duration = "3000 d"
[output]
state_every = "1 d"
"""


def config_of(*overrides):
    return parse_config(TINY, TruthConfig, "tiny.toml", overrides).config


KEPT = ("shortest wavelength kept", 50e3, "m")


@pytest.mark.parametrize(
    ("name", "value", "times"),
    [
        # A length needs half the shortest wavelength, a wavelength twice it.
        ("Munk width", 20e3, "1.25"),
        ("Munk width", 26e3, None),
        ("Rhines wavelength", 80e3, "1.25"),
        ("Rhines wavelength", 101e3, None),
        ("deformation radius", np.inf, None),
    ],
)
def test_lengths_below_the_grid_are_named_with_the_grid_that_would_do(
    name, value, times
):
    scales = [("grid spacing", 16e3, "m"), KEPT, (name, value, "m"), ("x", 1.0, "s")]
    found = list(unresolved_lengths(scales))
    assert len(found) == (times is not None)
    if times:
        text = f"{float(times):.2g} times as many points"
        assert name in found[0]
        assert text in found[0]


def test_laminar_flow_balances_the_forcing():
    # One wave: z = -F / (i omega - g) in closed form, Rossby frequency and drag.
    ocean = build_ocean(config_of())
    z = laminar_state(ocean)
    assert np.linalg.norm(ocean.linear(z) + ocean.forcing(0.0)) < 2e-3 * np.linalg.norm(
        ocean.forcing(0.0)
    )
    unit = 2 * np.pi / 1e6
    k2 = 5 * unit**2
    damping = 0.01 / 86400 + (k2 / (10 * unit) ** 2) ** 4 / (0.25 * 86400)
    speed = 5e-12 / np.sqrt(2 * k2) / abs(damping + 1j * 2e-11 * 2 * unit / k2)
    # GMRES was asked for a thousandth.
    assert np.sqrt(z @ z) == pytest.approx(speed, rel=3e-3)


def test_no_laminar_flow_without_forcing_or_friction():
    assert laminar_state(build_ocean(config_of("forcing={}"))) is None
    inviscid = config_of("ocean.drag=0", "ocean.hyperviscosity_time=inf")
    assert laminar_state(build_ocean(inviscid)) is None


def test_step_beyond_the_courant_limit_is_named_and_blows_up():
    ocean = build_ocean(config_of())
    z = np.random.default_rng(1).standard_normal(ocean.size) * 0.05
    limit = LARGEST_COURANT / ocean.largest_speed(z)
    for factor, unstable in ((0.9, False), (1.5, True)):
        scales, warnings = flow_scales(ocean, z, "test", factor * limit)
        named = [text for text in warnings if "largest that advection allows" in text]
        assert len(named) == unstable
    assert f"{1.5:.3g} times" in named[0]
    found = {name: value for name, value, _ in scales}
    assert found["largest stable step (test)"] == pytest.approx(limit, rel=1e-14)


def test_courant_limit_is_that_of_the_classical_method():
    # A uniform stream of speed U past a wave at the cutoff: |U k h| = 2 sqrt(2) is
    # the limit of the classical method on the imaginary axis, and the cutoff k is
    # at most a third of the points (Canuto et al., Spectral Methods in Fluid
    # Dynamics, 1988, section 4.3).
    class Stream:
        def exact_flow(self, interval):
            return np.copy

        def explicit(self, t, z):
            return np.array([z[1], -z[0]]) * rate

    n, length, speed = 96, 1.0, 3.0
    rate = speed * 2 * np.pi * (n / 3) / length
    limit = LARGEST_COURANT / (speed * n / length)
    for factor, grows in ((0.99, False), (1.01, True)):
        stepper = IntegratingFactorRK4(Stream(), factor * limit)
        z = np.array([1.0, 0.0])
        for _ in range(500):
            stepper.advance(0.0, z)
        assert (np.linalg.norm(z) > 1) == grows


def test_forecast_shows_scales_of_the_flows_and_warns():
    found = forecast_run(config_of(), seconds=0.01)
    names = [name for name, *_ in found.scales]
    for flow in ("initial state", "laminar flow"):
        assert f"rms speed ({flow})" in names
        assert f"largest stable step ({flow})" in names
    values = {name: value for name, value, _ in found.scales}
    assert values["rms speed (initial state)"] == pytest.approx(np.sqrt(0.02))
    assert not [text for text in found.warnings if "advection allows" in text]
    hasty = forecast_run(
        config_of("time.step=1 d", "initial.energy=1 m2/s2"), seconds=0.01
    )
    assert [text for text in hasty.warnings if "advection allows" in text]
    assert [text for text in hasty.warnings if "eddy turnover time" in text]
    coarse = forecast_run(config_of("ocean.deformation_radius=12 km"), seconds=0.01)
    (text,) = [t for t in coarse.warnings if t.startswith("the deformation radius")]
    # A weak random start is no flow whose scales must be resolved; a laminar one is.
    weak = forecast_run(config_of("initial.energy=1e-8 m2/s2"), seconds=0.01)
    assert not [t for t in weak.warnings if "Rhines" in t]
    windless = "forcing.wind.amplitude=1e-16 s-2"
    calm = forecast_run(config_of(windless), seconds=0.01)
    assert [t for t in calm.warnings if t.startswith("laminar flow: the Rhines")]
    # Cutoff 10 waves along x and y: shortest wavelength 70.7 km, half of it needed.
    assert "take 2.9 times as many points" in text
