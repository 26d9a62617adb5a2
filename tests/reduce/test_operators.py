"""Galerkin tensors against direct evaluation and published truncations."""

import dataclasses
import math
import tracemalloc

import numpy as np
import pytest
from toys import (
    Quadratic,
    convection_model,
    orthonormal_vectors,
    random_model,
    random_weights,
    vorticity_model,
    vorticity_waves,
)

from eddyshed.reduce.contract import check_model, tendency
from eddyshed.reduce.operators import galerkin, memory_bytes
from eddyshed.solver.errors import ContractError, DataError
from eddyshed.solver.time_functions import Ramp

SIZE, NX, NY = 12, 3, 7


@pytest.fixture
def rng():
    return np.random.Generator(np.random.PCG64(31))


def split(model, rng, nx=NX, ny=NY):
    vectors = orthonormal_vectors(rng, model.weights, nx + ny)
    return vectors[:, :nx], vectors[:, nx:], rng.standard_normal(model.size)


def tendency_of_x(op, x, y):
    """dx/dt as the docstring of Operators states it."""
    return (
        op.F1
        + op.A11 @ x
        + np.einsum("ijk,j,k", op.B111, x, x)
        + op.A12 @ y
        + 2 * np.einsum("ijm,j,m", op.B112, x, y)
        + np.einsum("imn,m,n", op.B122, y, y)
    )


def tendency_of_y(op, x, y):
    """dy/dt as the docstring of Operators states it, less what y does to itself."""
    return (
        op.F2
        + op.A21 @ x
        + np.einsum("mjk,j,k", op.B211, x, x)
        + 2 * np.einsum("mjn,j,n", op.B212, x, y)
    )


# --- against direct evaluation ----------------------------------------------


@pytest.mark.parametrize("conserving", [True, False])
def test_tendencies_equal_those_of_the_model(conserving, rng):
    weights = random_weights(rng, SIZE)
    model = random_model(rng, SIZE, weights=weights, conserving=conserving)
    u, v, mean = split(model, rng)
    op = galerkin(model, u, v, mean)
    assert (op.nx, op.ny) == (NX, NY)
    for _ in range(5):
        x, y = rng.standard_normal(NX), rng.standard_normal(NY)
        made = tendency(model, 0.0, mean + u @ x + v @ y)
        # What y does to itself is not projected.
        itself = model.linear(v @ y) + model.bilinear(v @ y, v @ y)
        itself += 2 * model.bilinear(mean, v @ y)
        # Round-off of sums of a thousand products of order ten.
        tolerance = {"rtol": 0, "atol": 1e-10}
        np.testing.assert_allclose(
            tendency_of_x(op, x, y), u.T @ weights @ made, **tolerance
        )
        np.testing.assert_allclose(
            tendency_of_y(op, x, y), v.T @ weights @ (made - itself), **tolerance
        )


def test_tensors_do_not_depend_on_the_promise(rng):
    """Inferred from conservation or evaluated: the same coefficients."""
    model = random_model(rng, SIZE, weights=random_weights(rng, SIZE))
    silent = dataclasses.replace(model, energy_conserving=False)
    parts = split(model, rng)
    inferred, evaluated = galerkin(model, *parts), galerkin(silent, *parts)
    for name in ("F1", "F2", "A11", "A12", "A21", "B111", "B112", "B122", "B211"):
        found = getattr(inferred, name), getattr(evaluated, name)
        # Round-off, where coefficients are of order one.
        np.testing.assert_allclose(*found, rtol=0, atol=1e-12, err_msg=name)
    assert inferred.cyclic_residual < 1e-12
    assert evaluated.cyclic_residual < 1e-12


def test_energy_is_conserved_to_the_last_digits(rng):
    model = random_model(rng, SIZE, weights=random_weights(rng, SIZE))
    op = galerkin(Noisy(**vars(model)), *split(model, rng))
    largest = np.abs(op.B122).max()
    for sums in (
        op.B111 + op.B111.transpose(1, 2, 0) + op.B111.transpose(2, 0, 1),
        op.B112 + op.B112.transpose(1, 0, 2) + op.B211.transpose(1, 2, 0),
        op.B122 + op.B212.transpose(1, 0, 2) + op.B212.transpose(1, 2, 0),
    ):
        # Three additions in double precision.
        assert np.abs(sums).max() < 1e-15 * largest
    # The noise was seen before it was taken off.
    assert 1e-14 < op.cyclic_residual < 1e-11


class Noisy(Quadratic):
    """A model whose B is off in the thirteenth digit, as after transforms."""

    def bilinear(self, u, w):
        made = super().bilinear(u, w)
        size = np.sqrt(np.sum(np.square(made), axis=-1, keepdims=True))
        return made + 1e-13 * size * np.sin(1e3 * np.arange(self.size))


def test_round_off_does_not_fill_sparse_tensors():
    """Fourier modes interact in triads only, whatever noise transforms add."""
    model = vorticity_model(
        vorticity_waves(1.0, 1.0, [(0, 1), (0, 2), (1, 0), (1, 1), (1, 2), (1, -1)])
    )
    vectors = np.eye(12) / np.sqrt(np.diag(model.weights))
    parts = vectors[:, :4], vectors[:, 4:], np.zeros(12)
    op = galerkin(Noisy(**vars(model)), *parts)
    exact = np.abs(model.tensor) > 1e-12  # round-off of the quadrature
    assert not op.B111.any()  # waves with parallel crests do not interact
    assert not op.B211.any()
    assert np.array_equal(op.B112 != 0, exact[:4, :4, 4:])
    assert np.array_equal(op.B212 != 0, exact[4:, :4, 4:])
    assert 0 < np.mean(op.B212 != 0) < 0.2


def test_rotated_bases_give_rotated_tensors(rng):
    model = random_model(rng, SIZE, weights=random_weights(rng, SIZE))
    u, v, mean = split(model, rng)
    p, _ = np.linalg.qr(rng.standard_normal((NX, NX)))
    q, _ = np.linalg.qr(rng.standard_normal((NY, NY)))
    op, turned = galerkin(model, u, v, mean), galerkin(model, u @ p, v @ q, mean)
    turn = {"i": p, "j": p, "k": p, "m": q, "n": q}
    for name, axes in {
        "F1": "i",
        "F2": "m",
        "A11": "ij",
        "A12": "im",
        "A21": "mi",
        "B111": "ijk",
        "B112": "ijm",
        "B122": "imn",
        "B211": "mij",
        "B212": "min",
    }.items():
        expected = getattr(op, name)
        for axis, letter in enumerate(axes):
            expected = np.moveaxis(
                np.tensordot(turn[letter].T, expected, axes=(1, axis)), 0, axis
            )
        # Round-off, where coefficients are of order one.
        np.testing.assert_allclose(
            getattr(turned, name), expected, rtol=0, atol=1e-12, err_msg=name
        )


def test_forcing_is_averaged_over_its_times(rng):
    model = random_model(rng, SIZE)
    u, v, mean = split(model, rng)
    steady = galerkin(model, u, v, mean)
    assert steady.variation is None
    growing = Growing(**vars(model))
    late = galerkin(growing, u, v, mean, times=np.array([0.0, 1.0, 5.0]))
    # The factor of the ramp is 0, 1 and 5: of mean two.
    np.testing.assert_allclose(
        late.F1 - steady.F1, 2 * u.T @ model.constant, rtol=0, atol=1e-13
    )
    np.testing.assert_allclose(
        late.F2 - steady.F2, 2 * v.T @ model.constant, rtol=0, atol=1e-13
    )
    np.testing.assert_allclose(late.A11, steady.A11, rtol=0, atol=0)
    np.testing.assert_allclose(
        late.variation.driver()(7.0),
        5 * np.hstack([u, v]).T @ model.constant,
        rtol=0,
        atol=1e-13,
    )


class Growing(Quadratic):
    @property
    def variations(self):
        ramp = Ramp(start=0.0, end=10.0, before=0.0, after=10.0)
        return ((ramp, self.constant),)

    def forcing(self, t):
        return self.constant * (1 + t)


class Undeclared(Growing):
    variations = ()


class Misdeclared(Growing):
    def forcing(self, t):
        return self.constant * (1 + 1.001 * t)


@pytest.mark.parametrize(
    ("kind", "complaint"),
    [
        (Undeclared, "its forcing varies: .*let the member variations be pairs"),
        (Misdeclared, "does not vary as its variations say"),
    ],
)
def test_forcing_that_varies_must_say_how(kind, complaint, rng):
    model = random_model(rng, SIZE)
    u, v, mean = split(model, rng)
    with pytest.raises(ContractError, match=complaint):
        galerkin(kind(**vars(model)), u, v, mean, times=np.arange(5.0))


# --- work and memory --------------------------------------------------------


class CountsPairs(Quadratic):
    pairs = [0]  # noqa: RUF012 (counts over all instances)

    def bilinear(self, u, w):
        made = super().bilinear(u, w)
        self.pairs[0] += made[..., 0].size
        return made


@pytest.mark.parametrize(
    ("conserving", "pairs"),
    # B(mean, .), then B(u, u) and B(u, v), then either four probes or B(v, v).
    [(True, 1 + 10 + 6 + 21 + 4), (False, 1 + 10 + 6 + 21 + 28)],
)
def test_number_of_evaluations(conserving, pairs, rng):
    model = random_model(rng, SIZE, conserving=conserving)
    CountsPairs.pairs[0] = 0
    calls = []
    galerkin(
        CountsPairs(**vars(model)),
        *split(model, rng),
        batch=4,
        progress=lambda done, total: calls.append((done, total)),
    )
    assert CountsPairs.pairs[0] == pairs
    assert calls[-1] == (pairs, pairs)
    assert [done for done, _ in calls] == sorted({done for done, _ in calls})


def test_batches_change_nothing(rng):
    model = random_model(rng, SIZE)
    parts = split(model, rng)
    whole, single = galerkin(model, *parts), galerkin(model, *parts, batch=1)
    for name in ("F1", "A12", "B111", "B112", "B122", "B211", "B212"):
        found = getattr(whole, name), getattr(single, name)
        # A product of matrices adds in another order than that of vectors.
        np.testing.assert_allclose(*found, rtol=0, atol=1e-13, err_msg=name)


def test_memory_stays_below_its_forecast(rng):
    """Measured while 200 modes are projected, batches of one and of many."""
    n, nx, ny = 2000, 20, 180
    model = Diagonal(n)
    vectors = np.eye(n)[:, : nx + ny]
    parts = vectors[:, :nx].copy(), vectors[:, nx:].copy(), np.ones(n)
    tracemalloc.start()
    galerkin(model, *parts)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    forecast = memory_bytes(n, nx, ny)
    # Not only a bound: a forecast that is tens of times too high is no help.
    assert 0.2 * forecast < peak < forecast


class Diagonal:
    """Many coordinates with a cheap B; conserves nothing, promises nothing."""

    def __init__(self, size):
        self.size = size

    def forcing(self, t):
        return np.zeros(self.size)

    def linear(self, z):
        return -z

    def bilinear(self, u, w):
        return (np.roll(u, 1, axis=-1) * w + np.roll(w, 1, axis=-1) * u) / 2

    def inner(self, u, w):
        return np.einsum("...a,...a", u, w)


# --- bad input --------------------------------------------------------------


def test_false_promise_is_found(rng):
    model = random_model(rng, SIZE, conserving=False)
    liar = dataclasses.replace(model, energy_conserving=True)
    with pytest.raises(ContractError, match="declares energy_conserving, but its"):
        galerkin(liar, *split(model, rng))


def test_false_promise_among_unresolved_vectors_is_found(rng):
    """Only B122 breaks conservation, and it is never evaluated directly."""
    model = random_model(rng, SIZE)
    vectors = np.eye(SIZE)
    tensor = model.tensor.copy()
    tensor[0, NX:, NX:] += 1e-6
    liar = dataclasses.replace(model, tensor=tensor)
    mean = np.zeros(SIZE)
    with pytest.raises(ContractError, match="declares energy_conserving, but its"):
        galerkin(liar, vectors[:, :NX], vectors[:, NX:], mean)
    galerkin(model, vectors[:, :NX], vectors[:, NX:], mean)


def test_bad_bases_are_refused(rng):
    model = random_model(rng, SIZE)
    u, v, mean = split(model, rng)
    with pytest.raises(DataError, match="no resolved vectors"):
        galerkin(model, u[:, :0], v, mean)
    with pytest.raises(DataError, match="vectors resolved 1 and resolved 1 is 4, must"):
        galerkin(model, u * [1, 2, 1], v, mean)
    with pytest.raises(DataError, match="vectors resolved 2 and unresolved 0 is "):
        galerkin(model, u, np.column_stack([u[:, 2], v]), mean)
    with pytest.raises(DataError, match="must be 1; orthonormalise"):
        galerkin(model, u, v * np.nan, mean)
    with pytest.raises(DataError, match="unresolved vectors of shape"):
        galerkin(model, u, v.T, mean)
    with pytest.raises(DataError, match="mean state of shape"):
        galerkin(model, u, v, mean[:-1])


def test_nothing_unresolved_is_allowed(rng):
    model = random_model(rng, SIZE)
    u, v, mean = split(model, rng)
    op = galerkin(model, u, v[:, :0], mean)
    assert (op.B122.shape, op.B212.shape) == ((NX, 0, 0), (0, NX, 0))
    x = rng.standard_normal(NX)
    expected = u.T @ tendency(model, 0.0, mean + u @ x)
    np.testing.assert_allclose(
        tendency_of_x(op, x, np.zeros(0)), expected, rtol=0, atol=1e-11
    )


# --- published truncations --------------------------------------------------


@pytest.mark.parametrize(("k", "m"), [(2.0, 1.0), (0.95, 1.0), (1.0, 3.0)])
def test_maximum_simplification(k, m):
    """The three-mode truncation of the vorticity equation.

    E. N. Lorenz (1960), Tellus 12, 243: with ``psi = -(A / l^2) cos ly
    - (F / k^2) cos kx - 2 G / (k^2 + l^2) sin ly sin kx``

        dA/dt = -(1 / k^2 - 1 / (k^2 + l^2)) k l F G
        dF/dt =  (1 / l^2 - 1 / (k^2 + l^2)) k l A G
        dG/dt = -(1 / l^2 - 1 / k^2) k l A F / 2.

    Here each is a combination of eight coordinates, cosine and sine of four
    waves, and the set must be closed: nothing drives the other five.
    """
    model = vorticity_model(vorticity_waves(k, m, [(0, 1), (1, 0), (1, 1), (1, -1)]))
    check_model(model)
    cos_y, cos_x, cos_sum, cos_difference = np.eye(8)[[0, 2, 4, 6]]
    k2 = k**2 + m**2
    # 2 sin ly sin kx = cos(kx - ly) - cos(kx + ly)
    amplitudes = -np.column_stack(
        [cos_y / m**2, cos_x / k**2, (cos_difference - cos_sum) / k2]
    )
    length = np.sqrt(np.sum(amplitudes * (model.weights @ amplitudes), axis=0))
    u = amplitudes / length
    complete, _ = np.linalg.qr(np.column_stack([np.sqrt(model.weights) @ u, np.eye(8)]))
    v = np.linalg.solve(np.sqrt(model.weights), complete[:, 3:])
    op = galerkin(model, u, v, np.zeros(8))
    # x = length * (A, F, G)
    b = op.B111 / length[:, np.newaxis, np.newaxis] * length[:, np.newaxis] * length
    expected = np.zeros((3, 3, 3))
    expected[0, 1, 2] = -(1 / k**2 - 1 / k2) * k * m / 2
    expected[1, 0, 2] = (1 / m**2 - 1 / k2) * k * m / 2
    expected[2, 0, 1] = -(1 / m**2 - 1 / k**2) * k * m / 4
    expected += expected.transpose(0, 2, 1)
    # Round-off of a quadrature of 576 points.
    np.testing.assert_allclose(b, expected, rtol=0, atol=1e-13)
    np.testing.assert_allclose(op.B211, 0, rtol=0, atol=1e-13)
    np.testing.assert_allclose(op.A11, 0, rtol=0, atol=0)


def test_three_mode_convection():
    """Free convection kept to three modes is the model of Lorenz (1963).

    E. N. Lorenz (1963), J. Atmos. Sci. 20, 130, equations 23 to 27: with the
    wavenumber pi a = pi / sqrt 2 of least critical Rayleigh number, Prandtl
    number 10, r = 28 times that number, 27 pi^4 / 4, and time in units of
    1 / (pi^2 (1 + a^2)),

        X' = -10 X + 10 Y,  Y' = 28 X - Y - X Z,  Z' = X Y - 8/3 Z.
    """
    a, r = 1 / math.sqrt(2), 28.0
    model = convection_model(
        math.pi * a,
        flow=[(1, 1), (2, 1), (1, 2)],
        heat=[(1, 1), (0, 2), (1, 3), (2, 2), (0, 1)],
        prandtl=10.0,
        rayleigh=r * 27 * math.pi**4 / 4,
    )
    check_model(model)
    length = np.sqrt(np.diag(model.weights))
    kept = [0, 3, 4]  # psi 11, theta 11, theta 02
    left_out = [1, 2, 5, 6, 7]
    vectors = np.diag(1 / length)
    op = galerkin(model, vectors[:, kept], vectors[:, left_out], np.zeros(8))
    # psi = sqrt 2 (1 + a^2) / a X, theta = (sqrt 2 Y cos sin - Z sin) / (pi r)
    scale = length[kept] * [
        math.sqrt(2) * (1 + a**2) / a,
        math.sqrt(2) / (math.pi * r),
        -1 / (math.pi * r),
    ]
    time = math.pi**2 * (1 + a**2)
    linear = op.A11 * scale / scale[:, np.newaxis] / time
    quadratic = op.B111 * scale[:, np.newaxis] * scale
    quadratic /= scale[:, np.newaxis, np.newaxis] * time
    expected = np.zeros((3, 3, 3))
    expected[1, 0, 2] = expected[1, 2, 0] = -0.5
    expected[2, 0, 1] = expected[2, 1, 0] = 0.5
    # Round-off of a quadrature of 1024 points and of sums of ten scaled terms.
    tolerance = {"rtol": 0, "atol": 1e-12}
    np.testing.assert_allclose(
        linear, [[-10, 10, 0], [28, -1, 0], [0, 0, -8 / 3]], **tolerance
    )
    np.testing.assert_allclose(quadratic, expected, **tolerance)
    np.testing.assert_allclose(op.F1, 0, rtol=0, atol=0)
    # The truncation is not closed: the heat carried drives theta 13.
    assert np.abs(op.B211[2]).max() > 0.1
