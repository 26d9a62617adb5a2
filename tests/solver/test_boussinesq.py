"""The Boussinesq slice in time: orders, budgets, surface heating, bad input."""

from dataclasses import dataclass

import numpy as np
import pytest
from scipy import integrate as quadrature

from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config, setting
from eddyshed.solver.diagnostics import budget_of
from eddyshed.solver.errors import ConfigError, DataError
from eddyshed.solver.exponential import ExponentialDifferencingRK4
from eddyshed.solver.oceans.boussinesq import Boussinesq
from eddyshed.solver.oceans.boussinesq_waves import BoussinesqSettings
from eddyshed.solver.settings import TruthConfig
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.stepping import IntegratingFactorRK4
from eddyshed.solver.surface_buoyancy import SurfaceBuoyancy, surface_source

STABLE = {"buoyancy_gradient": 4.0, "viscosity": 0.004, "diffusivity": 0.002}
UNSTABLE = {"buoyancy_gradient": -1.0, "viscosity": 0.02, "diffusivity": 0.01}
ROTATING = STABLE | {"coriolis": 1.5}
OCEANS = [
    (Periodic, STABLE),
    (Periodic, ROTATING),
    (Periodic, UNSTABLE),
    (Channel, STABLE),
    (Channel, UNSTABLE),
]


def ocean(kind, parameters, **sources):
    return Boussinesq(
        BoussinesqSettings(**parameters), kind((16, 12), (4.0, 2.0)), **sources
    )


def smooth_state(model, seed, speed):
    rng = np.random.default_rng(seed)
    z = rng.standard_normal(model.size) * (np.hypot(*model.waves.T) <= 3)
    return z * (speed / np.linalg.norm(z))


@pytest.mark.parametrize(
    "scheme", [IntegratingFactorRK4, ExponentialDifferencingRK4], ids=["IFRK4", "ETD"]
)
@pytest.mark.parametrize(("kind", "parameters"), OCEANS)
def test_order_in_time(kind, parameters, scheme):
    model = ocean(kind, parameters)
    start = smooth_state(model, 10, 1.0)

    def end(steps):
        z, stepper = start.copy(), scheme(model, 1.0 / steps)
        for i in range(steps):
            stepper.advance(i * stepper.step, z)
        return z

    # Differences of successive halvings need no reference solution.
    ends = [end(steps) for steps in (32, 64, 128, 256)]
    errors = [np.linalg.norm(a - b) for a, b in zip(ends[1:], ends[:-1], strict=True)]
    assert errors[-1] < 1e-5
    orders = np.log2(np.divide(errors[:-1], errors[1:]))
    assert abs(orders[-1] - 4) < 0.1


@pytest.mark.parametrize(("kind", "parameters"), OCEANS)
def test_budgets_close(kind, parameters):
    rng = np.random.default_rng(11)
    space = kind((16, 12), (4.0, 2.0))
    low = np.hypot(*space.waves.T) <= 2
    model = Boussinesq(
        BoussinesqSettings(**parameters),
        space,
        source=low * rng.standard_normal(space.n_real),
        buoyancy_source=low * rng.standard_normal(space.n_real) * 0.1,
    )
    # At any instant, to round-off: dE/dt = z . dz/dt, dZ/dt = K^2 z . dz/dt of psi.
    z = smooth_state(model, 12, 1.0)
    budget, units = model.budget(0.0, z), model.budget_units
    assert list(budget) == list(units)
    rate = z * model.tendency(0.0, z)
    for unit, change in (
        ("m2 s-3", rate.sum()),
        ("s-3", np.sum(space.k_squared * rate[: space.n_real])),
    ):
        terms = [value for name, value in budget.items() if units[name][0] == unit]
        assert abs(sum(terms) - change) < 1e-13 * np.abs(terms).sum()
    # And over a run: the trapezoidal rule over steps of 0.005 leaves up to 8e-6
    # of the terms (measured), an error of order two in the step.
    step, times, series = 0.005, [], {name: [] for name in budget}
    stepper = IntegratingFactorRK4(model, step)
    for i in range(201):
        times.append(i * step)
        for name, value in model.budget(times[-1], z).items():
            series[name].append(value)
        stepper.advance(i * step, z)
    series = {name: np.array(values) for name, values in series.items()}
    names = {name: unit for name, (unit, _) in units.items()}
    for quantity in ("energy", "enstrophy"):
        closed = budget_of(np.array(times), series, names, quantity)
        size = sum(abs(term.value) for term in closed.terms.values())
        assert abs(closed.residual.value) < 2e-5 * size


def test_inviscid_stable_flow_keeps_its_energy():
    # Kinetic and available potential energy are one invariant of a stable fluid.
    model = ocean(Channel, {"buoyancy_gradient": 4.0})
    z = smooth_state(model, 13, 1.0)
    stepper, start = IntegratingFactorRK4(model, 0.01), z @ z
    for i in range(200):
        stepper.advance(i * 0.01, z)
    # RK4 loses energy at order five in the step: measured 7e-9.
    assert z @ z == pytest.approx(start, rel=1e-7)


@pytest.mark.parametrize("depth", [0.07, 0.4, 5.0])
def test_surface_source(depth):
    # Coefficients against scipy's quadrature of the profile with each sine.
    space = Channel((16, 32), (3.0, 1.3))
    pattern = SurfaceBuoyancy(flux=0.02, waves=2, depth=depth, phase=0.6)
    found = surface_source(space, pattern)
    x, z = space.grid_axes
    k = 2 * np.pi * 2 / 3.0
    for m in range(1, space.cutoff[1] + 1):
        shape = np.sin(m * np.pi * z / 1.3)[:, None] * np.cos(k * x + 0.6)[None, :]
        unit = space.to_modes(shape)
        power = np.sum(space.norm * unit**2)
        profile, _ = quadrature.quad(
            lambda h, m=m: np.exp(-(1.3 - h) / depth) * np.sin(m * np.pi * h / 1.3),
            0,
            1.3,
            limit=200,
        )
        expected = 0.02 / depth * 2 / 1.3 * profile
        assert np.sum(space.norm * unit * found) / power == pytest.approx(
            expected, rel=1e-9
        )
        found = found - expected * unit
    assert np.abs(found).max() < 1e-12  # nothing but these waves


def test_surface_source_sets_heated_fluid_rising():
    space = Channel((32, 32), (4.0, 1.0))
    source = surface_source(space, SurfaceBuoyancy(flux=1e-4, waves=1, depth=0.1))
    model = Boussinesq(
        BoussinesqSettings(
            buoyancy_gradient=0.0,
            reference_frequency=0.1,
            viscosity=1e-3,
            diffusivity=1e-3,
        ),
        space,
        buoyancy_source=source,
    )
    z = np.zeros(model.size)
    stepper = IntegratingFactorRK4(model, 0.2)
    for i in range(200):
        stepper.advance(i * 0.2, z)
    heated = np.abs(space.grid_axes[0]) < 0.1  # under the crest of the cosine
    middle = len(space.grid_axes[1]) // 2
    w = space.to_grid(space.ddx(model.streamfunction(z)))
    assert w[middle, heated] > 0
    assert model.heat_flux(z) > 0


@pytest.mark.parametrize(
    ("pattern", "words"),
    [
        ({"waves": 9, "depth": 0.5}, "beyond the 5 in x"),
        ({"waves": 1, "depth": 0.01}, "thinner than the grid"),
    ],
)
def test_surface_source_that_does_not_fit(pattern, words):
    with pytest.raises(DataError, match=words):
        surface_source(
            Channel((16, 16), (2.0, 1.0)), SurfaceBuoyancy(flux=1e-4, **pattern)
        )


def test_surface_needs_walls():
    with pytest.raises(DataError, match="walls above and below"):
        surface_source(
            Periodic((16, 16), (2.0, 1.0)), SurfaceBuoyancy(flux=1e-4, waves=1, depth=1)
        )


def test_largest_speed():
    # psi = sin kx sin pi z: |u| dz^-1-weighted extremes by hand, at a grid point or
    # within the grid's step of one: cos and sin peaks in quadrature never meet.
    space = Channel((64, 64), (2.0, 1.0))
    model = Boussinesq(BoussinesqSettings(buoyancy_gradient=1.0), space)
    x, z = np.meshgrid(*space.grid_axes)
    psi = space.to_modes(0.3 * np.sin(np.pi * x) * np.sin(np.pi * z))
    state = model.coordinates(psi, np.zeros(space.n_real))
    u = 0.3 * np.pi * np.abs(np.sin(np.pi * x) * np.cos(np.pi * z))
    w = 0.3 * np.pi * np.abs(np.cos(np.pi * x) * np.sin(np.pi * z))
    expected = np.max(u * 64 / 2.0 + w * 64 / 1.0)
    # The points where velocities are looked at may differ by half a step.
    assert model.largest_speed(state) == pytest.approx(expected, rel=0.01)


def test_settings_that_do_not_fit():
    @dataclass(frozen=True, slots=True, kw_only=True)
    class Root:
        ocean: BoussinesqSettings = setting(doc="the slice")

    with pytest.raises(ConfigError, match="give reference_frequency"):
        parse_config('[ocean]\nbuoyancy_gradient = "0 s-2"', Root, "text")
    with pytest.raises(ConfigError, match="viscosity"):
        parse_config(
            '[ocean]\nbuoyancy_gradient = "1e-4 s-2"\nviscosity = "-1 m2/s"',
            Root,
            "text",
        )
    read = parse_config('[ocean]\nbuoyancy_gradient = "-1e-4 s-2"', Root, "text")
    assert read.config.ocean.weight == pytest.approx(0.01)


@pytest.mark.parametrize(("kind", "parameters"), OCEANS)
def test_names_of_coordinates(kind, parameters):
    model = ocean(kind, parameters)
    assert len(set(model.labels)) == model.size
    partners = model.partners
    paired = np.flatnonzero(partners >= 0)
    np.testing.assert_array_equal(partners[partners[paired]], paired)
    np.testing.assert_array_equal(model.waves[partners[paired]], model.waves[paired])
    fields = [label.split()[0] for label in model.labels]
    assert all(fields[i] == fields[partners[i]] for i in paired)


def test_scales_of_a_convecting_flow():
    model = ocean(Channel, UNSTABLE)
    z = smooth_state(model, 14, 0.1)
    table = {name: value for name, value, _ in model.scales(z)}
    # Ra = 1 * 2^4 / (0.02 * 0.01), Pr = 2, (nu kappa / N^2)^(1/4) = H Ra^(-1/4).
    assert table["Rayleigh number"] == pytest.approx(80000)
    assert table["Prandtl number"] == pytest.approx(2)
    assert table["viscous-buoyancy length"] == pytest.approx(2 * 80000**-0.25)
    assert table["shortest damping time"] < table["longest damping time"]
    kinetic = np.linalg.norm(z[: model.space.n_real])
    assert table["rms speed"] == pytest.approx(kinetic)
    fastest = 1 / table["e-folding time of the fastest growing wave kept"]
    dense = model.linear(np.eye(model.size)).T
    assert fastest == pytest.approx(np.linalg.eigvals(dense).real.max(), rel=1e-9)


def test_shortest_internal_wave_period():
    # Without dissipation the fastest wave kept is the most nearly horizontal one.
    model = ocean(Channel, {"buoyancy_gradient": 4.0})
    space = model.space
    k, k_squared = space.wavenumber_x, space.k_squared
    expected = 2 * np.pi / np.max(2 * np.abs(k) / np.sqrt(k_squared))
    table = {name: value for name, value, _ in model.scales()}
    assert table["shortest internal wave period"] == pytest.approx(expected)


CONFIG = """
name = "slice"
[grid]
space = "{space}"
points = [16, 12]
lengths = ["2 km", "200 m"]
[ocean]
{ocean}
[forcing.pattern]
{forcing}
[time]
step = "60 s"
spin_up = "0 s"
duration = "600 s"
[output]
state_every = "60 s"
"""
SLICE = 'kind = "boussinesq"\nbuoyancy_gradient = "1e-6 s-2"'
HEATING = 'kind = "surface_buoyancy"\nflux = "1e-7 m2/s3"\nwaves = 1\ndepth = "20 m"'


def configured(space="channel", ocean=SLICE, forcing=HEATING):
    text = CONFIG.format(space=space, ocean=ocean, forcing=forcing)
    return parse_config(text, TruthConfig, "text").config


def test_config_builds_the_slice():
    model = build_ocean(configured())
    space = model.space
    pattern = SurfaceBuoyancy(flux=1e-7, waves=1, depth=20.0)
    heat = model.coordinates(np.zeros(space.n_real), surface_source(space, pattern))
    np.testing.assert_array_equal(model.forcing(0.0), heat)
    assert model.labels[0] == "psi sin 1z"
    assert model.settings.weight == pytest.approx(1e-3)


def test_weather_over_the_slice_varies_in_time():
    varying = (
        HEATING + '\ntime = {kind = "seasonal", period = "240 s", amplitude = 0.5}'
    )
    model, steady = build_ocean(configured(forcing=varying)), build_ocean(configured())
    # Times 1 + 0.5 cos(pi) half a period after the start.
    np.testing.assert_allclose(
        model.forcing(120.0), 0.5 * steady.forcing(120.0), rtol=1e-12
    )


@pytest.mark.parametrize(
    ("parts", "error", "words"),
    [
        (
            {
                "space": "basin",
                "forcing": 'kind = "wave"\namplitude = "1e-9 s-2"\nwaves = [1, 1]',
            },
            DataError,
            "must be periodic in x",
        ),
        (
            {"space": "periodic"},
            DataError,
            r"\[forcing.pattern\] a surface needs walls",
        ),
        (
            {"ocean": SLICE + '\ncoriolis = "1e-4 s-1"'},
            DataError,
            "does not fit walls",
        ),
        ({"ocean": 'kind = "barotropic"'}, ConfigError, "has buoyancy to heat"),
        (
            {
                "forcing": 'kind = "wind"\nstress = "0.1 N/m2"\nwaves = 1\n'
                'depth = "1 km"'
            },
            ConfigError,
            "not the vertical slice",
        ),
    ],
)
def test_configs_that_do_not_fit(parts, error, words):
    with pytest.raises(error, match=words):
        build_ocean(configured(**parts))
