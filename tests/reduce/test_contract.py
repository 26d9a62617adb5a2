"""The contract: what it accepts, and that each promise can be found broken."""

import pickle

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

from eddyshed.reduce.contract import (
    Model,
    check_model,
    conserves_energy,
    dual_vectors,
    labels,
    metric,
    project,
    tendency,
)
from eddyshed.solver.errors import ContractError

SIZE = 7


@pytest.fixture
def rng():
    return np.random.Generator(np.random.PCG64(20))


def as_kind(kind, rng, **changes):
    """A model of a class below, with the parts of a random sound one."""
    sound = random_model(rng, SIZE)
    parts = {
        name: getattr(sound, name)
        for name in ("constant", "matrix", "tensor", "weights", "energy_conserving")
    }
    return kind(**{**parts, **changes})


# --- sound models -----------------------------------------------------------


def test_sound_models_pass(rng):
    diagonal = np.diag(rng.uniform(0.1, 10, SIZE))
    for model in (
        random_model(rng, SIZE),
        random_model(rng, SIZE, weights=diagonal),
        random_model(rng, SIZE, weights=random_weights(rng, SIZE)),
        random_model(rng, SIZE, conserving=False),
        random_model(rng, 1, conserving=False),
        vorticity_model(vorticity_waves(1.0, 2.0, [(0, 1), (1, 0), (1, 1)])),
        convection_model(2.2, [(1, 1)], [(1, 1), (0, 2)], prandtl=10, rayleigh=1e4),
        as_kind(Fused, rng),
        as_kind(Labelled, rng),
    ):
        assert isinstance(model, Model)
        check_model(model, rng)
        check_model(model)


def test_scales_come_from_the_states(rng):
    """Broken only where the states are large: seen only with their scale."""
    model = as_kind(CubicBeyondTen, rng)
    check_model(model, rng)
    with pytest.raises(ContractError, match="linear: is not linear"):
        check_model(model, rng, states=100 * rng.standard_normal((5, SIZE)))
    check_model(model, rng, states=np.zeros((5, SIZE)))


def test_zero_parts_pass(rng):
    nothing = np.zeros
    model = Quadratic(
        nothing(SIZE), nothing((SIZE,) * 2), nothing((SIZE,) * 3), np.eye(SIZE), True
    )
    check_model(model, rng)


class Fused(Quadratic):
    def tendency(self, t, z):
        operator = self.matrix + np.einsum("abc,...c->...ab", self.tensor, z)
        return self.forcing(t) + np.einsum("...ab,...b->...a", operator, z)


class Labelled(Quadratic):
    labels = tuple("abcdefg")


class CubicBeyondTen(Quadratic):
    def linear(self, z):
        return super().linear(z) + np.maximum(np.abs(z) - 10, 0)


# --- one broken model for each promise --------------------------------------


class NoBilinear:
    size = SIZE

    def forcing(self, t):
        return np.zeros(SIZE)

    def linear(self, z):
        return 0.0 * z

    def inner(self, u, w):
        return np.sum(u * w, axis=-1)


class FloatSize(Quadratic):
    size = 7.0


class NegativeSize(Quadratic):
    size = -1


class TendencyIsNumber(Quadratic):
    tendency = 3.0


class DeclaresByWord(Quadratic):
    def __init__(self, **parts):
        super().__init__(**{**parts, "energy_conserving": "yes"})


class TooFewLabels(Quadratic):
    labels = ("a", "b")


class ListOfLabels(Quadratic):
    labels = list("abcdefg")  # noqa: RUF012 (the fault that is to be found)


class ForcingColumn(Quadratic):
    def forcing(self, t):
        return super().forcing(t)[:, np.newaxis]


class ForcingInfinite(Quadratic):
    def forcing(self, t):
        return super().forcing(t) / np.float64(t) if t else np.full(SIZE, np.inf)


class ForcingComplex(Quadratic):
    def forcing(self, t):
        return super().forcing(t).astype(complex)


class LinearNeedsOneState(Quadratic):
    def linear(self, z):
        return self.matrix @ z


class LinearSingle(Quadratic):
    def linear(self, z):
        return super().linear(z).astype(np.float32)


class BatchMixesStates(Quadratic):
    def linear(self, z):
        made = super().linear(z)
        return made if z.ndim == 1 else made - 1e-9 * made.mean(axis=0)


class BilinearForgetsBroadcast(Quadratic):
    def bilinear(self, u, w):
        return np.einsum("abc,...b,...c->...a", self.tensor, u, np.ravel(w)[:SIZE])


class BilinearBatchShape(Quadratic):
    def bilinear(self, u, w):
        return np.atleast_2d(super().bilinear(u, w))


class InnerKeepsAxis(Quadratic):
    def inner(self, u, w):
        return super().inner(u, w)[..., np.newaxis]


class Affine(Quadratic):
    def linear(self, z):
        return super().linear(z) + 1e-8


class NotSymmetric(Quadratic):
    def bilinear(self, u, w):
        return super().bilinear(u, w) + 1e-8 * np.roll(u, 1, axis=-1) * w


class NotLinearInFirst(Quadratic):
    def bilinear(self, u, w):
        return super().bilinear(u, w) * (1 + 1e-8 * np.sign(u[..., :1]))


class NotLinearInSecond(Quadratic):
    def bilinear(self, u, w):
        return super().bilinear(u, w) * (1 + 1e-8 * np.sign(w[..., :1]))


class InnerNotSymmetric(Quadratic):
    def inner(self, u, w):
        return super().inner(u, w) + 1e-8 * u[..., 0] * w[..., 1]


class InnerNotLinear(Quadratic):
    def inner(self, u, w):
        return np.sum(np.abs(u) * np.abs(w), axis=-1)


class InnerDegenerate(Quadratic):
    def inner(self, u, w):
        return np.sum(u[..., 1:] * w[..., 1:], axis=-1)


class InnerNegative(Quadratic):
    def inner(self, u, w):
        return -super().inner(u, w)


class NotConserving(Quadratic):
    def bilinear(self, u, w):
        return super().bilinear(u, w) + 1e-10 * u * w


class FusedForgetsForcing(Fused):
    def tendency(self, t, z):
        return super().tendency(t, z) - 1e-8 * self.constant


class ChangesInput(Quadratic):
    def linear(self, z):
        made = super().linear(z)
        z += 1.0
        return made


class ReturnsInput(Quadratic):
    def linear(self, z):
        return z


class KeepsBuffer(Quadratic):
    buffers = {}  # noqa: RUF012 (the fault that is to be found)

    def linear(self, z):
        made = super().linear(z)
        buffer = self.buffers.setdefault(made.shape, np.empty(made.shape))
        buffer[...] = made
        return buffer


class ReturnsOwnForcing(Quadratic):
    def forcing(self, t):
        return self.constant


class CountsCalls(Quadratic):
    calls = [0]  # noqa: RUF012 (the fault that is to be found)

    def linear(self, z):
        self.calls[0] += 1
        return super().linear(z) * (1 + 1e-15 * self.calls[0])


class NotPicklable(Quadratic):
    def __reduce__(self):
        message = "plans cannot be pickled"
        raise TypeError(message)


class PickleLosesPart(Quadratic):
    def __reduce__(self):
        parts = self.constant, 0 * self.matrix, self.tensor, self.weights, True
        return Quadratic, parts


class Raises(Quadratic):
    def bilinear(self, u, w):
        message = "no more memory"
        raise MemoryError(message)


@pytest.mark.parametrize(
    ("kind", "complaint"),
    [
        (FloatSize, "size: is 7.0, must be an int"),
        (NegativeSize, "size: is -1, must be an int of at least 1"),
        (TendencyIsNumber, "tendency: is not callable"),
        (DeclaresByWord, "energy_conserving: is 'yes', must be True or False"),
        (TooFewLabels, "labels: must be a tuple of 7 str"),
        (ListOfLabels, "labels: must be a tuple of 7 str"),
        (ForcingColumn, r"forcing: returned shape \(7, 1\), must be \(7,\)"),
        (ForcingInfinite, "forcing: returned values that are not finite"),
        (ForcingComplex, "forcing: returned type complex128, must be float64"),
        (LinearNeedsOneState, "linear: raised ValueError"),
        (LinearSingle, "linear: returned type float32, must be float64"),
        (BatchMixesStates, "linear: a batch of states gives other values"),
        (BilinearForgetsBroadcast, r"bilinear: returned shape \(3, 1, 7\)"),
        (BilinearBatchShape, r"bilinear: returned shape \(1, 7\), must be \(7,\)"),
        (InnerKeepsAxis, r"inner: returned shape \(1,\), must be \(\)"),
        (Affine, "linear: is not linear"),
        (NotSymmetric, "bilinear: is not symmetric"),
        (NotLinearInFirst, "bilinear: is not linear in its first argument"),
        (NotLinearInSecond, "bilinear: is not linear in its second argument"),
        (InnerNotSymmetric, "inner: is not symmetric"),
        (InnerNotLinear, "inner: is not linear"),
        (InnerDegenerate, "inner: is not positive; a unit state in coordinate 0"),
        (InnerNegative, r"inner: is not positive; inner\(z, z\) must exceed 0"),
        (NotConserving, "energy_conserving: is declared, but"),
        (FusedForgetsForcing, "tendency: differs from"),
        (ChangesInput, "linear: changes its input"),
        (ReturnsInput, "linear: returns its input"),
        (KeepsBuffer, "linear: a second call changes the first result"),
        (ReturnsOwnForcing, "forcing: returns memory that it keeps"),
        (CountsCalls, "linear: gives different bits for the same input"),
        (NotPicklable, "pickling: raised TypeError: plans cannot be pickled"),
        (PickleLosesPart, "linear: differs in a pickled copy"),
        (Raises, "bilinear: raised MemoryError: no more memory"),
    ],
)
def test_broken_promise_is_found(kind, complaint, rng):
    with pytest.raises(ContractError, match=complaint):
        check_model(as_kind(kind, rng), rng)


def test_missing_member_is_found(rng):
    with pytest.raises(ContractError, match="bilinear: is missing or not callable"):
        check_model(NoBilinear(), rng)


def test_all_broken_promises_are_listed(rng):
    with pytest.raises(ContractError) as caught:
        check_model(as_kind(Many, rng), rng)
    text = str(caught.value)
    assert text.startswith("model Many breaks 4 promises:\n  - ")
    for complaint in (
        "labels: must",
        "forcing: returned shape",
        "linear: is not linear",
        "energy_conserving: is declared",
    ):
        assert complaint in text
    assert str(pickle.loads(pickle.dumps(caught.value))) == text


class Many(ForcingColumn, Affine, NotConserving, TooFewLabels):
    pass


# --- what is computed with a model ------------------------------------------


def test_tendency_is_the_sum_or_the_fused_one(rng):
    model, fused = random_model(rng, SIZE), as_kind(Fused, rng)
    z = rng.standard_normal((4, SIZE))
    quadratic = np.einsum("abc,nb,nc->na", model.tensor, z, z)
    expected = model.constant + z @ model.matrix.T + quadratic
    np.testing.assert_allclose(tendency(model, 0.0, z), expected, rtol=1e-13)
    assert np.array_equal(tendency(fused, 0.0, z), fused.tendency(0.0, z))


def test_optional_members_have_defaults(rng):
    model, named = random_model(rng, SIZE), as_kind(Labelled, rng)
    assert labels(model) == ("z0", "z1", "z2", "z3", "z4", "z5", "z6")
    assert labels(named) == tuple("abcdefg")
    assert conserves_energy(model)
    assert not conserves_energy(NoBilinear())


@pytest.mark.parametrize("is_diagonal", [True, False])
def test_projection_inverts_expansion(is_diagonal, rng):
    weights = random_weights(rng, SIZE)
    if is_diagonal:
        weights = np.diag(np.diag(weights))
    model = random_model(rng, SIZE, weights=weights)
    found = metric(model)
    np.testing.assert_allclose(
        found, np.diag(weights) if is_diagonal else weights, rtol=1e-14
    )
    vectors = orthonormal_vectors(rng, weights, 3)
    coefficients = rng.standard_normal((5, 4, 3))
    states = coefficients @ vectors.T
    # Round-off of sums of seven products of order ten.
    tolerance = {"rtol": 0, "atol": 1e-13}
    np.testing.assert_allclose(
        project(model, vectors, states), coefficients, **tolerance
    )
    outside = rng.standard_normal(SIZE)
    outside -= vectors @ (vectors.T @ weights @ outside)
    np.testing.assert_allclose(project(model, vectors, outside), 0, **tolerance)
    np.testing.assert_allclose(
        dual_vectors(model, vectors), weights @ vectors, **tolerance
    )


def test_one_small_off_diagonal_entry_is_seen(rng):
    """One pair of coordinates among two hundred, coupled by a part in 10^6."""
    weights = np.eye(200)
    weights[17, 130] = weights[130, 17] = 1e-6
    model = Quadratic(np.zeros(200), np.zeros((200, 200)), np.zeros((1, 1, 1)), weights)
    assert metric(model).shape == (200, 200)
    np.testing.assert_array_equal(metric(model), weights)


def test_a_diagonal_product_costs_each_unit_state_once(rng):
    model = as_kind(CountsProducts, rng)
    CountsProducts.pairs[0] = 0
    project(model, np.eye(SIZE), rng.standard_normal((1000, SIZE)))
    assert CountsProducts.pairs[0] == SIZE + 3


class CountsProducts(Quadratic):
    pairs = [0]  # noqa: RUF012 (counts over all instances)

    def inner(self, u, w):
        result = super().inner(u, w)
        self.pairs[0] += result.size
        return result
