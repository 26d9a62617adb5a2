"""The three spaces, against their functions and integrals by quadrature."""

from dataclasses import dataclass

import numpy as np
import pytest

from eddyshed.solver.errors import DataError
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic

SPACES = {"periodic": Periodic, "channel": Channel, "basin": Basin}
BOX = (2.0, 3.0)


def space_of(name, points=(16, 12)):
    return SPACES[name](points, BOX)


def vector(space, seed=0):
    """A field with power on every mode, the hardest case for aliasing."""
    return np.random.default_rng(seed).standard_normal(space.n_real)


@dataclass
class Functions:
    """Each function of a space with its derivatives at points, (points, n_real)."""

    value: np.ndarray
    x: np.ndarray
    y: np.ndarray
    weights: np.ndarray

    def project(self, field):
        """Coefficients of a field given at the points."""
        inner = (self.weights * field) @ self.value
        return inner / (self.weights @ self.value**2)


def wave_functions(length, k, part, x):
    """Values and derivative of 2 cos(kx), or -2 sin(kx), or 1 at k = 0."""
    q = 2 * np.pi * k / length
    if part == 0:
        return 2 * np.cos(q * x), -2 * q * np.sin(q * x)
    return -2 * np.sin(q * x), -2 * q * np.cos(q * x)


def functions(name, space, x, y, weights):
    """What the coefficients of a space multiply, from its definition."""
    (lx, ly), columns = BOX, []
    for i, (k, m) in enumerate(space.waves):
        part = i % 2 if name == "periodic" else int(0 <= space.partners[i] < i)
        up = np.sin(np.pi * m * y / ly), np.pi * m / ly * np.cos(np.pi * m * y / ly)
        if name == "periodic":
            qx, qy = 2 * np.pi * k / lx, 2 * np.pi * m / ly
            angle = qx * x + qy * y
            wave = (2 * np.cos(angle), -2 * np.sin(angle))
            slope = -2 * np.sin(angle), -2 * np.cos(angle)
            columns.append((wave[part], qx * slope[part], qy * slope[part]))
            continue
        if name == "basin":
            q = np.pi * k / lx
            along = np.sin(q * x), q * np.cos(q * x)
        elif k == 0:
            along = np.ones_like(x), np.zeros_like(x)
        else:
            along = wave_functions(lx, k, part, x)
        columns.append((along[0] * up[0], along[1] * up[0], along[0] * up[1]))
    value, by_x, by_y = (np.array(rows).T for rows in zip(*columns, strict=True))
    return Functions(value, by_x, by_y, weights)


def nodes(length, periodic, cutoff):
    """Points and weights that integrate products of three functions exactly."""
    if periodic:
        n = 4 * cutoff + 4
        return (np.arange(n) + 0.3) * length / n, np.full(n, 1 / n)
    # Gauss-Legendre: products of three have 1.5 M waves; 8 M + 30 points give
    # round-off (the quadrature converges faster than exponentially from pi M).
    x, weights = np.polynomial.legendre.leggauss(8 * cutoff + 30)
    return (x + 1) / 2 * length, weights / 2


def quadrature(name, space):
    periodic = (space.x_is_periodic, space.y_is_periodic)
    (x, wx), (y, wy) = (
        nodes(BOX[axis], periodic[axis], space.cutoff[axis]) for axis in (0, 1)
    )
    points = (part.ravel() for part in np.meshgrid(x, y))
    return functions(name, space, *points, np.outer(wy, wx).ravel())


def relative(found, expected):
    return np.abs(found - expected).max() / np.abs(expected).max()


@pytest.mark.parametrize("name", SPACES)
def test_grid_holds_the_functions(name):
    space = space_of(name)
    f = vector(space)
    x, y = (part.ravel() for part in np.meshgrid(*space.grid_axes))
    on_grid = functions(name, space, x, y, np.ones(len(x)))
    field = space.to_grid(f)
    # Sums of 200 terms, each good to 1e-16.
    assert relative(field.ravel(), on_grid.value @ f) < 1e-13
    u, v = space.velocity(f)
    assert relative(u.ravel(), -on_grid.y @ f) < 1e-13
    assert relative(v.ravel(), on_grid.x @ f) < 1e-13
    np.testing.assert_allclose(space.to_modes(field), f, atol=1e-13)


@pytest.mark.parametrize("name", SPACES)
def test_members_are_what_the_functions_are(name):
    space = space_of(name)
    exact = quadrature(name, space)
    norm = exact.weights @ exact.value**2
    np.testing.assert_allclose(space.norm, norm, rtol=1e-12)  # round-off of sums
    gradient = exact.weights @ (exact.x**2 + exact.y**2)
    np.testing.assert_allclose(space.k_squared, gradient / norm, rtol=1e-12)
    assert len(space.labels) == len(set(space.labels)) == space.n_real
    paired = space.partners >= 0
    assert np.all(space.partners[space.partners[paired]] == np.flatnonzero(paired))
    assert np.all(space.waves[space.partners[paired]] == space.waves[paired])


@pytest.mark.parametrize("name", SPACES)
def test_derivative_is_the_galerkin_projection(name):
    # For sines: 4 m n / (m^2 - n^2) over the length, by quadrature of
    # sin(mx) d/dx sin(nx). Antisymmetric: it does no work.
    space = space_of(name)
    exact = quadrature(name, space)
    matrix = space.ddx(np.eye(space.n_real)).T
    expected = np.array([exact.project(column) for column in exact.x.T]).T
    # Gauss-Legendre of 10^2 points, sums of 10^4 terms.
    np.testing.assert_allclose(matrix, expected, atol=1e-11 * np.abs(expected).max())
    work = space.norm[:, np.newaxis] * matrix
    np.testing.assert_array_equal(work, -work.T)


def test_derivative_in_the_basin_has_the_published_elements():
    # d/dx sin(nx) on [0, pi]: the coefficient of sin(mx) is 4 m n / (pi (m^2 - n^2)),
    # m + n odd (table of Fourier integrals; Gradshteyn & Ryzhik 2.531).
    space = Basin((8, 8), (np.pi, np.pi))
    index = {label: i for i, label in enumerate(space.labels)}
    matrix = space.ddx(np.eye(space.n_real)).T
    first, second = index["sin 1x sin 1y"], index["sin 2x sin 1y"]
    assert matrix[first, second] == pytest.approx(-0.848826363157, abs=1e-12)
    assert matrix[second, first] == pytest.approx(0.848826363157, abs=1e-12)


@pytest.mark.parametrize("name", SPACES)
def test_products_are_exact(name):
    # J(a, b) = a_x b_y - a_y b_x of the functions, projected by quadrature.
    space = space_of(name)
    exact = quadrature(name, space)
    a, b = vector(space, 1), vector(space, 2)

    def jacobian(f, g):
        field = (exact.x @ f) * (exact.y @ g) - (exact.y @ f) * (exact.x @ g)
        return exact.project(field)

    k2 = -space.k_squared
    symmetric = (jacobian(a, k2 * b) + jacobian(b, k2 * a)) / 2
    # Round-off of quadratures over 10^4 points of fields of 200 terms.
    assert relative(space.jacobian(a, b), jacobian(a, b)) < 1e-12
    assert relative(space.advection(a), jacobian(a, k2 * a)) < 1e-12
    assert relative(space.advection(a, b), symmetric) < 1e-12
    np.testing.assert_array_equal(space.advection(a, a), space.advection(a, a.copy()))


@pytest.mark.parametrize("name", SPACES)
@pytest.mark.parametrize("points", [(32, 32), (48, 20)])
def test_advection_conserves_energy_and_enstrophy(name, points):
    # Exact for the truncated equations (Kraichnan 1967, Phys. Fluids 10:1417;
    # Salmon, Lectures on Geophysical Fluid Dynamics, 1998), in each space.
    space = space_of(name, points)
    psi = vector(space)
    for other in (None, vector(space, 3)):
        # With a second field only the energy of psi in J(psi, .) is kept.
        rate = space.advection(psi) if other is None else space.jacobian(psi, other)
        weights = [1.0, space.k_squared] if other is None else [1.0]
        for weight in weights:
            work = space.norm * weight * psi * rate
            # Round-off of a sum of 10^3 terms, each good to 1e-15.
            assert abs(work.sum()) < 1e-13 * np.abs(work).sum()
    if other is not None:
        work = space.norm * other * space.jacobian(psi, other)
        assert abs(work.sum()) < 1e-13 * np.abs(work).sum()


@pytest.mark.parametrize(
    ("points", "half_waves"), [(8, 5), (16, 10), (25, 16), (64, 42)]
)
def test_dealiasing_rule_for_sines(points, half_waves):
    # On n cell centres cos(p x) and -cos((2n - p) x) agree, p in half waves: a
    # product of two fields of M is clean up to M where 2n - 2M > M, 3M < 2n.
    assert Basin((points, 8), BOX).cutoff[0] == half_waves
    assert Channel((8, points), BOX).cutoff[1] == half_waves
    j = np.arange(points) + 0.5
    p = half_waves + 1
    alias = -np.cos(np.pi * (2 * points - p) * j / points)
    np.testing.assert_allclose(np.cos(np.pi * p * j / points), alias, atol=1e-12)
    assert 3 * half_waves < 2 * points <= 3 * (half_waves + 1)


def test_one_mode_more_would_be_aliased():
    # Products of sines, as the transforms see them, with M = 10 and with M = 11 on
    # 16 points: the coefficient of cos(M x) in sin(M x)^2 is 0 by hand.
    j = (np.arange(16) + 0.5) * np.pi / 16

    def spurious(m):
        return 2 * np.mean(np.sin(m * j) ** 2 * np.cos(m * j)), 2 * np.mean(
            np.sin(m * j) * np.sin((m - 1) * j) * np.cos((32 - 2 * m + 1) * j)
        )

    assert abs(spurious(10)[0]) < 1e-15
    # sin(11x) sin(10x) has cos(21x), seen as -cos(11x), within the range of M = 11.
    assert spurious(11)[1] == pytest.approx(0.5, abs=1e-14)


@pytest.mark.parametrize("name", SPACES)
def test_waves_and_sines_as_patterns(name):
    space = space_of(name)
    x, y = (part.ravel() for part in np.meshgrid(*space.grid_axes))
    qx = np.pi * x / BOX[0] * (2 if space.x_is_periodic else 1)
    qy = np.pi * y / BOX[1] * (2 if space.y_is_periodic else 1)
    if name == "periodic":
        expected = np.cos(-2 * qx + 3 * qy + 0.4)
        found = space.to_grid(space.wave((-2, 3), 0.4))
    elif name == "channel":
        expected = np.cos(-2 * qx + 0.4) * np.sin(3 * qy)
        found = space.to_grid(space.wave((-2, 3), 0.4))
    else:
        expected = np.sin(2 * qx) * np.sin(3 * qy)
        found = space.to_grid(space.wave((2, 3)))
    np.testing.assert_allclose(found.ravel(), expected, atol=1e-13)  # round-off
    sine = space.sine_in_y(2)
    if name == "basin":
        # The square wave's series: 4 / (pi m) for odd m (Fourier).
        odd = (space.waves[:, 0] % 2 == 1) & (space.waves[:, 1] == 2)
        np.testing.assert_allclose(sine[odd], 4 / (np.pi * space.waves[odd, 0]))
        assert not sine[~odd].any()
    else:
        field = space.to_grid(sine).ravel()
        np.testing.assert_allclose(field, np.sin(2 * qy), atol=1e-13)


@pytest.mark.parametrize(
    ("name", "waves", "phase", "text"),
    [
        ("periodic", (6, 0), 0.0, "up to 5 in x and 3 in y"),
        ("periodic", (0, 0), 0.0, "not both 0"),
        ("channel", (2, 0), 0.0, "1 to 7 half waves in y"),
        ("channel", (6, 1), 0.0, "-5 to 5 waves in x"),
        ("basin", (0, 1), 0.0, "1 to 10 half waves in x and 1 to 7"),
        ("basin", (1, 1), 0.5, "no phase"),
    ],
)
def test_a_pattern_that_does_not_fit_is_refused(name, waves, phase, text):
    with pytest.raises(DataError, match=text):
        space_of(name).wave(waves, phase)


@pytest.mark.parametrize("name", SPACES)
def test_exact_flow_of_damping_and_rotation(name):
    # d/dt (a cos, b sin) turns as the complex coefficient a + ib times exp(i w t).
    space = space_of(name)
    f = vector(space)
    damping = 0.1 * space.k_squared
    turning = 0.7 * space.waves[:, 0] if space.x_is_periodic else None
    end = space.flow(damping, turning, 0.3)(np.stack([f, 2 * f]))
    expected = f * np.exp(-0.3 * damping)
    if turning is not None:
        paired = np.flatnonzero(space.partners > np.arange(space.n_real))
        other = space.partners[paired]
        angle = 0.3 * turning[paired]
        a, b = expected[paired], expected[other]
        expected[paired] = a * np.cos(angle) - b * np.sin(angle)
        expected[other] = b * np.cos(angle) + a * np.sin(angle)
    np.testing.assert_allclose(end, [expected, 2 * expected], atol=1e-13)
    if turning is None:
        with pytest.raises(ValueError, match="give None"):
            space.flow(damping, damping, 0.3)
