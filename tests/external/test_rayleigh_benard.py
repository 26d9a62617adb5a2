"""Convection between slippery plates, against Rayleigh, Chandrasekhar and others.

Units: the depth, its diffusion time and the buoyancy difference over Pr Ra, so
that viscosity = Pr, diffusivity = 1, N^2 = -Pr Ra and b = Pr Ra theta.
"""

import numpy as np
import pytest

from eddyshed.solver.integrate import integrate
from eddyshed.solver.oceans.boussinesq import Boussinesq
from eddyshed.solver.oceans.boussinesq_waves import (
    BoussinesqSettings,
    critical_rayleigh_number,
    rates,
    rayleigh_number,
)
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.stepping import IntegratingFactorRK4

CRITICAL = 27 * np.pi**4 / 4
K_CRITICAL = np.pi / np.sqrt(2)
ROLLS = 2 * np.sqrt(2)  # wavelength of a pair


def settings(rayleigh, prandtl):
    return BoussinesqSettings(
        buoyancy_gradient=-prandtl * rayleigh, viscosity=prandtl, diffusivity=1.0
    )


def rates_in(space, rayleigh, prandtl, wave):
    """Rates of the waves (k, +-m), from the operator of all of them."""
    model = Boussinesq(settings(rayleigh, prandtl), space)
    dense = model.linear(np.eye(model.size)).T
    chosen = np.flatnonzero(np.all(np.abs(model.waves) == wave, axis=1))
    found = np.linalg.eigvals(dense[np.ix_(chosen, chosen)])
    return found[np.argsort(-found.real)]


# Rayleigh (1916), Phil. Mag. 32:529; Chandrasekhar (1961), chapter II: s^2 / Pr +
# s K^2 (1 + 1 / Pr) + K^4 - Ra k^2 / K^2 = 0 with K^2 = k^2 + pi^2, solved to
# twelve decimals.
GROWTH = [
    (1000, 1, K_CRITICAL, 3.453011981872, -33.061825185140),
    (600, 1, K_CRITICAL, -0.662270977903, -28.946542225365),
    (1000, 10, K_CRITICAL, 6.732073978876, -169.580546596851),
    (600, 10, K_CRITICAL, -1.185830852269, -161.662641765706),
    (1000, 0.7, np.pi, 2.162813407573, -35.719468371277),
    (2000, 1, 3.0, 12.015911133441, -49.755119935620),
    (28 * CRITICAL, 10, K_CRITICAL, 175.102427142706, -337.950899760680),
    (-1000, 1, K_CRITICAL, -14.804406601634 + 18.257418583506j, None),
]


@pytest.mark.parametrize(("rayleigh", "prandtl", "k", "first", "last"), GROWTH)
def test_growth_rates(rayleigh, prandtl, k, first, last):
    last = np.conj(first) if last is None else last
    space = Channel((8, 8), (2 * np.pi / k, 1.0))
    found = rates_in(space, rayleigh, prandtl, (1, 1))
    expected = [first, first, last, last]
    if np.iscomplex(first):
        found = found[np.argsort(-found.imag)]
    # Twelve decimals are given; eigenvalues are good to 1e-13 of the largest.
    np.testing.assert_allclose(found, expected, atol=2e-10)


def test_growth_rates_without_walls():
    # The same formula with K^2 = k^2 + l^2, whatever makes the wavenumber l: here
    # two waves upwards in a box of depth 4, so l = pi.
    space = Periodic((8, 8), (2.0, 4.0))
    found = rates_in(space, 1000, 0.7, (1, 2))
    expected = np.repeat([2.162813407573, -35.719468371277], 4)
    np.testing.assert_allclose(found, expected, atol=2e-10)


def test_growth_in_a_run():
    model = Boussinesq(settings(1000, 1), Channel((8, 8), (ROLLS, 1.0)))
    x, up = model.space.grid_axes
    roll = np.sin(np.pi * up)[:, None] * np.sin(K_CRITICAL * x)[None, :]
    z = model.coordinates(
        1e-8 * model.space.to_modes(roll), np.zeros(model.space.n_real)
    )
    run = integrate(
        IntegratingFactorRK4(model, 0.01),
        z,
        first_step=0,
        last_step=200,
        energy_bound=1.0,
    )
    size = [np.linalg.norm(z) for _ in run]
    # The other mode has decayed by exp(-36.5) after one unit of time, and the
    # advection of a state of 1e-5 changes the rate by its square.
    rate = np.log(size[199] / size[99]) / 1.0
    assert rate == pytest.approx(3.453011981872, rel=1e-5)


def test_critical_rayleigh_number():
    # 27 pi^4 / 4 = 657.511364479516 at k = pi / sqrt 2 (Rayleigh 1916).
    k = np.linspace(0.5, 6, 20001)
    critical = critical_rayleigh_number(k, np.full(k.shape, np.pi), 1.0)
    assert critical == pytest.approx(657.511364479516, rel=1e-7)  # scan: step^2
    space = Channel((16, 16), (ROLLS, 1.0))
    here = Boussinesq(settings(800, 3), space)
    table = {name: value for name, value, _ in here.scales()}
    assert table["Rayleigh number"] == pytest.approx(800, rel=1e-12)
    assert table["Prandtl number"] == pytest.approx(3, rel=1e-12)
    name = "critical Rayleigh number of the waves kept"
    assert table[name] == pytest.approx(657.511364479516, rel=1e-12)
    # The operator changes sign there, to the width of a part in 10^6.
    for part, sign in ((1 - 1e-6, -1), (1 + 1e-6, 1)):
        both = rates(
            settings(CRITICAL * part, 3), np.array([K_CRITICAL]), np.array([np.pi])
        )
        assert np.sign(both[0, 0].real) == sign
    assert rayleigh_number(settings(800, 3), 1.0) == pytest.approx(800)


def steady_rolls(rayleigh, prandtl, points):
    """Rolls symmetric about their axes, by Newton's method on the full equations."""
    model = Boussinesq(settings(rayleigh, prandtl), Channel(points, (ROLLS, 1.0)))
    space = model.space
    x, up = space.grid_axes

    def field(shape):
        return space.to_modes(np.broadcast_to(shape, (len(up), len(x))))

    # The flow has the sines in x, the heat the cosines and what is level, both with
    # an even sum of wavenumbers: the equations keep this symmetry of the first roll.
    across, upward = space.waves.T
    even, cosine = (across + upward) % 2 == 0, cosines(space)
    flow, heat = even & ~cosine & (across > 0), even & (cosine | (across == 0))
    chosen = np.flatnonzero(np.concatenate([flow, heat]))
    # The first guess is the solution in three modes (Lorenz 1963), in his units.
    r = rayleigh / CRITICAL
    lorenz = np.sqrt(8 / 3 * (r - 1))
    wave, double = np.sin(np.pi * up)[:, None], np.sin(2 * np.pi * up)[:, None]
    psi = 3 * lorenz * np.sin(K_CRITICAL * x) * wave
    theta = np.sqrt(2) * lorenz * np.cos(K_CRITICAL * x) * wave - (r - 1) * double
    z = model.coordinates(field(psi), prandtl * rayleigh / (np.pi * r) * field(theta))
    units = np.eye(model.size)[chosen]
    linear = model.linear(units)[:, chosen].T
    for _ in range(12):
        rate = model.tendency(0.0, z)
        outside = np.delete(rate, chosen)
        assert np.abs(outside).max() <= 1e-10 * np.abs(model.linear(z)).max()
        jacobian = linear + 2 * model.bilinear(units, z)[:, chosen].T
        change = np.linalg.solve(jacobian, rate[chosen])
        z[chosen] -= change
        if np.linalg.norm(change) < 1e-11 * np.linalg.norm(z):
            return model, z
    message = "Newton's method did not converge"
    raise AssertionError(message)


def cosines(space):
    """Which coordinates are those of cosines in x, found from their fields."""
    x = space.grid_axes[0]
    found = np.zeros(space.n_real, dtype=bool)
    for i in np.flatnonzero(space.partners >= 0):
        grid = space.to_grid(np.eye(space.n_real)[i])
        angle = 2 * np.pi / space.lengths[0] * space.waves[i, 0] * x
        found[i] = np.abs(grid @ np.cos(angle)).max() > 1e-9
    return found


def amplitude(model, field, across, up_half_waves):
    """Coefficient of a product of functions in a field on the grid."""
    x, up = model.space.grid_axes
    shape = (
        np.sin(up_half_waves * np.pi * up)[:, None] * across(K_CRITICAL * x)[None, :]
    )
    grid = model.space.to_modes(np.broadcast_to(shape, (len(up), len(x))))
    norm = model.space.norm
    return np.sum(norm * field * grid) / np.sum(norm * grid * grid)


def test_steady_rolls():
    # Rolls of wavelength 2 sqrt 2 at Pr = 10, Ra = 1.2 critical, the configuration
    # of Veronis (1966), J. Fluid Mech. 26:49, and Moore & Weiss (1973), J. Fluid
    # Mech. 58:289. Numbers by an independent Newton solution, which are converged
    # to all digits with 10 to 14 modes each way; no published table was compared.
    # Psi and theta are coefficients of sin kx sin pi z, cos kx sin pi z, sin 2 pi z.
    rayleigh, prandtl = 1.2 * CRITICAL, 10.0
    model, z = steady_rolls(rayleigh, prandtl, (32, 32))
    psi, b = model.coefficients(z)
    theta = b / (prandtl * rayleigh)
    found = [
        model.nusselt_number(z),
        amplitude(model, psi, np.sin, 1),
        amplitude(model, theta, np.cos, 1),
        amplitude(model, theta, np.ones_like, 2),
    ]
    expected = [1.3439785627, 2.22555606155, 0.278292332101, -0.053099772367]
    np.testing.assert_allclose(found, expected, rtol=1e-6)


def test_nusselt_number_three_ways():
    # The mean flux, the gradient at the plate and the dissipation of variance are
    # one number in a steady state: Nu = 1 - theta_z at the plate = <|grad T|^2>,
    # and Ra (Nu - 1) = <zeta^2> (Howard 1963, J. Fluid Mech. 17:405).
    rayleigh, prandtl = 3.0 * CRITICAL, 5.0
    model, z = steady_rolls(rayleigh, prandtl, (32, 32))
    space = model.space
    psi, b = model.coefficients(z)
    theta = b / (prandtl * rayleigh)
    nusselt = model.nusselt_number(z)
    level = space.waves[:, 0] == 0
    m = space.waves[level, 1]
    scale = [
        space.to_grid(np.eye(space.n_real)[i])[:, 0] for i in np.flatnonzero(level)
    ]
    up = space.grid_axes[1]
    sine = [
        np.sum(s * np.sin(j * np.pi * up)) / np.sum(np.sin(j * np.pi * up) ** 2)
        for s, j in zip(scale, m, strict=True)
    ]
    at_plate = 1 - np.sum(theta[level] * np.array(sine) * m * np.pi)
    assert at_plate == pytest.approx(nusselt, rel=1e-6)  # truncation of the series
    variance = 1 + np.sum(space.norm * space.k_squared * theta**2)
    assert variance == pytest.approx(nusselt, rel=1e-9)
    enstrophy = np.sum(space.norm * (space.k_squared * psi) ** 2)
    assert enstrophy == pytest.approx(rayleigh * (nusselt - 1), rel=1e-9)
    assert model.budget(0.0, z)["nusselt_number"] == nusselt
    assert 2 < nusselt < 4


def test_weakly_nonlinear_flux():
    # Nu - 1 = 2 (r - 1) to leading order, whatever Pr (Malkus & Veronis 1958, J.
    # Fluid Mech. 4:225). The next order is (r - 1)^2 times a number near two.
    model, z = steady_rolls(1.002 * CRITICAL, 10.0, (16, 16))
    assert (model.nusselt_number(z) - 1) / 0.004 == pytest.approx(1, abs=0.005)
