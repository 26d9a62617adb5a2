"""Linear waves and instability of the two-layer ocean, against published results."""

import numpy as np
import pytest
from scipy import linalg, optimize

from eddyshed.solver.integrate import integrate
from eddyshed.solver.oceans.two_layer import TwoLayer, TwoLayerSettings
from eddyshed.solver.oceans.two_layer_waves import (
    dissipation,
    frequencies,
    most_unstable,
)
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.stepping import IntegratingFactorRK4

BOX = (2 * np.pi, 2 * np.pi)
SPACES = {"periodic": Periodic, "channel": Channel}


def parameters(f1, f2, u1=0.0, u2=0.0, **others):
    """Settings with the layers' couplings F1 and F2: h1 = F2 / (F1 + F2)."""
    return TwoLayerSettings(
        upper_depth=f2,
        lower_depth=f1,
        deformation_radius=(f1 + f2) ** -0.5,
        upper_current=u1,
        lower_current=u2,
        **others,
    )


def ocean(settings, points=(24, 24), lengths=BOX, space="periodic"):
    return TwoLayer(settings, SPACES[space](points, lengths))


def run(model, z, step, steps):
    end = z.copy()
    stepper = IntegratingFactorRK4(model, step)
    for _ in integrate(stepper, end, first_step=0, last_step=steps, energy_bound=1e6):
        pass
    return end


def on_grid(model, upper, lower):
    """Coordinates of two fields psi_i(x, y) given as functions."""
    x, y = model.space.grid_axes
    layers = [f(x[None, :], y[:, None]) + 0 * y[:, None] for f in (upper, lower)]
    return model.coordinates(*(model.space.to_modes(f) for f in layers))


def dense_frequencies(settings, k, k_squared, edge=np.inf):
    """The textbook eigenproblem in the layers' streamfunctions, for one wave.

    Pedlosky (1987), section 7.11, with drag and viscosity added as an imaginary
    frequency: omega A psi = k (U A + Q) psi + i (-r lap psi2 - nu K2 q).
    """
    f1, f2 = settings.coupling
    u1, u2 = settings.upper_current, settings.lower_current
    a = np.array([[-(k_squared + f1), f1], [f2, -(k_squared + f2)]])
    q = np.diag(
        [settings.beta + f1 * (u1 - u2), settings.beta - f2 * (u1 - u2)]
    ).astype(complex)
    steep = (k_squared / edge**2) ** 4 / settings.hyperviscosity_time
    damping = settings.viscosity * k_squared + steep
    right = k * (np.diag([u1, u2]) @ a + q) - 1j * damping * a
    right[1, 1] += 1j * settings.drag * k_squared
    return np.linalg.eig(np.linalg.solve(a, right))


def growing(settings, k, k_squared):
    """Frequency and psi2 / psi1 of the faster growing wave."""
    omega, vectors = dense_frequencies(settings, k, k_squared)
    best = np.argmax(omega.imag)
    return omega[best], vectors[1, best] / vectors[0, best]


# Phillips (1954), Tellus 6:273; Pedlosky (1987), chapter 7. Evaluated from the
# closed formula for equal layers, here U = 1, F1 = F2 = 8:
# c = -(beta / (K2 + 16)) (1 + (8 / K2) (1 +- sqrt(1 + 4 K2^2 (K2^2 - 256)
# / (256 beta^2)))), and the ratio of the amplitudes from the upper layer's equation.
PHILLIPS = [
    (0.0, (1, 0), 0.939336436628j, 0.0625 - 0.998044963957j),
    (0.0, (2, 0), 1.549193338483j, 0.25 - 0.968245836552j),
    (0.0, (3, 0), 1.587450786639j, 0.5625 - 0.826797284708j),
    (0.0, (2, 1), 1.447493728911j, 0.3125 - 0.949917759598j),
    (5.0, (2, 0), -1.5 + 1.183215956620j, 0.153846153846 - 0.455083060238j),
    (5.0, (3, 0), -1.133333333333 + 1.495177432800j, 0.440217391304 - 0.609447323152j),
    (5.0, (3, 1), -1.038461538462 + 1.365249180715j, 0.5 - 0.591607978310j),
]


@pytest.mark.parametrize(("beta", "wave", "omega", "ratio"), PHILLIPS)
def test_phillips_instability(beta, wave, omega, ratio):
    settings = parameters(8, 8, u1=1.0, u2=-1.0, beta=beta)
    k, k_squared = float(wave[0]), float(np.dot(wave, wave))
    found = frequencies(settings, np.array(k), np.array(k_squared))
    # The printed digits; the other wave decays at the same rate.
    assert found[0] == pytest.approx(omega, abs=2e-12)
    assert found[1] == pytest.approx(omega.conjugate(), abs=2e-12)
    # The eigenvector through the model: its layers turn and grow as one.
    model = ocean(settings)
    z = on_grid(
        model,
        lambda x, y: np.cos(wave[0] * x + wave[1] * y),
        lambda x, y: (ratio * np.exp(1j * (wave[0] * x + wave[1] * y))).real,
    )
    rate = on_grid(
        model,
        lambda x, y: (-1j * omega * np.exp(1j * (wave[0] * x + wave[1] * y))).real,
        lambda x, y: (
            (-1j * omega * ratio * np.exp(1j * (wave[0] * x + wave[1] * y))).real
        ),
    )
    np.testing.assert_allclose(model.linear(z), rate, atol=1e-10)  # printed digits


@pytest.mark.parametrize(
    ("beta", "expected"),
    [
        (12.0, [-2.828427124746 + 0.414213562373j, -2.828427124746 - 0.414213562373j]),
        (12.7, [-2.993418707023 + 0.082265404309j, -2.993418707023 - 0.082265404309j]),
        (12.75, [-2.931980515339, -3.078427124746]),
    ],
)
def test_marginal_wave(beta, expected):
    # Phillips's formula about its critical beta = 12.7279: 4 K^4 (k_d^4 - K^4) =
    # k_b^4 k_d^4 with K = 3, k_d^4 = 162 (Pedlosky 1987, chapter 7).
    settings = parameters(4.5 * np.sqrt(2), 4.5 * np.sqrt(2), 1.0, -1.0, beta=beta)
    found = frequencies(settings, np.array(3.0), np.array(9.0))
    order = np.argsort(-found.imag if beta < 12.72 else -found.real)
    # Near the margin the root of a small difference loses half the digits that
    # the difference lost: the printed digits still hold to 1e-10.
    np.testing.assert_allclose(found[order], expected, atol=1e-10)


def test_damped_instability():
    # The same problem with bottom drag r on the lower layer's relative vorticity and
    # viscosity on both potential vorticities, beta = 5, (3, 0): growth rate and
    # minus the frequency of both waves, from the quadratic that the two equations
    # give (Pedlosky 1987, chapter 7, for the equations).
    settings = parameters(8, 8, 1.0, -1.0, beta=5.0, drag=0.1, viscosity=0.01)
    damping = dissipation(settings, np.array(9.0), np.inf)
    found = -1j * frequencies(settings, np.array(3.0), np.array(9.0), damping)
    expected = [
        1.371595528160 + 1.123615911036j,
        -1.619595528160 + 1.143050755631j,
    ]
    np.testing.assert_allclose(found, expected, atol=2e-12)  # printed digits


def test_most_unstable_wave_of_equal_layers():
    # beta = 0: sigma = k U sqrt((k_d^2 - K^2) / (k_d^2 + K^2)), largest where
    # K = k_d sqrt(sqrt 2 - 1), (sqrt 2 - 1) U k_d (Phillips 1954; Pedlosky 1987).
    wavelength, rate = most_unstable(parameters(8, 8, 1.0, -1.0))
    # The maximum is flat: its place is good to the root of round-off, 1e-6 asked.
    assert 2 * np.pi / wavelength == pytest.approx(4 * 0.643594252906, rel=1e-5)
    assert rate == pytest.approx(4 * 0.414213562373, rel=1e-10)
    # beta = 5: the maximum of Phillips's formula over k, by golden section.
    wavelength, rate = most_unstable(parameters(8, 8, 1.0, -1.0, beta=5.0))
    assert 2 * np.pi / wavelength == pytest.approx(2.758642338, rel=1e-5)
    assert rate == pytest.approx(1.525482946578, rel=1e-10)


@pytest.mark.parametrize(("factor", "grows"), [(0.999, False), (1.001, True)])
def test_critical_shear(factor, grows):
    # Equal layers are unstable where the shear 2 U exceeds beta / F, first at
    # K = k_d 2^(-1/4) (Phillips 1954; Pedlosky 1987, chapter 7).
    f, beta = 8.0, 5.0
    u = factor * beta / f / 2
    wavelength, rate = most_unstable(parameters(f, f, u, -u, beta=beta))
    assert (rate > 0) == grows
    if grows:
        # The band opens as a parabola about that wavenumber: its maximum is off
        # by the order of the excess, a part in a thousand.
        first = 4 * 2**-0.25
        assert 2 * np.pi / wavelength == pytest.approx(first, rel=0.01)


UNEQUAL = {
    "still": parameters(8, 2, beta=10.0),
    "sheared": parameters(12.8, 3.2, 0.9, -0.3, beta=2.0),
    "damped": parameters(
        3.0, 7.0, -0.2, 0.8, beta=4.0, drag=0.3, viscosity=0.02, hyperviscosity_time=0.5
    ),
}


@pytest.mark.parametrize("space", SPACES)
@pytest.mark.parametrize("case", UNEQUAL)
def test_linear_operator_against_dense_eigenproblem(case, space):
    # Every wave of the box at once: the spectrum of the model's matrix is that of
    # the 2 x 2 eigenproblems, assembled in the layers by the textbook's formula.
    settings = UNEQUAL[case]
    lengths = (2 * np.pi, 3.0)
    model = ocean(settings, (14, 12), lengths, space)
    found = np.linalg.eigvals(model.linear(np.eye(model.size)).T)
    (nx, ny), expected = model.space.cutoff, []
    if space == "periodic":
        waves = [(k, m) for k in range(nx + 1) for m in range(-ny, ny + 1)]
        waves = [(k, m) for k, m in waves if k > 0 or m > 0]
        across = 2 * np.pi / lengths[1]
    else:
        waves = [(k, m) for k in range(nx + 1) for m in range(1, ny + 1)]
        across = np.pi / lengths[1]
    edge = min(nx, ny * across)
    for k, m in waves:
        omega, _ = dense_frequencies(settings, k, k**2 + (m * across) ** 2, edge)
        rates = -1j * omega
        # A wave without zonal variation has one real amplitude between walls, and
        # two parts, cosine and sine of y, where y repeats.
        if k == 0 and space == "channel":
            expected.extend(rates)
        else:
            expected.extend([*rates, *rates.conj()])
    assert len(expected) == model.size
    distance = np.abs(np.subtract.outer(found, expected))
    pairs = optimize.linear_sum_assignment(distance)
    # Eigenvalues of a matrix of order 150 that is not normal; rates are of order 1
    # to 10, condition numbers of order 10.
    assert distance[pairs].max() < 1e-10


@pytest.mark.parametrize("space", SPACES)
def test_exact_flow_is_the_exponential_of_the_dense_matrix(space):
    # scipy's matrix exponential of all of A against one 2 x 2 block per wave.
    model = ocean(UNEQUAL["damped"], (14, 12), (2 * np.pi, 3.0), space)
    matrix = model.linear(np.eye(model.size)).T
    z = np.random.default_rng(4).standard_normal(model.size)
    expected = linalg.expm(0.7 * matrix) @ z
    # Round-off of the larger exponential, relative to a state of norm 10.
    np.testing.assert_allclose(model.exact_flow(0.7)(z), expected, atol=1e-11)


@pytest.mark.parametrize(
    ("lower", "frequency"), [(1.0, -1.2), (-0.25, -0.857142857143)]
)
def test_vertical_modes(lower, frequency):
    # Pedlosky (1987), chapter 6: without currents the barotropic wave has omega =
    # -beta k / K^2, the baroclinic one -beta k / (K^2 + F1 + F2) with psi2 / psi1 =
    # -F2 / F1. Each is an exact solution at any amplitude (but not a stable one
    # at a large one). beta = 10, F1 = 8, F2 = 2, (3, 4).
    model = ocean(parameters(8, 2, beta=10.0))

    def wave(t):
        def upper(x, y):
            return 0.2 * np.cos(3 * x + 4 * y - frequency * t + 0.7)

        return on_grid(model, upper, lambda x, y: lower * upper(x, y))

    start, end = wave(0.0), run(model, wave(0.0), 0.01, 100)
    # The linear part is exact: round-off over a hundred steps, and the printed
    # digits of the frequency.
    np.testing.assert_allclose(end, wave(1.0), atol=1e-10 * np.linalg.norm(start))


RUNS = {
    "equal layers": ("periodic", parameters(8, 8, 1.0, -1.0), (2, 0)),
    "with beta": ("periodic", parameters(8, 8, 1.0, -1.0, beta=5.0), (3, 1)),
    "damped, unequal": (
        "periodic",
        parameters(12.8, 3.2, 1.0, -1.0, beta=2.0, drag=0.1, viscosity=0.01),
        (2, 1),
    ),
    "between walls": (
        "channel",
        parameters(12.8, 3.2, 1.0, -1.0, beta=2.0, drag=0.1, viscosity=0.01),
        (2, 1),
    ),
}


@pytest.mark.parametrize("case", RUNS)
def test_growth_in_a_run(case):
    # The growing wave at amplitude 1e-8 among noise of 1e-10 in all other modes,
    # stepped with the full advection: it grows and turns at the complex frequency
    # of the dense eigenproblem (the table's, in the first two cases).
    space, settings, (k, m) = RUNS[case]
    model = ocean(settings, space=space)
    across = m if space == "periodic" else m / 2
    omega, ratio = growing(settings, float(k), k**2 + across**2)
    assert omega.imag > 0.5

    def wave(amplitude):
        def shape(x, y):
            if space == "periodic":
                return amplitude * np.exp(1j * (k * x + across * y))
            return amplitude * np.exp(1j * k * x) * np.sin(across * y)

        return on_grid(
            model,
            lambda x, y: shape(x, y).real,
            lambda x, y: (ratio * shape(x, y)).real,
        )

    start, noise = wave(1e-8), np.random.default_rng(6).standard_normal(model.size)
    own = np.abs(start) > 1e-3 * np.abs(start).max()
    noise[own] = 0
    time, steps = 3.0, 300
    end = run(model, start + 1e-10 * noise, time / steps, steps)[own]
    growth = np.log(np.linalg.norm(end) / np.linalg.norm(start[own])) / time
    assert growth == pytest.approx(omega.imag, rel=1e-5)
    # Turning and the ratio of the layers as well. The noise acts on the wave in
    # products of two small numbers only: 1e-10 against 1e-8, squared wavenumbers
    # of 10^2 and a time of 3 leave parts of 1e-6.
    predicted = wave(1e-8 * np.exp(-1j * omega * time))[own]
    assert np.linalg.norm(end - predicted) < 1e-5 * np.linalg.norm(predicted)
