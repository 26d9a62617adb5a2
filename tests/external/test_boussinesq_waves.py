"""Linear part of the Boussinesq slice: internal waves, and any wave at all."""

import numpy as np
import pytest
from scipy import linalg

from eddyshed.solver.errors import DataError
from eddyshed.solver.integrate import integrate
from eddyshed.solver.oceans.boussinesq import Boussinesq
from eddyshed.solver.oceans.boussinesq_waves import BoussinesqSettings, rates
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.stepping import IntegratingFactorRK4

BOX = (2 * np.pi, 2 * np.pi)
SPACES = {
    "periodic": lambda points=(16, 16), lengths=BOX: Periodic(points, lengths),
    "channel": lambda points=(16, 16), lengths=BOX: Channel(points, lengths),
}


def ocean(space, **parameters):
    return Boussinesq(BoussinesqSettings(**parameters), space)


def run(model, z, step, steps):
    end = z.copy()
    stepper = IntegratingFactorRK4(model, step)
    for _ in integrate(stepper, end, first_step=0, last_step=steps, energy_bound=1e6):
        pass
    return end


def state(model, *fields):
    """Coordinates of functions of x and z."""
    x, z = model.space.grid_axes
    grid = (
        np.broadcast_to(f(x[None, :], z[:, None]), (len(z), len(x))) for f in fields
    )
    return model.coordinates(*(model.space.to_modes(field) for field in grid))


@pytest.mark.parametrize(
    ("n", "f", "k", "m", "omega"),
    [
        (1.0, 0.0, 3, 4, 0.6),
        (10.0, 0.0, 1, 5, 1.961161351382),
        (10.0, 1.0, 1, 5, 2.192645048268),
        (1.0, 0.1, 3, 4, 0.605309838017),
        (1.0, 0.1, 3, -4, 0.605309838017),
    ],
)
def test_internal_wave(n, f, k, m, omega):
    # Gill, Atmosphere-Ocean Dynamics (1982), sections 6.4 and 8.4: omega^2 = (N^2
    # k^2 + f^2 m^2) / K^2. The velocity of a plane wave is across its wave vector,
    # so it is an exact solution at any amplitude. With one viscosity for all it
    # decays as exp(-nu K^2 t). A crest moves to larger x + m z / k for omega > 0.
    # A steeper wave than this, of shear 0.8 N, breaks within the run.
    nu, amplitude, t = 0.004, 0.02, 7.0
    model = ocean(
        Periodic((24, 24), BOX),
        buoyancy_gradient=n**2,
        viscosity=nu,
        diffusivity=nu,
        coriolis=f,
    )

    def wave(t):
        # b = (N^2 k / omega) psi, and v lags: dv/dt = f psi_z.
        decay = amplitude * np.exp(-nu * (k**2 + m**2) * t)
        parts = [
            lambda x, z: decay * np.cos(k * x + m * z - omega * t),
            lambda x, z: decay * n**2 * k / omega * np.cos(k * x + m * z - omega * t),
            lambda x, z: -decay * f * m / omega * np.cos(k * x + m * z - omega * t),
        ]
        return state(model, *parts[: model.n_fields])

    end, expected = run(model, wave(0.0), 0.1, 70), wave(t)
    # Linear part exact, advection zero to round-off: 70 steps, K up to 5.
    assert np.linalg.norm(end - expected) < 1e-10 * np.linalg.norm(expected)
    budget = model.budget(0.0, expected)
    if f == 0:  # energy is shared equally by the two kinds (Gill 1982, section 6.7)
        kinetic = budget["kinetic_energy"]
        assert kinetic == pytest.approx(budget["energy"] / 2, rel=1e-12)


def test_group_velocity():
    # Gill (1982), section 6.6: along the phase lines, upwards where phases go down.
    # N = 1, (k, m) = (3, 4): (0.128, -0.096).
    settings = BoussinesqSettings(buoyancy_gradient=1.0)
    h = 1e-4

    def omega(k, m):
        return np.abs(rates(settings, np.array([k]), np.array([m])).imag).max()

    found = [
        (omega(3 + h, 4) - omega(3 - h, 4)) / (2 * h),
        (omega(3, 4 + h) - omega(3, 4 - h)) / (2 * h),
    ]
    # Central differences: h^2 / 6 of a third derivative of order 0.1.
    np.testing.assert_allclose(found, [0.128, -0.096], atol=1e-8)


def test_standing_wave_between_walls():
    # Between walls the vertical phase stands: psi = sin(m pi z / H) cos(k x -
    # omega t), still with omega = N k / K (Gill 1982, section 6.9). Its advection
    # does not vanish, so the amplitude is small: 1e-8 leaves errors of 1e-8.
    n, k, m, t = 2.0, 3, 2, 4.0
    model = ocean(Channel((24, 16), (2 * np.pi, 3.0)), buoyancy_gradient=n**2)
    q = m * np.pi / 3.0
    omega = n * k / np.hypot(k, q)

    def wave(t):
        return state(
            model,
            lambda x, z: 1e-8 * np.sin(q * z) * np.cos(k * x - omega * t),
            lambda x, z: (
                1e-8 * n**2 * k / omega * np.sin(q * z) * np.cos(k * x - omega * t)
            ),
        )

    end, expected = run(model, wave(0.0), 0.1, 40), wave(t)
    assert np.linalg.norm(end - expected) < 1e-7 * np.linalg.norm(expected)


def primitive_rates(parameters, k, m):
    """Growth rates from velocities, buoyancy and pressure, without psi.

    u_t - f v = -p_x + nu lap u, w_t = -p_z + b + nu lap w, v_t + f u = nu lap v,
    b_t + N^2 w = kappa lap b, u_x + w_z = 0, for exp(i(k x + m z) + s t): a
    generalized eigenvalue problem whose infinite eigenvalues belong to p.
    """
    n2, nu, kappa, f = parameters
    damping = k**2 + m**2
    a = np.zeros((5, 5), dtype=complex)  # of u, w, v, b, p
    a[0, [0, 2, 4]] = -nu * damping, f, -1j * k
    a[1, [1, 3, 4]] = -nu * damping, 1, -1j * m
    a[2, [0, 2]] = -f, -nu * damping
    a[3, [1, 3]] = -n2, -kappa * damping
    a[4, [0, 1]] = 1j * k, 1j * m
    found = linalg.eigvals(a, np.diag([1, 1, 1, 1, 0]))
    return found[np.abs(found) < 1e6]


@pytest.mark.parametrize("name", ["periodic", "channel"])
@pytest.mark.parametrize(
    "parameters",
    [
        (3.0, 0.02, 0.05, 0.0),
        (-3.0, 0.02, 0.005, 0.0),
        (0.0, 0.02, 0.05, 0.0),
        (2.0, 0.0, 0.0, 0.0),
        (3.0, 0.02, 0.05, 0.7),
        (-1.0, 0.03, 0.03, -0.4),
    ],
)
def test_linear_operator_against_primitive_equations(name, parameters):
    # The operator of all waves at once against the equations before elimination
    # of the pressure, assembled above. A sine is the difference of two waves +m
    # and -m, whose rates are equal.
    n2, nu, kappa, f = parameters
    if name == "channel" and f:
        with pytest.raises(DataError, match="does not fit walls"):
            ocean(Channel((8, 8), BOX), buoyancy_gradient=n2, coriolis=f)
        return
    model = ocean(
        SPACES[name]((10, 8), (3.0, 2.0)),
        buoyancy_gradient=n2,
        viscosity=nu,
        diffusivity=kappa,
        coriolis=f,
        reference_frequency=1.3,
    )
    dense = model.linear(np.eye(model.size)).T
    space = model.space
    walls = name == "channel"
    for k, m in np.unique(np.abs(space.waves), axis=0):
        wave = np.abs(model.waves) == (k, m)
        chosen = np.flatnonzero(wave.all(axis=1))
        block = dense[np.ix_(chosen, chosen)]
        rest = np.delete(dense[:, chosen], chosen, axis=0)
        assert not rest.any()  # no wave feels another
        kx, kz = 2 * np.pi * k / 3.0, (1 if walls else 2) * np.pi * m / 2.0
        one = primitive_rates(parameters, kx, kz)
        if f == 0:  # v is damped on its own, and is not stepped
            one = np.delete(one, np.argmin(np.abs(one + nu * (kx**2 + kz**2))))
        found = linalg.eigvals(block)
        # Equal eigenvalues come in groups, so compare characteristic sums: those
        # of powers of the matrix, which fix all eigenvalues.
        for power in (1, 2, 3):
            expected = len(found) / len(one) * np.sum(one**power)
            scale = len(found) * (1 + np.max(np.abs(one))) ** power
            assert abs(np.sum(found**power) - expected) < 1e-12 * scale


@pytest.mark.parametrize("name", ["periodic", "channel"])
@pytest.mark.parametrize("interval", [1e-3, 0.3, 50.0])
@pytest.mark.parametrize(
    "parameters",
    [
        {"buoyancy_gradient": 3.0, "viscosity": 0.02, "diffusivity": 0.05},
        {"buoyancy_gradient": -0.02, "viscosity": 0.05, "diffusivity": 0.01},
        {"buoyancy_gradient": 0.0, "viscosity": 0.05, "reference_frequency": 0.7},
        {"buoyancy_gradient": 2.0, "coriolis": 0.4, "diffusivity": 0.01},
    ],
)
def test_exact_flow(name, interval, parameters):
    if name == "channel" and "coriolis" in parameters:
        parameters = parameters | {"coriolis": 0.0}
    model = ocean(SPACES[name]((8, 8), (3.0, 2.0)), **parameters)
    dense = linalg.expm(interval * model.linear(np.eye(model.size)).T)
    z = np.random.default_rng(4).standard_normal(model.size)
    # Squaring in scipy's exponential loses digits in proportion to the interval.
    scale = np.linalg.norm(dense) * np.linalg.norm(z)
    error = np.linalg.norm(model.exact_flow(interval)(z) - dense @ z)
    assert error < 1e-11 * scale


def test_critically_damped_wave():
    # (nu - kappa) K^2 / 2 = N k / K makes both rates equal, and the exponential
    # gains a factor t: exp(s t) (1 + t (M - s)).
    k, m = 2.0, 1.0
    k_squared = k**2 + m**2
    nu = 2 * 1.5 * k / k_squared**1.5
    model = ocean(Periodic((8, 8), BOX), buoyancy_gradient=2.25, viscosity=nu)
    dense = model.linear(np.eye(model.size)).T
    wave = np.flatnonzero(np.all(model.waves == (2, 1), axis=1))
    block = dense[np.ix_(wave, wave)]
    s = -nu * k_squared / 2
    expected = np.exp(s * 3.0) * (np.eye(4) + 3.0 * (block - s * np.eye(4)))
    flow = model.exact_flow(3.0)
    found = np.array([flow(unit)[wave] for unit in np.eye(model.size)[wave]]).T
    np.testing.assert_allclose(found, expected, atol=1e-13)
