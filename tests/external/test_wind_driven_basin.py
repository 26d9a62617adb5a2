"""Rossby modes and wind-driven gyres of a closed basin, against published results."""

import numpy as np
import pytest

from eddyshed.reduce.operators import galerkin
from eddyshed.solver.diagnostics import gyres
from eddyshed.solver.forcing import Wave, Wind, vorticity_source
from eddyshed.solver.integrate import integrate
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.stepping import IntegratingFactorRK4

SQUARE = (np.pi, np.pi)
PLACES = (0.05, 0.1, 0.25, 0.5, 0.75)
# Half waves in x and the number of points whose cutoff, (2 n - 1) // 3, they are.
POINTS = {2: 4, 4: 7, 8: 13, 16: 25, 32: 49, 64: 97, 128: 193, 256: 385}


def basin(half_waves, lengths, ny=8):
    space = Basin((POINTS[half_waves], ny), lengths)
    assert space.cutoff[0] == half_waves
    return space


def rows_of(space, m):
    """Coordinates of m half waves in y: the linear part keeps them to themselves."""
    return np.flatnonzero(space.waves[:, 1] == m)


def steady(settings, space, m=1):
    """Streamfunction of the linear steady flow under ``-sin(m pi y / Ly)``."""
    (_, ly), depth = space.lengths, 2.0
    wind = Wind(
        stress=1025.0 * depth * ly / (np.pi * m), waves=m, depth=depth, density=1025.0
    )
    source = vorticity_source(space, {"wind": wind})
    model = Barotropic(settings, space, source)
    rows = rows_of(space, m)
    matrix = model.linear(np.eye(model.size)[rows])[:, rows].T
    z = np.zeros(model.size)
    z[rows] = np.linalg.solve(matrix, -model.forcing(0.0)[rows])
    return model.streamfunction(z)


def at(space, psi, x, y):
    """Value of a streamfunction at a point, by its series."""
    (k, m), (lx, ly) = space.waves.T, space.lengths
    return psi @ (np.sin(np.pi * k * x / lx) * np.sin(np.pi * m * y / ly))


BASIN_MODES = [
    (2, 0.26842246),
    (4, 0.35118432),
    (8, 0.35323327),
    (16, 0.35351032),
    (32, 0.35354778),
    (64, 0.35355268),
]


@pytest.mark.parametrize(("half_waves", "frequency"), BASIN_MODES)
def test_basin_modes_as_truncated(half_waves, frequency):
    # Rossby modes of [0, pi]^2 (Longuet-Higgins 1964, Proc. R. Soc. A 279:446;
    # Pedlosky, Geophysical Fluid Dynamics, 1987, section 3.25) in a sine-Galerkin
    # truncation with these half waves in x: the frequency of the first, over beta,
    # from an independent computation with eight digits.
    space = basin(half_waves, SQUARE)
    model = Barotropic(BarotropicSettings(beta=3.0), space)
    rows = rows_of(space, 1)
    matrix = model.linear(np.eye(model.size)[rows])[:, rows].T
    found = np.linalg.eigvals(matrix)
    assert np.abs(found.real).max() < 1e-12  # no mode grows: round-off
    assert found.imag.max() / 3.0 == pytest.approx(frequency, abs=1e-8)
    assert model.fastest_frequency == pytest.approx(found.imag.max(), rel=1e-12)


@pytest.mark.parametrize(
    ("wave", "inverse_square_radius"),
    [((1, 1), 0), ((2, 1), 0), ((2, 2), 0), ((1, 1), 3)],
)
def test_basin_modes_tend_to_the_published_frequency(wave, inverse_square_radius):
    # omega = beta / (2 sqrt(m^2 + n^2 + F)) (Longuet-Higgins 1964; Pedlosky 1987).
    space = basin(64, SQUARE)
    radius = np.inf if inverse_square_radius == 0 else inverse_square_radius**-0.5
    model = Barotropic(BarotropicSettings(beta=1.0, deformation_radius=radius), space)
    rows = rows_of(space, wave[1])
    matrix = model.linear(np.eye(model.size)[rows])[:, rows].T
    expected = 0.5 / np.sqrt(wave[0] ** 2 + wave[1] ** 2 + inverse_square_radius)
    # The error goes with the cube of the half waves kept: 1e-6 here, more in
    # proportion to the square of the mode's number.
    assert np.abs(np.linalg.eigvals(matrix).imag - expected).min() < 1e-5


def test_a_basin_mode_turns_in_a_run():
    # psi = cos(beta x / (2 omega) + omega t) sin(x) sin(y), omega as above: after
    # half a period it has changed its sign. It is linear; a small amplitude keeps
    # the advection out.
    space = Basin((48, 8), SQUARE)
    beta, omega = 2.0, 2.0 / np.sqrt(8)
    model = Barotropic(BarotropicSettings(beta=beta), space)
    x, y = (part[np.newaxis] for part in space.grid_axes)
    psi = np.cos(beta * x / (2 * omega)) * np.sin(x) * np.sin(y.T)
    start = 1e-9 * model.coordinates(space.to_modes(psi))
    z, steps = start.copy(), 200
    stepper = IntegratingFactorRK4(model, np.pi / omega / steps)
    for _ in integrate(stepper, z, first_step=0, last_step=steps, energy_bound=1.0):
        pass
    # Coefficients of the streamfunction fall with the third power of the half waves
    # M, so the part of the mode that is cut off has M^(-3/2) of its energy norm,
    # times the last coefficient's factor, seen as 0.1: 7e-4 for M = 31.
    assert np.linalg.norm(z + start) < 2e-3 * np.linalg.norm(start)
    # Energy is exact but for Runge-Kutta's loss, (omega h)^5 / 72 a step.
    assert z @ z == pytest.approx(start @ start, rel=1e-8)


def test_rossby_wave_in_a_channel():
    # cos(kx) sin(ly) is a sum of two plane waves of one frequency, omega =
    # -beta k / (K^2 + F) (Rossby 1939, J. Mar. Res. 2:38; Pedlosky 1987, 3.17):
    # k = 3, l = 4, F = 11, beta = 10 has -0.8333, F = 0 has -1.2; it travels west.
    for f, omega in ((0.0, -1.2), (11.0, -0.833333333333)):
        space = Channel((16, 16), (2 * np.pi, np.pi))
        radius = np.inf if f == 0 else f**-0.5
        model = Barotropic(
            BarotropicSettings(beta=10.0, deformation_radius=radius), space
        )
        z = model.coordinates(space.wave((3, 4), 0.3))
        stepper = IntegratingFactorRK4(model, 0.01)
        for _ in integrate(stepper, z, first_step=0, last_step=100, energy_bound=1e3):
            pass
        # One K^2: exact at any amplitude; round-off over 100 steps.
        expected = model.coordinates(space.wave((3, 4), 0.3 - omega * 1.0))
        assert np.abs(z - expected).max() < 1e-10


STOMMEL_TRUNCATED = {
    16: 0.4302128352,
    32: 0.4334303184,
    64: 0.4337976405,
    128: 0.4338391512,
}


def stommel(eps, x):
    """Stommel's gyre at y = 1/2: eps lap psi + psi_x = -sin(pi y), unit square."""
    root = np.sqrt(1 + 4 * np.pi**2 * eps**2)
    a, b = (-1 + root) / (2 * eps), (-1 - root) / (2 * eps)
    p = (1 - np.exp(b)) / (np.exp(a) - np.exp(b))
    return (1 - p * np.exp(a * x) - (1 - p) * np.exp(b * x)) / (eps * np.pi**2)


@pytest.mark.parametrize(("half_waves", "value"), STOMMEL_TRUNCATED.items())
def test_stommel_gyre_as_truncated(half_waves, value):
    # Stommel (1948), Trans. AGU 29:202, in a sine-Galerkin truncation, psi(1/2, 1/2)
    # for eps = 0.05 from an independent computation with ten digits.
    space = basin(half_waves, (1.0, 1.0))
    psi = steady(BarotropicSettings(beta=1.0, drag=0.05), space)
    assert at(space, psi, 0.5, 0.5) == pytest.approx(value, abs=1e-9)


def test_stommel_gyre_converges_with_order_three():
    # The derivative of a sine series is one of cosines, so coefficients fall with
    # the third power (Fourier); a test of spectral accuracy would be wrong.
    exact, errors = stommel(0.05, 0.5), []
    assert exact == pytest.approx(0.433844656763, abs=1e-11)  # Stommel's formula
    for half_waves in (32, 64, 128):
        space = basin(half_waves, (1.0, 1.0))
        psi = steady(BarotropicSettings(beta=1.0, drag=0.05), space)
        errors.append(abs(at(space, psi, 0.5, 0.5) - exact))
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    np.testing.assert_allclose(orders, 3.0, atol=0.25)  # seen: 3.14, 3.10


@pytest.mark.parametrize("eps", [0.1, 0.05])
def test_stommel_gyre_profile(eps):
    space = basin(128, (1.0, 1.0))
    psi = steady(BarotropicSettings(beta=1.0, drag=eps), space)
    for x in PLACES:
        # Third order in half waves: about 6e-6 at 128, and more in the layer.
        assert at(space, psi, x, 0.5) == pytest.approx(stommel(eps, x), abs=1e-4)


@pytest.mark.parametrize(
    ("eps", "place", "transport"),
    [(0.1, 0.2434923505, 0.459899764972), (0.05, 0.1559898890, 0.645402361358)],
)
def test_transport_of_stommels_gyre(eps, place, transport):
    # The maximum of Stommel's formula, here `stommel`, found to ten digits: it is the
    # transport of the gyre and of its boundary current, and lies at the width of that.
    space = basin(128, (1.0, 1.0), ny=24)
    psi = steady(BarotropicSettings(beta=1.0, drag=eps), space)
    found = gyres(*space.grid_axes, space.to_grid(psi))
    # The parabola through points pi / 24 of a sine apart misses its top by
    # (pi / 24)^3 / 16 of it, 1.4e-4, at most; the truncation is good to 1e-5.
    assert found.greatest == pytest.approx(transport, rel=2e-4)
    assert found.boundary_transport == found.greatest
    # A tenth of a spacing of the grid: the ripple of the truncation, two spacings
    # long, moves the top.
    assert found.greatest_at == pytest.approx((place, 0.5), abs=5e-4)
    assert found.boundary_width == found.greatest_at[0]
    # One gyre only: what turns the other way is the ripple of the truncation.
    assert abs(found.least) < 1e-3 * transport


def test_transport_of_the_gulf_stream_of_1948():
    # Stommel (1948) with his own numbers, from memory: a basin of 1e9 by 2 pi 1e8
    # cm, 2e4 cm deep, under 1 dyn cm-2, R = 0.02 cm s-1, df/dy = 1e-13 cm-1 s-1, so
    # that lap psi + 1e-7 psi_x = -2.5e-7 sin(pi y / b): by his formula psi is greatest,
    # 2.0954323267e9 cm2 s-1, at 0.047115 of the width from the western shore.
    space = basin(256, (1e9, 2 * np.pi * 1e8), ny=16)
    psi = 2.5e-13 * steady(BarotropicSettings(beta=1e-13, drag=1e-6), space)
    found = gyres(*space.grid_axes, space.to_grid(psi))
    # The layer is a hundredth of the basin wide: two and a half half waves, whose
    # coefficients fall with the third power; and the parabola in y, as above. The
    # ripple is stronger here: the place is good to a spacing of the grid.
    assert found.greatest == pytest.approx(2.0954323267e9, rel=2e-3)
    assert found.boundary_width == pytest.approx(0.047115e9, abs=1e9 / 385)


def test_sverdrup_balance_of_the_interior():
    # Sverdrup (1947), Proc. Natl. Acad. Sci. 33:318: beta v = curl of the stress, so
    # psi tends to (1 - x) sin(pi y), with an error of first order in eps.
    departures = []
    for eps in (0.04, 0.02):
        space = basin(128, (1.0, 1.0))
        psi = steady(BarotropicSettings(beta=1.0, drag=eps), space)
        departures.append(0.5 - at(space, psi, 0.5, 0.5))
    # By Stommel's formula 0.0526 and 0.0257, the latter 5.1 % of the flow.
    assert departures[1] == pytest.approx(0.025657, abs=1e-4)
    assert departures[0] / departures[1] == pytest.approx(2.0, abs=0.1)


MUNK = {  # width of the layer: psi at these places
    0.05: "0.793318640181 1.13482226082 0.742939712635 0.504894301293 0.249214424436",
    0.1: "0.355024206685 0.640866219453 0.916695520884 0.498319183876 0.221366601456",
}


@pytest.mark.parametrize(("width", "tolerance"), [(0.05, 1e-7), (0.1, 1e-8)])
def test_munk_gyre_with_slippery_walls(width, tolerance):
    # Munk (1950), J. Meteorol. 7:79: width^3 lap^2 psi - psi_x = sin(pi y), psi =
    # lap psi = 0 at the walls; from the roots of the quartic. Values at y = 1/2
    # computed independently; 128 half waves are good to 4e-8 and 1e-9.
    space = basin(128, (1.0, 1.0))
    psi = steady(BarotropicSettings(beta=1.0, viscosity=width**3), space)
    values = map(float, MUNK[width].split())
    for x, value in zip(PLACES, values, strict=True):
        assert at(space, psi, x, 0.5) == pytest.approx(value, abs=tolerance)


def test_four_mode_basin():
    # Veronis (1963), J. Atmos. Sci. 20:577: four sines on [0, pi]^2. With psi = sum
    # a_mn sin(mx) sin(ny) the projection is, by hand,
    #   a11' = -(4 beta / 3 pi) a21,
    #   a21' = (9/20) a11 a12 + (8 beta / 15 pi) a11,
    #   a12' = -(9/20) a11 a21 - (8 beta / 15 pi) a22,  a22' = (beta / 3 pi) a12,
    # each less (r + nu (m^2 + n^2)) a_mn + W_mn / (m^2 + n^2).
    beta, r, nu, wind = 1.7, 0.3, 0.05, 0.8
    space = Basin((8, 8), SQUARE)
    source = vorticity_source(space, {"wind": Wave(amplitude=wind, waves=(1, 1))})
    settings = BarotropicSettings(beta=beta, drag=r, viscosity=nu)
    model = Barotropic(settings, space, source)
    index = {label: i for i, label in enumerate(space.labels)}
    names = ("sin 1x sin 1y", "sin 2x sin 1y", "sin 1x sin 2y", "sin 2x sin 2y")
    chosen = [index[name] for name in names]
    units = np.eye(model.size)
    rest = np.delete(units, chosen, axis=0)
    operators = galerkin(model, units[chosen].T, rest.T, mean=np.zeros(model.size))
    # Coordinates are a times sqrt(m^2 + n^2) / 2 (energy of a sine, mean 1/4).
    scale = np.sqrt([2.0, 5.0, 5.0, 8.0]) / 2
    a = np.array([0.7, -0.4, 1.1, 0.5])
    x = a * scale
    rate = operators.F1 + operators.A11 @ x + np.einsum("ijk,j,k", operators.B111, x, x)
    a11, a21, a12, a22 = a
    advection = [0, 9 / 20 * a11 * a12, -9 / 20 * a11 * a21, 0]
    waves = [
        -4 * beta / (3 * np.pi) * a21,
        8 * beta / (15 * np.pi) * a11,
        -8 * beta / (15 * np.pi) * a22,
        beta / (3 * np.pi) * a12,
    ]
    k2 = np.array([2.0, 5.0, 5.0, 8.0])
    expected = np.array(advection) + waves - (r + nu * k2) * a
    expected[0] -= wind / 2
    np.testing.assert_allclose(rate / scale, expected, atol=1e-12)  # round-off


def test_wind_in_pascals():
    # tau = -T cos(l y): its curl over density and depth is -T l sin(l y) / (rho H),
    # that is negative, driving a clockwise gyre, in the south of a basin.
    space = Basin((16, 16), (2e6, 1e6))
    wind = Wind(stress=0.1, waves=2, depth=500.0, density=1000.0)
    source = space.to_grid(vorticity_source(space, {"wind": wind}))
    size = 0.1 * 2 * np.pi / 1e6 / (1000.0 * 500.0)
    middle = source[:, 6:10].mean(axis=1)
    y = space.grid_axes[1]
    # A truncated square wave in x: Gibbs' ripples, 10 % with five of its terms.
    np.testing.assert_allclose(
        middle, -size * np.sin(2 * np.pi * y / 1e6), atol=0.1 * size
    )
