"""The advection of the barotropic ocean, against published results."""

import numpy as np
import pytest
from scipy.special import ellipj, ellipk

from eddyshed.solver.integrate import integrate
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.stepping import IntegratingFactorRK4


def ocean(points, lengths=(2 * np.pi, 2 * np.pi), **parameters):
    return Barotropic(BarotropicSettings(**parameters), Periodic(points, lengths))


def broadband(model, seed=0):
    """A state with power on every mode, the hardest case for aliasing."""
    return np.random.default_rng(seed).standard_normal(model.size)


@pytest.mark.parametrize(
    ("points", "cutoff"), [(32, 10), (48, 15), (64, 21), (96, 31), (128, 42)]
)
def test_dealiasing_rule(points, cutoff):
    # Orszag (1971), J. Atmos. Sci. 28:1074: a quadratic product on n points is
    # free of aliasing below the cutoff where 3 cutoff < n, so 96 keeps 31, not 32.
    assert Periodic((points, points), (1.0, 1.0)).cutoff == (cutoff, cutoff)


@pytest.mark.parametrize("points", [(16, 16), (24, 16), (32, 48)])
def test_advection_is_the_exact_convolution(points):
    # J(psi, zeta) on a grid three times as fine, by the definition and with
    # numpy's own transforms: a general-purpose library and another formula.
    lengths = (2 * np.pi, 3.0)
    space = Periodic(points, lengths)
    rng = np.random.default_rng(1)
    psi = rng.standard_normal(space.n_real)
    (kx, ky), (mx, my) = (
        np.stack([space.wavenumber_x, space.wavenumber_y])[:, ::2],
        space.waves[::2].T,
    )
    fine = 3 * points[1], 3 * points[0]

    def grid(modes):
        full = np.zeros(fine, dtype=complex)
        full[my, mx], full[-my, -mx] = modes, modes.conj()
        return np.fft.ifft2(full * full.size).real

    zeta = -space.k_squared * psi
    (a, b), (dx, dy) = (psi.view(complex), zeta.view(complex)), (1j * kx, 1j * ky)
    product = grid(dx * a) * grid(dy * b) - grid(dy * a) * grid(dx * b)
    expected = (np.fft.fft2(product)[my, mx] / product.size).view(float)
    for found in (space.advection(psi), space.jacobian(psi, zeta)):
        # Round-off of transforms of 10^4 points, relative to the largest coefficient.
        assert np.abs(found - expected).max() < 1e-13 * np.abs(expected).max()


@pytest.mark.parametrize("radius", [np.inf, 0.4])
@pytest.mark.parametrize("points", [(32, 32), (48, 24)])
def test_energy_and_enstrophy_of_advection(points, radius):
    # The truncated advection conserves energy and potential enstrophy exactly
    # (Kraichnan 1967, Phys. Fluids 10:1417; Salmon, Lectures on Geophysical Fluid
    # Dynamics, 1998): its work vanishes against the sum of its terms' sizes.
    model = ocean(points, deformation_radius=radius)
    z = broadband(model)
    work = z * model.bilinear(z, z)
    stiffness = model.space.k_squared + radius**-2
    # Bound: round-off of a sum of 10^3 terms, each good to 1e-15.
    assert abs(work.sum()) < 1e-13 * np.abs(work).sum()
    assert abs((stiffness * work).sum()) < 1e-13 * np.abs(stiffness * work).sum()


def test_energy_and_enstrophy_of_a_known_field():
    # psi = cos x + sin(2 y) / 2: E = <|grad psi|^2> / 2 = 1/2 and Z = <zeta^2> / 2
    # = 5/4, by hand.
    model = ocean((16, 16))
    x, y = model.space.grid_axes
    psi = np.cos(x)[None, :] + 0.5 * np.sin(2 * y)[:, None]
    budget = model.budget(0.0, model.coordinates(model.space.to_modes(psi)))
    assert budget["energy"] == pytest.approx(0.5, rel=1e-13)
    assert budget["enstrophy"] == pytest.approx(1.25, rel=1e-13)


def lorenz_state(model, a, f, g, k=2, m=1):
    """Lorenz's three amplitudes as a state."""
    x, y = model.space.grid_axes
    x, y = x[None, :], y[:, None]
    psi = (
        -a / m**2 * np.cos(m * y)
        - f / k**2 * np.cos(k * x)
        - 2 * g / (k**2 + m**2) * np.sin(m * y) * np.sin(k * x)
    )
    return model.coordinates(model.space.to_modes(psi))


def test_lorenz_maximum_simplification_coefficients():
    # Lorenz (1960), Tellus 12:243: with psi as in `lorenz_state`, k = 2, l = 1, the
    # projection on the three patterns obeys A' = -FG/10, F' = 8 AG/5, G' = -3 AF/4.
    model = ocean((16, 16))
    patterns = np.array([lorenz_state(model, *row) for row in np.eye(3)])
    a, f, g = 1.0, 0.5, -0.3
    z = lorenz_state(model, a, f, g)
    norms = np.sum(patterns**2, axis=1)
    rates = patterns @ model.bilinear(z, z) / norms
    expected = [-f * g / 10, 8 * a * g / 5, -3 * a * f / 4]
    np.testing.assert_allclose(rates, expected, atol=1e-13)  # round-off


def test_lorenz_maximum_simplification_trajectory():
    # Lorenz (1960) solves the three equations by elliptic functions: from (1, .5, 0),
    # where G = 0 and A is least, A = A1 dn(s), F = F0 sn(s), G = G1 cn(s), with
    # s = w t + K(m), A1^2 = 1 + F0^2 / 16, G1^2 = 15 F0^2 / 32, m = F0^2 / (16 A1^2)
    # and w = A1 sqrt(6/5). The tendency is projected on the three patterns.
    model = ocean((16, 16))
    patterns = np.array([lorenz_state(model, *row) for row in np.eye(3)])
    norms = np.sum(patterns**2, axis=1)

    def rate(v):
        z = v @ patterns
        return patterns @ model.bilinear(z, z) / norms

    v, h = np.array([1.0, 0.5, 0.0]), 0.005
    found = {}
    for n in range(1, 2001):
        k1 = rate(v)
        k2 = rate(v + h / 2 * k1)
        k3 = rate(v + h / 2 * k2)
        k4 = rate(v + h * k3)
        v = v + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        if n * h in (1.0, 5.0, 10.0):
            found[n * h] = v
    a1 = np.sqrt(1 + 0.25 / 16)
    m = 0.25 / (16 * a1**2)
    w = a1 * np.sqrt(6 / 5)
    for t, (a, f, g) in found.items():
        sn, cn, dn, _ = ellipj(w * t + ellipk(m), m)
        assert a == pytest.approx(a1 * dn, abs=1e-8)  # RK4 error (w h)^4 t / 120
        assert f == pytest.approx(0.5 * sn, abs=1e-8)
        assert g == pytest.approx(np.sqrt(0.25 * 15 / 32) * cn, abs=1e-8)


def test_order_of_the_scheme_on_the_full_equation():
    # Classical Runge-Kutta with an integrating factor has order four (Canuto et al.,
    # Spectral Methods in Fluid Dynamics, 1988). Successive halvings.
    model = ocean((32, 32), beta=2.0, viscosity=0.02, drag=0.1)
    start = broadband(model, seed=3) / (1 + model.space.k_squared)

    def end(steps):
        z = start.copy()
        stepper = IntegratingFactorRK4(model, 0.8 / steps)
        for _ in integrate(stepper, z, first_step=0, last_step=steps, energy_bound=1e6):
            pass
        return z

    reference = end(1024)
    errors = [np.linalg.norm(end(n) - reference) for n in (32, 64, 128)]
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    # Within a tenth of nominal: the reference is good to 1e-4 of the last error.
    np.testing.assert_allclose(orders, 4.0, atol=0.1)


@pytest.mark.parametrize(("factor", "grows"), [(0.999, False), (1.001, True)])
def test_stability_limit_on_the_imaginary_axis(factor, grows):
    # Classical Runge-Kutta of order four is stable on the imaginary axis up to
    # 2 sqrt(2) = 2.828427 (Hairer & Wanner, Solving Ordinary Differential
    # Equations II, section IV.2). The rotation is put in the explicit part.
    class Rotation:
        def exact_flow(self, interval):
            return np.copy

        def explicit(self, t, z):
            return np.array([-z[1], z[0]])

    stepper = IntegratingFactorRK4(Rotation(), factor * 2 * np.sqrt(2))
    z = np.array([1.0, 0.0])
    for _ in integrate(stepper, z, first_step=0, last_step=4000, energy_bound=1e300):
        pass
    assert (np.linalg.norm(z) > 1) == grows
