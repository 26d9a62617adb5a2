"""Nonlinear part of the Boussinesq slice: by brute force, and what it conserves."""

import numpy as np
import pytest
from slices import amplitudes, quadrature

from eddyshed.reduce.contract import check_model
from eddyshed.solver.oceans.boussinesq import Boussinesq
from eddyshed.solver.oceans.boussinesq_waves import BoussinesqSettings
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic

BOX = (2 * np.pi, 2 * np.pi)
CASES = {
    "stable": {"buoyancy_gradient": 3.0, "viscosity": 0.02, "diffusivity": 0.05},
    "unstable": {"buoyancy_gradient": -2.0, "viscosity": 0.02, "diffusivity": 0.01},
    "neutral": {"buoyancy_gradient": 0.0, "reference_frequency": 0.7},
    "rotating": {"buoyancy_gradient": 1.0, "coriolis": 0.6, "viscosity": 0.01},
}
OCEANS = [(Periodic, name) for name in CASES] + [
    (Channel, name) for name in CASES if name != "rotating"
]


def ocean(space, name, rng=None):
    sources = {}
    if rng is not None:
        draw = rng.standard_normal
        sources = {"source": draw(space.n_real), "buoyancy_source": draw(space.n_real)}
    return Boussinesq(BoussinesqSettings(**CASES[name]), space, **sources)


@pytest.mark.parametrize(("kind", "name"), OCEANS)
def test_brute_force(kind, name):
    # J(psi, zeta), J(psi, b) and J(psi, v) as products of functions written out
    # one by one, integrated against each by a quadrature that is exact for them.
    space = kind((10, 12), (3.0, 2.0))
    model = ocean(space, name)
    walls = kind is Channel
    basis, there = quadrature(space, walls), amplitudes(space, walls)
    back = np.linalg.inv(there)
    rng = np.random.default_rng(6)
    z = rng.standard_normal(model.size) / (1 + np.hypot(*model.waves.T)) ** 2
    psi, *carried = model.coefficients(z)
    fields = [-space.k_squared * psi, *carried]
    flow = there @ psi
    rate = []
    for field in fields:
        f = there @ field
        product = (basis.x @ flow) * (basis.y @ f) - (basis.y @ flow) * (basis.x @ f)
        rate.append(-(back @ basis.project(product)))
    rate[0] = rate[0] / -space.k_squared  # of psi, from that of zeta
    expected = model.coordinates(*rate)
    error = np.linalg.norm(model.bilinear(z, z) - expected)
    # Round-off of the quadrature's sums and of the least squares for the basis.
    assert error < 1e-11 * np.linalg.norm(expected)


@pytest.mark.parametrize(("kind", "name"), OCEANS)
def test_contract(kind, name):
    rng = np.random.default_rng(7)
    check_model(ocean(kind((16, 12), (2.0, 1.0)), name, rng))


@pytest.mark.parametrize(("kind", "name"), OCEANS)
def test_quadratic_invariants(kind, name):
    # The advection alone conserves <|grad psi|^2>, <zeta^2>, <b^2> and <v^2>, each
    # for itself, in the truncated equations as well (Orszag 1971, J. Atmos. Sci.
    # 28:1074; Salmon, Lectures on Geophysical Fluid Dynamics, 1998): to 1e-13 of
    # the sum of absolute products.
    space = kind((32, 24), (2.0, 1.0))
    model = ocean(space, name)
    rng = np.random.default_rng(8)
    z = rng.standard_normal(model.size) / (1 + np.hypot(*model.waves.T)) ** 1.5
    rate = model.bilinear(z, z).reshape(model.n_fields, -1)
    fields = z.reshape(rate.shape)
    products = [*(fields * rate), space.k_squared * fields[0] * rate[0]]
    for product in products:
        assert abs(product.sum()) < 1e-13 * np.abs(product).sum()


def test_energy_of_a_known_state():
    # psi = sin x sin 2z, b = 0.3 cos x sin 2z, N^2 = 4: <|grad psi|^2> / 2 = 0.625,
    # <b^2> / (2 N^2) = 0.0028125, and <zeta^2> / 2 = 25 / 8, by hand.
    for space in (Periodic((16, 16), BOX), Channel((16, 16), BOX)):
        model = Boussinesq(BoussinesqSettings(buoyancy_gradient=4.0), space)
        x, z = np.meshgrid(*space.grid_axes)
        state = model.coordinates(
            space.to_modes(np.sin(x) * np.sin(2 * z)),
            space.to_modes(0.3 * np.cos(x) * np.sin(2 * z)),
        )
        budget = model.budget(0.0, state)
        assert budget["kinetic_energy"] == pytest.approx(0.625, rel=1e-13)
        potential = budget["energy"] - budget["kinetic_energy"]
        assert potential == pytest.approx(0.0028125, rel=1e-12)
        assert budget["enstrophy"] == pytest.approx(3.125, rel=1e-13)
        # <w b> = <cos x sin 2z 0.3 cos x sin 2z> = 0.3 / 4
        assert model.heat_flux(state) == pytest.approx(0.075, rel=1e-13)


@pytest.mark.parametrize("kind", [Periodic, Channel])
def test_fields_come_back(kind):
    space = kind((16, 12), (2.0, 1.0))
    model = ocean(space, "stable")
    z = np.random.default_rng(9).standard_normal(model.size)
    fields = model.fields(z)
    assert tuple(fields) == tuple(model.field_units)
    again = model.coordinates(*(space.to_modes(fields[n]) for n in model.prognostic))
    np.testing.assert_allclose(again, z, atol=1e-13 * np.abs(z).max())
    vorticity = space.to_modes(fields["vorticity"])
    expected = -space.k_squared * model.streamfunction(z)
    scale = np.abs(expected).max()
    np.testing.assert_allclose(vorticity, expected, atol=1e-13 * scale)


@pytest.mark.parametrize("kind", [Periodic, Channel])
def test_sources_add_what_they_say(kind):
    # From rest, zeta_t = S and b_t = Q, and v has no source.
    space = kind((16, 12), (2.0, 1.0))
    for name in ("unstable", "rotating") if kind is Periodic else ("unstable",):
        rng = np.random.default_rng(10)
        model = ocean(space, name, rng)
        psi, b, *rest = model.coefficients(model.tendency(0.0, np.zeros(model.size)))
        rng = np.random.default_rng(10)
        vorticity, buoyancy = rng.standard_normal((2, space.n_real))
        np.testing.assert_allclose(-space.k_squared * psi, vorticity, rtol=1e-13)
        np.testing.assert_allclose(b, buoyancy, rtol=1e-13)
        assert not np.any(rest)
