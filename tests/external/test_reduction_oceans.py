"""From the ocean to its reduction: the whole chain against published results."""

import numpy as np
import pytest

from eddyshed.reduce.contract import check_model
from eddyshed.reduce.noise.fit import fit_ornstein_uhlenbeck
from eddyshed.reduce.operators import galerkin
from eddyshed.reduce.settings import StudyConfig
from eddyshed.reduce.split import split_truth, unresolved_series
from eddyshed.solver.config import parse_config
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.record import open_record
from eddyshed.solver.segments import member_paths
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.truth import build_ocean, run_member

BOX = (2 * np.pi, 2 * np.pi)


def ocean(points=(16, 16), lengths=BOX, source=None, **parameters):
    return Barotropic(
        BarotropicSettings(**parameters), Periodic(points, lengths), source
    )


# --- Galerkin operators -----------------------------------------------------


def lorenz_patterns(model, k, m):
    """Lorenz's three patterns as states, for box-scale wavenumbers k and m."""
    x, y = model.space.grid_axes
    x, y = x[None, :], y[:, None]
    fields = (
        -np.cos(m * y) / m**2 + 0 * x,
        -np.cos(k * x) / k**2 + 0 * y,
        -2 / (k**2 + m**2) * np.sin(m * y) * np.sin(k * x),
    )
    return np.array([model.coordinates(model.space.to_modes(f)) for f in fields])


@pytest.mark.parametrize(
    ("k", "m", "expected"),
    [
        (2.0, 1.0, [-1 / 10, 8 / 5, -3 / 4]),
        # Any other ratio of scales, from the same paper's formulas.
        (1.5, 4.0, None),
    ],
)
def test_lorenz_maximum_simplification(k, m, expected):
    # Lorenz (1960), Tellus 12:243, of d(lap psi)/dt = -J(psi, lap psi): A' = -(1/k^2 -
    # 1/(k^2 + l^2)) k l F G, F' = (1/l^2 - 1/(k^2 + l^2)) k l A G, G' = -(1/l^2 -
    # 1/k^2) k l A F / 2. With k = 2, l = 1: -1/10, 8/5, -3/4.
    model = ocean(lengths=(2 * np.pi / k * 2, 2 * np.pi / m * 2))
    patterns = lorenz_patterns(model, k, m)
    norms = np.linalg.norm(patterns, axis=1)
    op = galerkin(
        model,
        (patterns / norms[:, np.newaxis]).T,
        np.zeros((model.size, 0)),
        np.zeros(model.size),
    )
    k2, m2 = k**2, m**2
    formula = [
        -(1 / k2 - 1 / (k2 + m2)) * k * m,
        (1 / m2 - 1 / (k2 + m2)) * k * m,
        -(1 / m2 - 1 / k2) * k * m / 2,
    ]
    if expected is not None:
        # Round-off of a few operations.
        np.testing.assert_allclose(formula, expected, rtol=1e-15)
    tensor = np.zeros((3, 3, 3))
    for target, (one, other), value in zip(
        range(3), ((1, 2), (0, 2), (0, 1)), formula, strict=True
    ):
        # Half for either order, and amplitudes in units of the patterns' norms.
        scaled = value * norms[target] / (norms[one] * norms[other])
        tensor[target, one, other] = tensor[target, other, one] = scaled / 2
    # Round-off of the transforms, relative to the largest coefficient.
    np.testing.assert_allclose(op.B111, tensor, atol=1e-12 * np.abs(tensor).max())
    for part in (op.F1, op.A11):
        assert not part.any()
    assert op.cyclic_residual < 1e-12


def test_beta_and_friction_come_out_of_the_linear_operator():
    # Rossby waves (Pedlosky, Geophysical Fluid Dynamics, 1987, section 3.17): the two
    # parts of a wave turn with omega = -beta k / (K^2 + 1/Ld^2) and decay with
    # (r + nu K^2) K^2 / (K^2 + 1/Ld^2).
    model = ocean(beta=3.0, drag=0.2, viscosity=0.01, deformation_radius=0.5)
    rng = np.random.default_rng(1)
    chosen = np.flatnonzero(np.all(model.waves == (3, -1), axis=1))
    others = np.setdiff1d(np.arange(model.size), chosen)
    eye = np.eye(model.size)
    op = galerkin(model, eye[:, chosen], eye[:, others], np.zeros(model.size))
    stiffness = 10 + 4
    omega = -3.0 * 3 / stiffness
    decay = (0.2 + 0.01 * 10) * 10 / stiffness
    # dz/dt = -(decay + i omega) z for the parts as (real, imaginary).
    expected = [[-decay, omega], [-omega, -decay]]
    np.testing.assert_allclose(op.A11, expected, atol=1e-14)
    assert not op.A12.any()
    # About a flow, the two are coupled to others.
    mean = rng.standard_normal(model.size)
    assert galerkin(model, eye[:, chosen], eye[:, others], mean).A12.any()


@pytest.mark.parametrize("radius", [np.inf, 0.4])
@pytest.mark.parametrize("points", [(16, 16), (12, 20)])
def test_the_ocean_keeps_the_contract(radius, points):
    rng = np.random.default_rng(2)
    space = Periodic(points, (2 * np.pi, 5.0))
    source = rng.standard_normal(space.n_real)
    parameters = {
        "beta": 2.0,
        "drag": 0.1,
        "viscosity": 1e-3,
        "hyperviscosity_time": 3.0,
        "deformation_radius": radius,
    }
    model = Barotropic(BarotropicSettings(**parameters), space, source)
    check_model(model)
    # At the amplitudes of a steep spectrum as well.
    falling = 1 / (1 + space.k_squared)
    check_model(model, states=rng.standard_normal((20, model.size)) * falling)


# --- The whole chain --------------------------------------------------------

# Linear waves: all that are stirred have K^2 = 25, and the advection among waves of
# one K^2 vanishes identically (Pedlosky 1987, section 3.26). beta = 2, r + nu K^2 =
# 0.05 + 0.025. A step of two seconds is exact for them.
STUDY = """
name = "waves"
seed = 8
[grid]
points = [16, 16]
lengths = ["6.283185307179586 m", "6.283185307179586 m"]
[ocean]
kind = "barotropic"
beta = "2 m-1 s-1"
drag = "0.05 1/s"
viscosity = "1e-3 m2/s"
[stirring]
energy_rate = "1e-3 m2/s3"
band = [5, 5]
[time]
step = "2 s"
spin_up = "200 s"
duration = "10000 s"
[output]
state_every = "2 s"
[resolved]
kind = "fourier"
family = "listed"
waves = [[5, 0]]
[unresolved]
variance = 1.0
"""
DECAY = 0.05 + 1e-3 * 25
ENERGY_RATE, STIRRED = 1e-3, 6  # of K^2 = 25: (0,5) (5,0) (3,+-4) (4,+-3)


@pytest.fixture(scope="module")
def waves(tmp_path_factory):
    """The truth run by the solver, read back and divided by the reduction."""
    config = parse_config(STUDY, StudyConfig, "waves.toml").config
    folder = tmp_path_factory.mktemp("waves")
    assert run_member(config, 0, folder)
    record = open_record(member_paths(folder, 0)[0])
    model = build_ocean(config)
    split = split_truth(config, model, [record])
    return split, unresolved_series(split, model, [record]), record.step


@pytest.mark.parametrize("method", ["integral", "product", "likelihood"])
def test_stirred_waves_come_back_as_the_noise_that_they_are(waves, method):
    split, y, step = waves
    basis = split.unresolved
    # All that varies: five of the six stirred waves.
    live = basis.variance > 1e-20 * basis.variance[0]
    assert live.sum() == 2 * (STIRRED - 1)
    basis, y = basis.take(np.flatnonzero(live)), y[..., live]
    fit = fit_ornstein_uhlenbeck(
        y,
        step,
        window=None if method == "likelihood" else 8 / DECAY,
        partners=basis.partners,
        labels=basis.labels,
        method=method,
    )
    numbers = np.array([label.split()[1].split(",") for label in basis.labels], int)
    assert np.all((numbers**2).sum(axis=1) == 25)
    omega = -2.0 * numbers[:, 0] / 25  # Rossby (1939); -0.24 for (3, 4)
    turning = numbers[:, 0] != 0
    np.testing.assert_array_equal(basis.partners >= 0, turning)
    # A damped wave driven by white noise is a complex Ornstein-Uhlenbeck process
    # (Gardiner, Handbook of Stochastic Methods, ch. 4). Three standard errors: with
    # 20 batches beyond them by chance in 1 to 2 % of cases, so that in a third of
    # other streams one of the numbers of both fits would be.
    errors = [fit.decay.error, fit.frequency.error]
    if method == "likelihood":
        # Its error is known without the jackknife, which knows it to a sixth only:
        # sqrt((exp(2 g dt) - 1) / n) / dt for a single coordinate, by Fisher's
        # information, and for a wave sqrt(1 / 2) of that.
        one = np.sqrt(np.expm1(2 * DECAY * step) / y.shape[0]) / step
        errors = [np.where(turning, one / np.sqrt(2), one)] * 2
    assert np.all(np.abs(fit.decay.value - DECAY) < 3 * errors[0])
    off = np.abs(fit.frequency.value - omega)
    assert np.all(off[turning] < 3 * errors[1][turning])
    np.testing.assert_array_equal(fit.frequency.value[~turning], 0)
    # Variance of each part: s^2 / 2 g, with s^2 / 2 of the energy rate for each.
    variance = ENERGY_RATE / STIRRED / (2 * DECAY)
    assert np.all(np.abs(fit.variance.value - variance) < 3 * fit.variance.error)
    # Errors are of the size that no method betters, sqrt(g / T) = 0.0027 (Gardiner's
    # process seen all the time; likelihood theory), and at most a few times it.
    least = np.sqrt(DECAY / 10000)
    typical = np.sqrt(np.mean(fit.decay.error[turning] ** 2))
    assert 0.85 * least < typical < 4 * least
    assert not any("double" in note for note in fit.notes)


def test_the_resolved_wave_is_the_one_that_was_listed(waves):
    split, _, _ = waves
    assert split.resolved.labels == ("cos 5,0", "sin 5,0")
    assert split.resolved.partners.tolist() == [1, 0]
    # Its tendency is linear: -(g + i w) z, with w = -2 * 5 / 25, about the mean.
    omega = -0.4
    matrix = np.array([[-DECAY, omega], [-omega, -DECAY]])
    expected = (split.x[0] + split.resolved_mean) @ matrix.T
    # The advection among waves of one K^2 is round-off of its terms.
    np.testing.assert_allclose(
        split.tendency[0], expected, atol=1e-12 * np.abs(split.x).max()
    )
    shares = split.shares
    # One sixth of the variance each, known to sqrt(1 / (g T)) = 3.7 % of itself.
    assert shares[0] == pytest.approx(1 / 6, rel=0.15)
    assert shares[2] < 1e-12
