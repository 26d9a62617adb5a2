"""Instability, a dipole and statistical equilibrium, against published results."""

import numpy as np
import pytest
from scipy import optimize
from scipy.special import jn_zeros, jv

from eddyshed.solver.integrate import integrate
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.stepping import IntegratingFactorRK4
from eddyshed.solver.streams import low_coordinates

BOX = (2 * np.pi, 2 * np.pi)


def kolmogorov_growth(n, k, viscosity, beta=0.0, drag=0.0, cutoff=42):
    """Fastest growth of wavenumber k on the flow u = sin(ny), kept steady."""
    space = Periodic((8 if k < 3 else 12, 3 * cutoff + 2), BOX)
    settings = BarotropicSettings(viscosity=viscosity, beta=beta, drag=drag)
    model = Barotropic(settings, space)
    # u = -psi_y.
    basic = model.coordinates(space.wave((0, n)) / n)
    across, along = space.waves.T
    chosen = np.flatnonzero((across == k) & (along % n == 0))
    units = np.eye(model.size)[chosen]
    rates = model.linear(units) + 2 * model.bilinear(units, basic)
    others = np.delete(rates, chosen, axis=1)
    assert np.abs(others).max() < 1e-10  # these perturbations are a closed family
    values = np.linalg.eigvals(rates[:, chosen].T)
    return values[values.real.argmax()]


KOLMOGOROV = [
    ((4, 1, 0.05, 0.0, 0.0), 0.324610755110),
    ((4, 2, 0.05, 0.0, 0.0), 0.553886088854),
    ((4, 3, 0.05, 0.0, 0.0), 0.292991217548),
    ((4, 1, 0.10, 0.0, 0.0), 0.139604298807),
    ((4, 1, 0.20, 0.0, 0.0), -0.067642340401),
    ((2, 1, 0.10, 0.0, 0.0), 0.276943046874),
    ((4, 2, 0.05, 1.0, 0.0), 0.539249487465 + 0.373353835675j),
    ((4, 2, 0.01, 2.0, 0.05), 0.823244718411 + 0.656369352646j),
]


@pytest.mark.parametrize(("case", "growth"), KOLMOGOROV)
def test_kolmogorov_flow_instability(case, growth):
    # Meshalkin & Sinai (1961), J. Appl. Math. Mech. 25:1700; Sivashinsky (1985),
    # Physica D 17:243; with beta Manfroi & Young (2002), Physica D 162:208. Growth
    # rates with infinitely many harmonics, from an independent computation.
    found = kolmogorov_growth(*case)
    # The other computation was cut at fewer harmonics: good to 1e-8 (one is off by
    # 2.4e-9).
    assert found.real == pytest.approx(np.real(growth), abs=1e-8)
    assert abs(found.imag) == pytest.approx(np.imag(growth), abs=1e-8)


@pytest.mark.parametrize(
    ("n", "k", "critical"), [(4, 1, 0.161063749529), (4, 2, 0.122016605803)]
)
def test_kolmogorov_flow_critical_viscosity(n, k, critical):
    # Re = 1 / (nu n) is 1.552 at k / n = 1/4 and 2.049 at 1/2, and tends to sqrt(2)
    # for long waves (Meshalkin & Sinai 1961).
    found = optimize.brentq(
        lambda nu: kolmogorov_growth(n, k, nu).real, 0.1, 0.2, xtol=1e-9
    )
    assert found == pytest.approx(critical, abs=1e-7)
    if k == 1:
        long = optimize.brentq(
            lambda nu: kolmogorov_growth(10, 1, nu).real, 0.05, 0.1, xtol=1e-9
        )
        # k / n = 0.1: 1.435558 from an independent computation.
        assert 1 / (10 * long) == pytest.approx(1.435558, abs=2e-6)


@pytest.mark.slow  # 256^2 points are needed to hold the edge of the dipole
def test_lamb_chaplygin_dipole():
    # Lamb, Hydrodynamics (1932), section 165; Meleshko & van Heijst (1994), J. Fluid
    # Mech. 272:157: inside r < a zeta = -(2 U kappa / J0(kappa a)) J1(kappa r)
    # sin(theta), kappa a the first zero of J1. Without mean flow the images in a
    # square box of side L slow it by half the impulse over the area:
    # U (1 - pi a^2 / L^2), 0.968584 U for L = 10 a.
    box, points = 10.0, 256
    space = Periodic((points, points), (box, box))
    model = Barotropic(BarotropicSettings(hyperviscosity_time=0.05), space)
    x, y = np.meshgrid(*space.grid_axes)
    dx, dy = x - box / 2, y - box / 2
    r = np.hypot(dx, dy)
    kappa = jn_zeros(1, 1)[0]
    sine = np.divide(dy, r, out=np.zeros_like(r), where=r > 0)
    zeta = np.where(r < 1, -2 * kappa / jv(0, kappa) * jv(1, kappa * r) * sine, 0.0)
    # Its largest vorticity is 11.0713 U / a, between the points of the grid.
    assert np.abs(zeta).max() == pytest.approx(11.071306976, rel=1e-3)
    psi = -space.to_modes(zeta) / space.k_squared

    def place(z):
        """Centre of the enstrophy along x, by its phase."""
        power = model.fields(z)["vorticity"] ** 2
        phase = np.angle(np.sum(power * np.exp(2j * np.pi * x / box)))
        return phase / (2 * np.pi) * box

    z, step, steps = model.coordinates(psi), 0.01, 100
    stepper = IntegratingFactorRK4(model, step)
    places = {}
    for n in integrate(stepper, z, first_step=0, last_step=steps, energy_bound=1e3):
        if n in (20, steps):  # the first few steps smooth its edge
            places[n] = place(z)
    speed = (places[steps] - places[20]) / (step * (steps - 20))
    # The correction is of order (a / L)^2; the next, (a / L)^4, is 1e-4 times a
    # number of order one. An independent run gave 0.96800.
    assert speed == pytest.approx(1 - np.pi / box**2, rel=2e-3)


@pytest.mark.parametrize(
    ("radius", "points"),
    [(1, 5), (2, 13), (3, 29), (4, 49), (5, 81), (8, 197), (10, 317), (16, 797)],
)
def test_lattice_points_in_a_circle(radius, points):
    # Gauss's circle problem: lattice points with |k| <= R (Hardy & Wright, An
    # Introduction to the Theory of Numbers, section 18.7), without the origin one
    # real coordinate each.
    model = Barotropic(BarotropicSettings(), Periodic((50, 50), BOX))
    assert len(low_coordinates(model, radius)) == points - 1


def equilibrium(k2, energy, enstrophy, h2=0.0):
    """Parameters a, b for given mean energy and potential enstrophy.

    Sums run over real coordinates, two for each pair of opposite wavevectors.
    """

    def excess(logs):
        a, b = np.exp(logs)
        stiff = a + b * k2
        noise = 1 / stiff
        mean = h2 / stiff**2
        found = [
            np.sum(noise + k2 * b**2 * mean) / 2,
            np.sum(k2 * noise + a**2 * mean) / 2,
        ]
        return np.log(found) - np.log([energy, enstrophy])

    solution = optimize.root(excess, np.log([40.0, 8.0]), tol=1e-12)
    assert solution.success
    return np.exp(solution.x)


def test_equilibrium_of_a_known_truncation():
    # Kraichnan & Montgomery (1980), Rep. Prog. Phys. 43:547: energy per wavevector
    # 1 / (2 (a + b K^2)). For the 196 wavevectors with K^2 <= 64, E = 1/2, Z = 10:
    # a = 43.5907061627, b = 7.6204646919, from an independent computation.
    k = np.arange(-8, 9)
    k2 = (k[:, np.newaxis] ** 2 + k**2).ravel().astype(float)
    k2 = k2[(k2 > 0) & (k2 <= 64)]
    a, b = equilibrium(k2, 0.5, 10.0)
    assert (a, b) == pytest.approx((43.5907061627, 7.6204646919), rel=1e-9)


MEMBERS, SPIN_UP, LENGTH, STEP = 6, 20.0, 120.0, 0.02  # an eddy turns in 1.4


def inviscid_runs(model, energy, enstrophy, stiffness, key):
    """States of each member after its spin-up, one in a time unit."""
    runs = []
    for member in range(MEMBERS):
        rng = np.random.default_rng([key, member])
        z = random_state(model, energy, enstrophy, stiffness, rng)
        stepper = IntegratingFactorRK4(model, STEP)
        steps = integrate(
            stepper, z, first_step=0, last_step=round(LENGTH / STEP), energy_bound=1e3
        )
        due = (n for n in steps if n * STEP > SPIN_UP and n % 50 == 0)
        runs.append([z.copy() for _ in due])
        # Runge-Kutta loses a little; the equilibrium must not drift with it.
        assert z @ z / 2 == pytest.approx(energy, rel=2e-3)
    return np.array(runs)


def random_state(model, energy, enstrophy, stiffness, rng):
    """Random phases with given energy and enstrophy <(zeta + h)^2> / 2."""
    k2 = model.space.k_squared
    h = model.topography
    h = np.zeros(model.size) if h is None else h * np.sqrt(model.space.norm)
    phases = rng.standard_normal(model.size) / np.sqrt(stiffness)

    def state(slope):
        z = phases * k2**slope
        return z * np.sqrt(2 * energy / (z @ z))

    def excess(slope):
        q = h - np.sqrt(k2) * state(slope)
        return q @ q / 2 - enstrophy

    return state(optimize.brentq(excess, -3.0, 3.0))


def mean_and_error(values):
    """Mean over members and its standard error."""
    return np.mean(values, axis=0), np.std(values, axis=0, ddof=1) / np.sqrt(MEMBERS)


@pytest.mark.slow  # time averages of six members
@pytest.mark.parametrize("beta", [0.0, 3.0])
def test_inviscid_equilibrium(beta):
    # Kraichnan (1967), Phys. Fluids 10:1417; beta does not enter (Salmon, Holloway &
    # Hendershott 1976, J. Fluid Mech. 75:691).
    space = Periodic((24, 24), BOX)
    model = Barotropic(BarotropicSettings(beta=beta), space)
    k2 = space.k_squared
    a, b = equilibrium(k2, 0.5, 10.0)
    shells = [k2 <= 2, (k2 > 2) & (k2 <= 10), (k2 > 10) & (k2 <= 40), k2 > 40]
    runs = inviscid_runs(model, 0.5, 10.0, a + b * k2, 3)
    power = np.mean(runs**2, axis=1) * (a + b * k2)
    ratios = np.array([power[:, shell].mean(axis=1) for shell in shells]).T
    mean, error = mean_and_error(ratios)
    # Four standard errors, of six members. That energy and enstrophy are fixed here
    # and vary in the theory makes an error of 1 / 224, the number of coordinates.
    assert np.all(error < [0.08, 0.06, 0.015, 0.015])  # else this shows nothing
    assert np.all(np.abs(mean - 1) < 4 * error + 1 / 224)


@pytest.mark.slow  # time averages of six members
def test_inviscid_equilibrium_over_topography():
    # Salmon, Holloway & Hendershott (1976), J. Fluid Mech. 75:691: the mean flow
    # follows the topography, <psi_k> = h_k / (mu + K^2) with mu = a / b, and for the
    # rest the spectrum is that without.
    space = Periodic((24, 24), BOX)
    h = (
        2 * space.wave((1, 0))
        + 1.5 * space.wave((2, 1), 0.4)
        + space.wave((1, 2), -np.pi / 2)
    )
    model = Barotropic(BarotropicSettings(), space, topography=h)
    k2 = space.k_squared
    a, b = equilibrium(k2, 0.5, 10.0, space.norm * h**2)
    waves = [(1, 0), (2, 1), (1, 2)]
    pairs = [np.flatnonzero(np.all(space.waves == w, axis=1)) for w in waves]
    runs = inviscid_runs(model, 0.5, 10.0, a + b * k2, 7)
    psi = model.streamfunction(runs.mean(axis=1))
    # Part of psi along h, over h, of each of its three waves.
    found = np.array([psi[:, p] @ h[p] / (h[p] @ h[p]) for p in pairs]).T
    expected = np.array([1 / (a / b + k2[p[0]]) for p in pairs])
    mean, error = mean_and_error(found)
    assert np.all(error < 0.05 * expected)  # else this shows nothing
    # Four standard errors and the finite number of modes, as above.
    assert np.all(np.abs(mean - expected) < 4 * error + expected / 224)
