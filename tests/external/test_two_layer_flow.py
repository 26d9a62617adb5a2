"""Advection, energy and stepping of the two-layer ocean, against outside values."""

import numpy as np
import pytest

from eddyshed.reduce.contract import check_model
from eddyshed.solver.integrate import integrate
from eddyshed.solver.oceans.two_layer import TwoLayer, TwoLayerSettings
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.stepping import IntegratingFactorRK4

LENGTHS = (2 * np.pi, 3.0)
SPACES = {"periodic": Periodic, "channel": Channel}
SETTINGS = TwoLayerSettings(
    upper_depth=1.0,
    lower_depth=4.0,
    deformation_radius=0.25,
    upper_current=0.9,
    lower_current=-0.3,
    beta=2.0,
    drag=0.1,
    viscosity=0.01,
    hyperviscosity_time=100.0,
)


def ocean(space, points=(16, 12), settings=SETTINGS, lengths=LENGTHS, forced=False):
    box = SPACES[space](points, lengths)
    source = np.random.default_rng(2).standard_normal(box.n_real) if forced else None
    return TwoLayer(settings, box, source)


def broadband(model, seed=0):
    """A state with power on every mode, the hardest case for aliasing."""
    return np.random.default_rng(seed).standard_normal(model.size)


def smooth(model, seed=3):
    """A state whose amplitudes fall off with the wavenumber."""
    return broadband(model, seed) / (1 + np.tile(model.space.k_squared, 2))


def run(model, z, step, steps):
    """States at the end of each step, the start included."""
    state = z.copy()
    states = [z.copy()]
    stepper = IntegratingFactorRK4(model, step)
    for _ in integrate(stepper, state, first_step=0, last_step=steps, energy_bound=1e6):
        states.append(state.copy())  # noqa: PERF401  the loop advances `state`
    return states


@pytest.mark.parametrize("space", SPACES)
def test_contract(space):
    model = ocean(space, forced=True)
    check_model(model)
    check_model(model, states=np.array([smooth(model, seed) for seed in range(4)]))


def test_energy_and_enstrophies_of_a_known_field():
    # By hand, for h = (1/5, 4/5), F1 = 12.8, F2 = 3.2, psi1 = cos x and psi2 =
    # sin(2 y) / 2: kinetic energy 1/4, available potential 4/5; q1 = -13.8 cos x +
    # 6.4 sin 2y gives Z1 = 57.85, q2 = 3.2 cos x - 3.6 sin 2y gives Z2 = 5.8.
    settings = TwoLayerSettings(
        upper_depth=200.0, lower_depth=800.0, deformation_radius=0.25
    )
    model = ocean("periodic", (16, 16), settings, (2 * np.pi, 2 * np.pi))
    x, y = model.space.grid_axes
    flat = np.ones((16, 16))
    psi = [np.cos(x) * flat, 0.5 * np.sin(2 * y)[:, None] * flat]
    psi = np.array([model.space.to_modes(field) for field in psi])
    z = model.coordinates(*psi)
    budget = model.budget(0.0, z)
    # Round-off of transforms of a few hundred points.
    assert budget["energy"] == pytest.approx(1.05, rel=1e-13)
    assert budget["potential_energy"] == pytest.approx(0.8, rel=1e-13)
    assert budget["upper_enstrophy"] == pytest.approx(57.85, rel=1e-13)
    assert budget["lower_enstrophy"] == pytest.approx(5.8, rel=1e-13)
    assert model.inner(z, z) / 2 == pytest.approx(1.05, rel=1e-13)
    # The other form of the energy, -(1/2) sum h_i <psi_i q_i> (Pedlosky 1987).
    q = model.potential_vorticity(psi)
    other = -0.5 * np.sum([[0.2], [0.8]] * model.space.norm * psi * q)
    assert other == pytest.approx(1.05, rel=1e-13)


@pytest.mark.parametrize("space", SPACES)
@pytest.mark.parametrize("points", [(16, 12), (24, 32)])
def test_invariants_of_the_advection(space, points):
    # The truncated advection conserves the energy and the potential enstrophy of
    # each layer separately (Salmon, Lectures on Geophysical Fluid Dynamics, 1998):
    # its work vanishes against the sum of its terms' sizes.
    model = ocean(space, points)
    z = broadband(model)
    rate = model.bilinear(z, z)
    work = z * rate
    # Bound: round-off of a sum of 10^3 terms, each good to 1e-15.
    assert abs(work.sum()) < 1e-13 * np.abs(work).sum()
    q = model.potential_vorticity(model.streamfunctions(z))
    q_rate = model.potential_vorticity(model.streamfunctions(rate))
    for layer in range(2):
        work = model.space.norm * q[layer] * q_rate[layer]
        assert abs(work.sum()) < 1e-13 * np.abs(work).sum()


def exponentials(space, name):
    """Amplitudes of exp(i(k x + l y)) of each unit field, by a fit on the grid.

    Returns
    -------
    matrix, shape (n_waves, n_real), complex
    waves, shape (n_waves, 2): all (k, l), both signs, integers of their box.
    """
    (cx, cy), (lx, ly) = space.cutoff, space.lengths
    height = ly if name == "periodic" else 2 * ly
    k, m = np.meshgrid(np.arange(-cx, cx + 1), np.arange(-cy, cy + 1))
    waves = np.stack([k.ravel(), m.ravel()], axis=1)
    x, y = (a.ravel() for a in np.meshgrid(*space.grid_axes))
    if name == "channel":  # a series of sines is odd about the wall y = 0
        x, y = np.tile(x, 2), np.concatenate([y, -y])
    phase = (
        2 * np.pi * (np.outer(x / lx, waves[:, 0]) + np.outer(y / height, waves[:, 1]))
    )
    fields = np.array([space.to_grid(unit).ravel() for unit in np.eye(space.n_real)])
    if name == "channel":
        fields = np.concatenate([fields, -fields], axis=1)
    matrix = np.linalg.lstsq(np.exp(1j * phase), fields.T.astype(complex), rcond=None)[
        0
    ]
    return matrix, waves, 2 * np.pi * waves / (lx, height)


@pytest.mark.parametrize("space", SPACES)
def test_advection_is_the_convolution(space):
    # J(a, b) of exponentials p and q has the amplitude -(p_x q_y - p_y q_x) a_p b_q
    # at p + q: all pairs of a small truncation, one by one, with the vorticity of
    # each layer made of the definition. No transform takes part.
    model = ocean(space, (8, 8))
    matrix, waves, wavenumbers = exponentials(model.space, space)
    z = broadband(model)
    psi = model.streamfunctions(z) @ matrix.T
    k_squared = (wavenumbers**2).sum(axis=1)
    f1, f2 = SETTINGS.coupling
    q = [
        -k_squared * psi[0] + f1 * (psi[1] - psi[0]),
        -k_squared * psi[1] + f2 * (psi[0] - psi[1]),
    ]
    index = {tuple(wave): i for i, wave in enumerate(waves)}
    expected = np.zeros((2, len(waves)), dtype=complex)
    for i, p in enumerate(wavenumbers):
        for j, r in enumerate(wavenumbers):
            target = index.get(tuple(waves[i] + waves[j]))
            if target is not None:
                cross = p[0] * r[1] - p[1] * r[0]
                for layer in range(2):
                    expected[layer, target] -= -cross * psi[layer][i] * q[layer][j]
    rate = model.streamfunctions(model.bilinear(z, z))
    found = model.potential_vorticity(rate) @ matrix.T
    # dq/dt = -J; the mean of q is not held by the space, nor is it changed by J.
    # Round-off of a fit and of sums of 10^3 terms.
    np.testing.assert_allclose(found, expected, atol=1e-12 * np.abs(expected).max())


@pytest.mark.parametrize("space", SPACES)
def test_wind_drives_the_upper_layer_alone(space):
    # Pedlosky (1987), chapter 6: the source stands in the upper layer's equation.
    model = ocean(space, forced=True)
    rest = np.zeros(model.size)
    rate = model.streamfunctions(model.tendency(0.0, rest))
    q_rate = model.potential_vorticity(rate)
    # Round-off of sources of order one.
    np.testing.assert_allclose(q_rate[0], model.source, atol=1e-13)
    np.testing.assert_allclose(q_rate[1], 0, atol=1e-13)


def test_uniform_current_carries_the_flow():
    # Galilean invariance: one current in both layers only carries the flow along,
    # U t east, here one of twelve grid intervals in t = 0.5.
    still = TwoLayerSettings(
        upper_depth=1.0, lower_depth=4.0, deformation_radius=0.25, beta=2.0, drag=0.1
    )
    speed = 2 * np.pi / 12 / 0.5
    moving = TwoLayerSettings(
        upper_depth=1.0,
        lower_depth=4.0,
        deformation_radius=0.25,
        beta=2.0,
        drag=0.1,
        upper_current=speed,
        lower_current=speed,
    )
    first = ocean("channel", (12, 12), still)
    second = ocean("channel", (12, 12), moving)
    z = smooth(first)
    ends = [run(model, z, 0.01, 50)[-1] for model in (first, second)]
    a, b = (model.fields(end) for model, end in zip((first, second), ends, strict=True))
    for name, field in a.items():
        size = np.abs(field).max()
        # The current is in the exact part, so the stages differ by a rotation
        # only: round-off of fifty steps.
        np.testing.assert_allclose(
            b[name], np.roll(field, 1, axis=1), atol=1e-11 * size
        )


@pytest.mark.parametrize("space", SPACES)
def test_order_in_time(space):
    # Classical Runge-Kutta with an integrating factor has order four (Canuto et al.,
    # Spectral Methods in Fluid Dynamics, 1988). Successive halvings.
    model = ocean(space, (24, 24), forced=True)
    start = smooth(model)
    reference = run(model, start, 0.8 / 512, 512)[-1]
    ends = [run(model, start, 0.8 / n, n)[-1] for n in (32, 64, 128)]
    errors = [np.linalg.norm(end - reference) for end in ends]
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    # Within a tenth of nominal: the reference adds 1/256 of the last error.
    np.testing.assert_allclose(orders, 4.0, atol=0.1)


RATES = {"m2 s-2": "m2 s-3", "s-2": "s-3"}
TERMS = {
    "energy": ("work", "shear_production", "bottom_drag", "dissipation"),
    "enstrophy": (
        "enstrophy_work",
        "enstrophy_production",
        "enstrophy_bottom_drag",
        "enstrophy_dissipation",
    ),
}


@pytest.mark.parametrize("space", SPACES)
@pytest.mark.parametrize("quantity", TERMS)
def test_budgets_close(space, quantity):
    model = ocean(space, (24, 24), forced=True)
    states = run(model, smooth(model), 0.005, 200)
    budgets = [model.budget(0.0, z) for z in states]
    assert set(model.budget_units) == set(budgets[0])
    units = model.budget_units[quantity][0]
    rates = [n for n, (unit, _) in model.budget_units.items() if unit == RATES[units]]
    assert set(rates) == set(TERMS[quantity])
    terms = np.array([[budget[name] for name in TERMS[quantity]] for budget in budgets])
    assert np.abs(terms).max(axis=0).min() > 0  # every term takes part
    # At an instant the terms are the rate of the quantity by its definition, from
    # the whole tendency: energy z.z / 2, enstrophy sum h_i <q_i^2> / 2. The bound is
    # round-off of sums of 10^3 terms, most of them of the advection, which cancel.
    z = states[-1]
    rate = model.tendency(0.0, z)
    if quantity == "energy":
        instant = z * rate
    else:
        q, q_rate = (
            model.potential_vorticity(model.streamfunctions(x)) for x in (z, rate)
        )
        instant = np.array([[0.2], [0.8]]) * model.space.norm * q * q_rate
    assert abs(terms[-1].sum() - instant.sum()) < 1e-13 * np.abs(instant).sum()
    # Over a run the sum of their Simpson integrals is the change: both the rule and
    # the scheme have errors of order (rate * step)^4, with rates up to 10 about 1e-6
    # of the exchange.
    weights = np.ones(len(terms))
    weights[1:-1:2], weights[2:-1:2] = 4, 2
    gained = 0.005 / 3 * weights @ terms
    change = budgets[-1][quantity] - budgets[0][quantity]
    assert abs(change - gained.sum()) < 1e-6 * np.abs(gained).sum()


def test_enstrophies_are_conserved_in_a_run():
    # Without friction, shear and beta the drift over a run is that of the scheme.
    # For a quadratic invariant classical Runge-Kutta's is of order five, one above
    # its own (Hairer, Lubich & Wanner, Geometric Numerical Integration, IV.2, and
    # common practice): 32 per halving of the step.
    settings = TwoLayerSettings(
        upper_depth=1.0, lower_depth=4.0, deformation_radius=0.25
    )
    model = ocean("periodic", (24, 24), settings)
    names = ("energy", "upper_enstrophy", "lower_enstrophy")
    start = smooth(model)
    before = model.budget(0.0, start)
    drifts = []
    for steps in (60, 120):
        after = model.budget(0.0, run(model, start, 1.0 / steps, steps)[-1])
        drifts.append([abs(after[name] / before[name] - 1) for name in names])
    orders = np.log2(np.array(drifts[0]) / np.array(drifts[1]))
    # The next order of the drift, of a step of 1/60 at rates of order 10.
    np.testing.assert_allclose(orders, 5.0, atol=0.1)
