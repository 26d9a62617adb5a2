"""Waves and decay in the barotropic ocean, against published solutions."""

import numpy as np
import pytest

from eddyshed.solver.integrate import integrate
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.stepping import IntegratingFactorRK4
from eddyshed.solver.stirring import Stirring, StirringNoise

BOX = (2 * np.pi, 2 * np.pi)


def ocean(points=(32, 32), lengths=BOX, **parameters):
    return Barotropic(BarotropicSettings(**parameters), Periodic(points, lengths))


def with_waves(model, waves):
    """Coordinates of psi = sum of a cos(k x + l y + p)."""
    x, y = model.space.grid_axes
    psi = sum(a * np.cos(k * x[None, :] + m * y[:, None] + p) for k, m, a, p in waves)
    return model.coordinates(model.space.to_modes(psi))


def run(model, z, step, steps):
    end = z.copy()
    stepper = IntegratingFactorRK4(model, step)
    for _ in integrate(stepper, end, first_step=0, last_step=steps, energy_bound=1e6):
        pass
    return end


def index(model, wave):
    """Index of a wave among the complex coefficients."""
    return int(np.flatnonzero(np.all(model.space.waves[::2] == wave, axis=1))[0])


@pytest.mark.parametrize(
    ("inverse_square_radius", "frequency"), [(0.0, -1.2), (11.0, -0.833333333333)]
)
def test_rossby_wave_frequency(inverse_square_radius, frequency):
    # Rossby (1939), J. Mar. Res. 2:38; Pedlosky, Geophysical Fluid Dynamics
    # (1987), section 3.17: omega = -beta k / (K^2 + 1/Ld^2), here (k, l) =
    # (3, 4), beta = 10. A single wave is an exact solution at any amplitude.
    radius = np.inf if inverse_square_radius == 0 else inverse_square_radius**-0.5
    model = ocean(beta=10.0, deformation_radius=radius)
    start = with_waves(model, [(3, 4, 2.0, 0.7)])
    end = run(model, start, 0.01, 100)
    wave = index(model, (3, 4))
    turned = np.angle(end.view(complex)[wave] / start.view(complex)[wave])
    # The linear part is treated exactly: only round-off over 100 steps is left.
    assert turned == pytest.approx(-frequency * 1.0, abs=1e-10)
    assert np.linalg.norm(end) == pytest.approx(np.linalg.norm(start), rel=1e-12)


def test_waves_travel_west():
    # A crest of psi moves towards smaller x where beta > 0 (Pedlosky 1987, 3.17).
    model = ocean(beta=5.0)
    end = run(model, with_waves(model, [(2, 0, 1.0, 0.0)]), 0.01, 10)
    psi = model.fields(end)["streamfunction"][0]
    x = model.space.grid_axes[0]
    # speed -beta / K^2 = -1.25, so after t = 0.1 the crest is at -0.125
    np.testing.assert_allclose(psi, np.cos(2 * (x + 0.125)), atol=1e-10)


def test_waves_of_one_wavenumber_superpose():
    # Waves of one K^2 have zeta = -K^2 psi, so J(psi, q) = 0 and their sum is an
    # exact solution of the full equation (Pedlosky 1987, section 3.26). It catches
    # a wrong sign of J, aliasing, exchanged axes and missing conjugates.
    waves = [
        (3, 4, 1.0, 0.3),
        (4, -3, 0.7, 1.1),
        (5, 0, 0.5, 2.0),
        (0, 5, 0.8, 0.2),
        (4, 3, 0.6, 0.9),
    ]
    stiffness, beta, viscosity, drag = 27.0, 3.0, 0.01, 0.2
    model = ocean(
        points=(64, 64),
        beta=beta,
        deformation_radius=2.0**-0.5,
        viscosity=viscosity,
        drag=drag,
    )
    end = run(model, with_waves(model, waves), 0.002, 500)
    # Friction acts on the relative vorticity: rate (nu K^2 + r) K^2 / (K^2 + F).
    decay = np.exp(-(viscosity * 25 + drag) * 25 / stiffness)
    expected = with_waves(
        model, [(k, m, a * decay, p + beta * k / stiffness) for k, m, a, p in waves]
    )
    # J is zero to round-off, about 1e-13 of its terms, over 500 steps.
    error = np.linalg.norm(end - expected) / np.linalg.norm(expected)
    assert error < 1e-10


@pytest.mark.parametrize("n", [1, 3])
def test_taylor_green_decay(n):
    # Taylor & Green (1937), Proc. R. Soc. A 158:499; Taylor (1923): psi =
    # cos(nx) cos(ny) decays at the rate 2 nu n^2, its energy at twice that.
    model = ocean(viscosity=0.05)
    x, y = model.space.grid_axes
    psi = np.cos(n * x)[None, :] * np.cos(n * y)[:, None]
    start = model.coordinates(model.space.to_modes(psi))
    end = run(model, start, 0.1, 20)
    ratio = np.dot(end, end) / np.dot(start, start)
    # The linear part is exact and J vanishes: round-off only.
    assert ratio == pytest.approx(np.exp(-4 * 0.05 * n**2 * 2.0), rel=1e-12)


def test_stirred_linear_waves_are_ornstein_uhlenbeck():
    # A damped wave driven by white noise is a complex Ornstein-Uhlenbeck process
    # (Gardiner, Handbook of Stochastic Methods, chapter 4): per step its state is
    # multiplied by exp(L h), and its variance settles at s^2 / (2 g). All waves
    # stirred have K^2 = 25, so the advection among them vanishes identically.
    model = ocean(points=(16, 16), beta=2.0, drag=0.05, viscosity=1e-3)
    step, rate = 0.5, 1e-3
    noise = StirringNoise(model, Stirring(energy_rate=rate, band=(5, 5)), step)
    stepper = IntegratingFactorRK4(model, step)
    z = np.zeros(model.size)
    rng = np.random.default_rng(5)
    stirred = [index(model, w) for w in ((3, 4), (4, 3), (5, 0), (0, 5))]
    run = integrate(
        stepper,
        z,
        first_step=0,
        last_step=20000,
        energy_bound=1e3,
        stir=lambda state: noise.add(state, rng),
    )
    series = np.array([z.view(complex)[stirred] for n in run if n > 500])
    damping = 0.05 + 1e-3 * 25
    waves = 6  # of K^2 = 25 in half the plane: (0,5) (5,0) (3,+-4) (4,+-3)
    expected = rate / waves / (2 * damping) * 2  # both parts of a wave
    variance = np.mean(np.abs(series) ** 2, axis=0)
    # |c|^2 of a complex process decorrelates at 2 g: N_eff = T g, relative error
    # sqrt(1 / N_eff); four standard errors, false alarm 6e-5 for each of four.
    relative = np.sqrt(1 / (len(series) * step * damping))
    assert np.all(np.abs(variance / expected - 1) < 4 * relative)
    lag = np.mean(series[1:] * series[:-1].conj(), axis=0) / variance
    exponent = np.log(lag) / step
    # Published asymptotic error of rate and frequency, sqrt(g / T).
    error = np.sqrt(damping / (len(series) * step))
    # Rossby waves: frequency beta k / K^2 of the coefficient.
    frequency = 2.0 * np.array([3, 4, 5, 0]) / 25
    assert np.all(np.abs(exponent.real + damping) < 4 * error)
    assert np.all(np.abs(exponent.imag - frequency) < 4 * error)


def test_stirring_feeds_energy_at_the_prescribed_rate():
    # With the full advection and linear drag mu, Ito's formula gives d<E>/dt =
    # eps - 2 mu <E>: from rest <E> = eps / (2 mu) (1 - exp(-2 mu t)), whatever
    # the advection does (Gardiner, chapter 4; common practice in turbulence).
    model = ocean(points=(16, 16), drag=0.25)
    step, rate, steps = 0.05, 1.0, 60
    noise = StirringNoise(model, Stirring(energy_rate=rate, band=(2, 4)), step)
    stepper = IntegratingFactorRK4(model, step)
    energies = []
    for member in range(60):
        z = np.zeros(model.size)
        rng = np.random.default_rng([17, member])
        for _ in integrate(
            stepper,
            z,
            first_step=0,
            last_step=steps,
            energy_bound=1e6,
            stir=lambda state, rng=rng: noise.add(state, rng),
        ):
            pass
        energies.append(z @ z / 2)
    expected = rate / 0.5 * (1 - np.exp(-0.5 * steps * step))
    error = np.std(energies, ddof=1) / np.sqrt(len(energies))
    # Four standard errors; the splitting's bias is of order mu h = 1 % of the
    # nonlinear exchange, which conserves energy, so it does not enter.
    assert abs(np.mean(energies) - expected) < 4 * error
