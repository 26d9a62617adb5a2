"""The barotropic ocean with an evolving mean current, against low-order results."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import linalg

from eddyshed.reduce.contract import check_model
from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.diagnostics import budget_of
from eddyshed.solver.errors import ConfigError, DataError
from eddyshed.solver.exponential import ExponentialDifferencingRK4
from eddyshed.solver.initial import (
    FieldSettings,
    ModeSettings,
    NoiseSettings,
    RestSettings,
    starting_state,
)
from eddyshed.solver.integrate import integrate
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.oceans.barotropic_current import BarotropicCurrent
from eddyshed.solver.record import open_record
from eddyshed.solver.segments import member_paths
from eddyshed.solver.settings import TruthConfig
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.stepping import IntegratingFactorRK4
from eddyshed.solver.truth import run_member

BOX = (2 * np.pi, 2 * np.pi)
FREE = {"beta": 2.0, "mean_current_evolves": True, "mean_current": 0.4}
DAMPED = FREE | {
    "drag": 0.1,
    "viscosity": 1e-3,
    "mean_current_drag": 0.05,
    "mean_current_drive": 0.03,
}


def ocean(points=(12, 16), parameters=DAMPED, *, forced=True, bottom=True):
    space = Periodic(points, BOX)
    smooth = 1 / (1 + space.k_squared)
    source, h = np.random.default_rng(4).standard_normal((2, space.n_real)) * smooth
    return BarotropicCurrent(
        BarotropicSettings(**parameters),
        space,
        source if forced else None,
        5 * h if bottom else None,
    )


def state(model, seed=0):
    z = np.random.default_rng(seed).standard_normal(model.size)
    return z / (1 + np.hypot(*model.waves.T) ** 2)


def run(model, z, step, steps, scheme=IntegratingFactorRK4):
    end, stepper = z.copy(), scheme(model, step)
    for _ in integrate(stepper, end, first_step=0, last_step=steps, energy_bound=1e6):
        pass
    return end


# --- The equations ----------------------------------------------------------


@pytest.mark.parametrize("bottom", [False, True])
def test_the_contract_holds(bottom):
    model = ocean(bottom=bottom)
    check_model(model)
    states = np.array([state(model, seed) for seed in range(20)])
    check_model(model, states=states)
    explicit = model.explicit(0.0, states[0])
    exact = model.linear_function(lambda rate: rate)(states[0])
    np.testing.assert_allclose(
        exact + explicit,
        model.forcing(0.0)
        + model.linear(states[0])
        + model.bilinear(states[0], states[0]),
        atol=1e-13 * np.abs(explicit).max(),  # round-off
    )


def test_eddies_feel_the_current_as_if_it_were_imposed():
    # At each instant the first equation is that of a prescribed current U.
    model = ocean()
    z = state(model)
    imposed = Barotropic(
        replace(model.settings, mean_current=z[-1]),
        model.space,
        model.source,
        model.topography,
    )
    np.testing.assert_allclose(
        model.tendency(0.0, z)[:-1], imposed.tendency(0.0, z[:-1]), atol=1e-12
    )


def test_form_drag_is_the_pressure_on_the_slope():
    # U_t = <h psi_x> + drive - drag U (Charney & DeVore 1979, J. Atmos. Sci. 36:1205;
    # Hart 1979, ibid. 1736), as a mean over a grid of fields.
    model = ocean()
    z = state(model)
    space = model.space
    _, northward = space.velocity(model.streamfunction(z))
    pressure = np.mean(space.to_grid(model.topography) * northward)
    expected = pressure + 0.03 - 0.05 * z[-1]
    assert model.tendency(0.0, z)[-1] == pytest.approx(expected, rel=1e-12)
    assert model.budget(0.0, z)["current_form_drag"] == pytest.approx(
        pressure, rel=1e-12
    )


def test_invariants():
    # Energy U^2/2 + <|grad psi|^2>/2, with the quadratic terms alone and with form
    # drag; and <(zeta + h)^2>/2 + beta U, which without a free current topography
    # and beta together destroy (Carnevale & Frederiksen 1987, J. Fluid Mech. 175:157).
    model = ocean(parameters=FREE, forced=False)
    z = state(model)
    space = model.space
    for rate in (model.tendency(0.0, z), model.bilinear(z, z), model.linear(z)):
        assert abs(z @ rate) < 1e-13 * np.abs(z * rate).sum()  # round-off
    rate = model.tendency(0.0, z)
    q = model.topography - space.k_squared * model.streamfunction(z)
    q_rate = -space.k_squared * model.streamfunction(rate)
    terms = np.append(space.norm * q * q_rate, 2.0 * rate[-1])
    assert abs(terms.sum()) < 1e-13 * np.abs(terms).sum()
    # Neither part is kept by itself.
    assert abs(terms[-1]) > 1e-4 * np.abs(terms).sum()


def test_invariants_in_a_run():
    # Order five, as for any quadratic invariant of the classical method (Hairer,
    # Lubich & Wanner, Geometric Numerical Integration, IV.2, and common practice).
    model = ocean(parameters=FREE, forced=False)
    space, start = model.space, state(model)

    def invariants(z):
        q = model.topography - space.k_squared * model.streamfunction(z)
        return np.array([z @ z / 2, np.sum(space.norm * q * q) / 2 + 2.0 * z[-1]])

    drifts = [
        np.abs(invariants(run(model, start, 1.0 / n, n)) - invariants(start))
        for n in (40, 80)
    ]
    # One order may be missing or gained where a leading term is small.
    assert np.all(np.log2(drifts[0] / drifts[1]) > 4)


@pytest.mark.parametrize("scheme", [IntegratingFactorRK4, ExponentialDifferencingRK4])
def test_order_in_time(scheme):
    # Both schemes are of order four (Canuto et al., Spectral Methods in Fluid
    # Dynamics, 1988; Cox & Matthews 2002, J. Comput. Phys. 176:430).
    model = ocean()
    start = state(model)
    reference = run(model, start, 1.0 / 640, 640, scheme)
    errors = [
        np.linalg.norm(run(model, start, 1.0 / n, n, scheme) - reference)
        for n in (20, 40, 80)
    ]
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    # Within a tenth of nominal: the reference adds 2e-4 of the last error.
    np.testing.assert_allclose(orders, 4.0, atol=0.1)


def test_budgets_close():
    # The chain rule: dE/dt = z . dz/dt, and that of <q^2>/2 with q = -K^2 psi.
    model = ocean()
    z = state(model)
    rate, found, units = (
        model.tendency(0.0, z),
        model.budget(0.0, z),
        model.budget_units,
    )
    assert set(found) == set(units)
    assert found["energy"] == pytest.approx(z @ z / 2, rel=1e-14)
    k2 = np.append(model.space.k_squared, 0.0)
    for unit, total in (("m2 s-3", z @ rate), ("s-3", (k2 * z) @ rate)):
        terms = [value for name, value in found.items() if units[name][0] == unit]
        assert len(terms) == {"m2 s-3": 4, "s-3": 4}[unit]
        assert min(map(abs, terms)) > 0
        # Round-off of sums of 10^2 terms, relative to the largest term.
        assert abs(sum(terms) - total) < 1e-12 * max(map(abs, terms))


# --- Multiple equilibria ----------------------------------------------------

# Over h = h0 cos(kx) the current and the wave psi = a cos(kx) + b sin(kx) make a
# closed set, as J vanishes among them (Hart 1979; Charney & DeVore 1979 in a channel;
# the equations here are theirs for a plane wave, from memory):
#   a' = -r a + k (beta/k^2 - U) b
#   b' = -r b - k (beta/k^2 - U) a - U h0 / k
#   U' = k h0 b / 2 - s (U - U*)
# so that a steady current is a root of the cubic
#   s (U* - U) [r^2 + k^2 (U - beta/k^2)^2] = r h0^2 U / 2.
K, H0, BETA, R, S, DRIVEN = 2.0, 0.6, 2.0, 0.08, 0.03, 2.2


def published(x):
    a, b, u = x
    turn = K * (BETA / K**2 - u)
    return np.array(
        [
            -R * a + turn * b,
            -R * b - turn * a - u * H0 / K,
            K * H0 * b / 2 - S * (u - DRIVEN),
        ]
    )


def jacobian(x):
    a, b, u = x
    turn = K * (BETA / K**2 - u)
    return np.array(
        [[-R, turn, -K * b], [-turn, -R, K * a - H0 / K], [0.0, K * H0 / 2, -S]]
    )


def equilibria():
    """Steady (a, b, U) by the roots of the cubic, slow current first."""
    u = np.poly1d([1.0, 0.0])
    left = S * (DRIVEN - u) * (R**2 + K**2 * (u - BETA / K**2) ** 2)
    roots = np.sort((left - R * H0**2 / 2 * u).roots)
    found = []
    for root in roots[np.abs(roots.imag) < 1e-9].real:
        b = 2 * S * (root - DRIVEN) / (K * H0)
        a = K * (BETA / K**2 - root) * b / R
        assert np.abs(published((a, b, root))).max() < 1e-12  # round-off
        found.append((a, b, root))
    return found


def single_wave(start=0.0):
    space = Periodic((16, 16), BOX)
    settings = BarotropicSettings(
        beta=BETA,
        drag=R,
        mean_current=start,
        mean_current_evolves=True,
        mean_current_drag=S,
        mean_current_drive=S * DRIVEN,
    )
    return BarotropicCurrent(settings, space, None, H0 * space.wave((int(K), 0)))


def embedded(model, x):
    a, b, u = x
    wave = (int(K), 0)
    psi = a * model.space.wave(wave) + b * model.space.wave(wave, -np.pi / 2)
    z = model.coordinates(psi)
    z[-1] = u
    return z


def test_topographic_resonance_has_the_published_equilibria():
    found = equilibria()
    # Below, near and above resonance, U = beta / k^2 = 0.5.
    assert len(found) == 3
    model = single_wave()
    basis = np.array([embedded(model, unit) for unit in np.eye(3)]).T
    basis[-1] = [0.0, 0.0, 1.0]
    for x, stable in zip(found, (True, False, True), strict=True):
        z = embedded(model, x)
        # Round-off of terms of order one.
        assert np.abs(model.tendency(0.0, z)).max() < 1e-13
        # Growth rates on the closed set: published Jacobian, and the model's own.
        columns = model.linear(basis.T).T + 2 * model.bilinear(z, basis.T).T
        own, *_ = np.linalg.lstsq(basis, columns, rcond=None)
        rates = np.sort_complex(linalg.eigvals(jacobian(x)))
        np.testing.assert_allclose(
            np.sort_complex(linalg.eigvals(own)), rates, atol=1e-12
        )
        assert (rates.real.max() < 0) == stable


@pytest.mark.parametrize(("start", "which"), [(0.0, 0), (2.2, 2)])
def test_a_run_finds_the_equilibrium_of_its_side(start, which):
    # From rest the current is held below resonance, from a fast one it stays above.
    # Exponential differencing keeps a steady state exactly, whatever the step.
    model = single_wave(start)
    x, length = equilibria()[which], 400.0
    z = run(model, model.at_rest(), 0.2, 2000, ExponentialDifferencingRK4)
    slowest = linalg.eigvals(jacobian(x)).real.max()
    # What is left of a departure of order one, with room for a factor of ten.
    left = 10 * np.exp(slowest * length)
    assert left < 1e-2
    np.testing.assert_allclose(z, embedded(model, x), atol=left)


# --- In the house -----------------------------------------------------------

RIDGE = """
name = "ridge"
seed = 2
[grid]
points = [16, 16]
lengths = ["2000 km", "2000 km"]
[ocean]
kind = "barotropic"
beta = "1e-11 m-1 s-1"
drag = "0.01 1/d"
hyperviscosity_time = "1 d"
coriolis = "1e-4 s-1"
depth = "4 km"
mean_current_evolves = true
mean_current = "0.1 m s-1"
mean_current_drag = "0.002 1/d"
mean_current_drive = "1e-8 m s-2"
[ocean.topography.hill]
kind = "waves"
height = "200 m"
waves = [2, 1]
[forcing.wind]
kind = "wave"
amplitude = "1e-12 s-2"
waves = [0, 1]
[time]
step = "0.1 d"
spin_up = "0 d"
duration = "60 d"
[output]
state_every = "0.1 d"
"""


def config_of(*overrides):
    return parse_config(RIDGE, TruthConfig, "ridge.toml", overrides).config


def test_a_recorded_run_closes_both_budgets(tmp_path):
    config = config_of()
    assert run_member(config, 0, tmp_path)
    record = open_record(member_paths(tmp_path, 0)[0])
    model = build_ocean(config)
    units, series = record.budget_units(), record.read_budget()
    assert model.labels[-1] == "mean current"
    for quantity in ("energy", "enstrophy"):
        found = budget_of(record.times, series, units, quantity)
        assert len(found.terms) == 4
        largest = max(abs(term.value) for term in found.terms.values())
        # The trapezoidal rule at a tenth of a day, (0.1 / 4)^2 / 12 for the wave
        # period of four days.
        assert abs(found.residual.value) < 5e-5 * largest


def test_every_start_begins_on_the_current_of_the_config(tmp_path):
    model = build_ocean(config_of())
    psi = 1e3 * model.space.to_grid(model.space.wave((1, 0)))
    np.save(tmp_path / "psi.npy", psi)
    starts = (
        (RestSettings(), 0.0),
        (NoiseSettings(energy=0.01, band=(1, 3)), 0.01),
        (ModeSettings(mode="cos 1,0", energy=0.02), 0.02),
        (FieldSettings(path=str(tmp_path / "psi.npy"), energy=0.03), 0.03),
    )
    for initial, energy in starts:
        z = starting_state(initial, model, seed=1, member=0)
        assert z[-1] == 0.1
        assert z[:-1] @ z[:-1] / 2 == pytest.approx(energy, rel=1e-12)
    current = ModeSettings(mode="mean current", energy=0.5)
    z = starting_state(current, model, seed=1, member=0)
    assert z[-1] == 1.0
    assert not z[:-1].any()


def test_fields_and_speeds_are_those_of_the_flow():
    model = ocean()
    z = state(model)
    assert set(model.fields(z)) == set(model.field_units)
    u, v = model.space.velocity(model.streamfunction(z))
    dx = BOX[0] / 12, BOX[1] / 16
    expected = np.max(np.abs(u + z[-1]) / dx[0] + np.abs(v) / dx[1])
    assert model.largest_speed(z) == pytest.approx(expected, rel=1e-14)
    assert dict(s[:2] for s in model.scales(z))["mean current"] == z[-1]


def test_what_has_no_meaning_is_refused():
    with pytest.raises(DataError, match="without walls"):
        BarotropicCurrent(BarotropicSettings(**FREE), Channel((8, 8), BOX))
    with pytest.raises(ConfigError, match="rigid lid"):
        config_of('ocean.deformation_radius="50 km"')
    with pytest.raises(ConfigError, match="mean_current_drive has no meaning"):
        config_of("ocean.mean_current_evolves=false")
    with pytest.raises(DataError, match='this ocean has "energy" alone'):
        ocean().inner_product("enstrophy")
