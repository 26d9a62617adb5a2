"""Reduced models: what they accept, and their compiled tendency."""

import dataclasses

import numpy as np
import pytest
from scipy import sparse
from toys import coloured_model, orthonormal_vectors, random_model

from eddyshed.reduce.operators import galerkin
from eddyshed.reduce.reduced import (
    ReducedModel,
    as_operator,
    column_product,
    compiled_drift,
)
from eddyshed.solver.errors import DataError

NX, NY = 3, 5


@pytest.fixture
def rng():
    return np.random.Generator(np.random.PCG64(42))


def plain_drift(model, x, y):
    """The tendency as the class states it, term by term, for one member."""
    dx = model.x_forcing + model.x_from_x @ x + model.x_from_y @ y
    dx = dx + np.einsum("ijk,j,k", model.x_from_xx, x, x)
    dx = dx + 2 * np.einsum("ijm,j,m", model.x_from_xy, x, y)
    dx = dx + np.einsum("imn,m,n", model.x_from_yy, y, y)
    dy = model.y_forcing + model.y_from_x @ x
    dy = dy + np.einsum("mjk,j,k", model.y_from_xx, x, x)
    dy = dy + 2 * np.einsum("mjn,j,n", model.y_from_xy, x, y)
    return dx, dy


def all_terms(rng, *, keep=1.0, conserving):
    """A model with every term; `keep` is the share of entries that are not 0."""
    shapes = {"x_forcing": "x", "x_from_x": "xx", "x_from_xx": "xxx"}
    shapes |= {"x_from_y": "xy", "x_from_xy": "xxy", "x_from_yy": "xyy"}
    shapes |= {"y_forcing": "y", "y_from_x": "yx", "y_from_xx": "yxx"}
    shapes |= {"y_from_xy": "yxy", "rate": "yy"}
    sizes = {"x": NX, "y": NY if keep == 1 else 40}
    fields = {}
    for name, axes in shapes.items():
        shape = [sizes[axis] for axis in axes]
        fields[name] = rng.standard_normal(shape) * (rng.random(shape) < keep)
    if conserving:
        b = fields["y_from_xy"]
        fields["x_from_yy"] = -(b.transpose(1, 0, 2) + b.transpose(1, 2, 0))
    fields["covariance"] = np.eye(sizes["y"])
    return ReducedModel(name="all terms", **fields)


@pytest.mark.parametrize("keep", [1.0, 0.03])
@pytest.mark.parametrize("conserving", [True, False])
def test_compiled_drift_is_the_equation(keep, conserving, rng):
    model = all_terms(rng, keep=keep, conserving=conserving)
    drift = compiled_drift(model)
    for members in (1, 5, 16, 33):
        x = rng.standard_normal((NX, members))
        y = rng.standard_normal((model.ny, members))
        dx, dy = drift(x, y)
        assert (dx.shape, dy.shape) == (x.shape, y.shape)
        for k in range(members):
            expected = plain_drift(model, x[:, k], y[:, k])
            # Round-off of sums of up to 10^3 products of order one.
            np.testing.assert_allclose(dx[:, k], expected[0], rtol=0, atol=1e-12)
            np.testing.assert_allclose(dy[:, k], expected[1], rtol=0, atol=1e-12)


@pytest.mark.parametrize(
    "kept",
    [
        (),
        ("x_from_y",),
        ("y_from_xy",),
        ("x_from_yy",),
        ("x_from_xy", "y_from_xx"),
        ("x_from_xx",),
    ],
)
def test_compiled_drift_with_terms_left_out(kept, rng):
    """Each term may be absent, and absence changes no other."""
    full = all_terms(rng, conserving=False)
    always = ("name", "x_forcing", "x_from_x", "rate", "covariance")
    fields = {name: getattr(full, name) for name in (*always, *kept)}
    fields.setdefault("x_from_xx", np.zeros((NX, NX, NX)))
    model = ReducedModel(**fields)
    x, y = rng.standard_normal((NX, 4)), rng.standard_normal((NY, 4))
    dx, dy = compiled_drift(model)(x, y)
    for k in range(4):
        expected = plain_drift(model, x[:, k], y[:, k])
        np.testing.assert_allclose(dx[:, k], expected[0], rtol=0, atol=1e-13)
        np.testing.assert_allclose(dy[:, k], expected[1], rtol=0, atol=1e-13)


def test_compiled_drift_leaves_its_input_alone(rng):
    drift = compiled_drift(all_terms(rng, conserving=True))
    x, y = rng.standard_normal((NX, 16)), rng.standard_normal((NY, 16))
    kept = x.copy(), y.copy()
    first = [part.copy() for part in drift(x, y)]
    drift(2 * x, y)
    again = drift(x, y)
    assert np.array_equal(x, kept[0])
    assert np.array_equal(y, kept[1])
    assert all(map(np.array_equal, first, again))


@pytest.mark.parametrize("keep", [1.0, 0.03])
def test_a_column_does_not_depend_on_the_others(keep, rng):
    """The bits of a member's tendency, alone with its padding or among many."""
    model = all_terms(rng, keep=keep, conserving=True)
    drift = compiled_drift(model)
    x, y = rng.standard_normal((NX, 48)), rng.standard_normal((model.ny, 48))
    many = np.concatenate(drift(x, y))
    for last in (16, 32):
        few = np.concatenate(drift(x[:, :last].copy(), y[:, :last].copy()))
        assert np.array_equal(few, many[:, :last])


def test_a_column_of_a_large_product_does_not_depend_on_the_others(rng):
    """Of a size at which BLAS on two threads adds in another order."""
    matrix, columns = rng.standard_normal((182, 182)), rng.standard_normal((182, 1024))
    many = column_product(matrix, columns)
    for count in (1, 16, 100):
        few = column_product(matrix, columns[:, :count].copy())
        assert np.array_equal(few, many[:, :count])


def test_coupling_of_a_projected_model_conserves_energy(rng):
    """Tensors from a conserving model: the reduced coupling does no work."""
    model = random_model(rng, 9)
    vectors = orthonormal_vectors(rng, model.weights, NX + NY)
    op = galerkin(model, vectors[:, :NX], vectors[:, NX:], np.zeros(9))
    reduced = coloured_model(op, rate=np.eye(NY), covariance=np.eye(NY))
    reduced = dataclasses.replace(
        reduced,
        x_forcing=np.zeros(NX),
        x_from_x=np.zeros((NX, NX)),
        x_from_y=np.zeros((NX, NY)),
        y_from_x=np.zeros((NY, NX)),
        y_forcing=np.zeros(NY),
    )
    x, y = rng.standard_normal((NX, 16)), rng.standard_normal((NY, 16))
    dx, dy = compiled_drift(reduced)(x, y)
    work = (x * dx).sum(axis=0) + (y * dy).sum(axis=0)
    size = np.abs(x * dx).sum(axis=0) + np.abs(y * dy).sum(axis=0)
    # Round-off of a hundred products.
    assert np.all(np.abs(work) < 1e-13 * size)
    assert np.all(np.abs((x * dx).sum(axis=0)) > 1e-3 * size)


def test_fields_left_out_are_zeros_of_the_right_shape():
    bare = ReducedModel(
        name="bare",
        x_forcing=np.zeros(2),
        x_from_x=np.eye(2),
        x_from_xx=np.zeros((2, 2, 2)),
    )
    assert (bare.nx, bare.ny) == (2, 0)
    assert bare.x_from_xy.shape == (2, 2, 0)
    assert bare.covariance.shape == (0, 0)
    noisy = dataclasses.replace(
        bare,
        x_from_y=np.zeros((2, 4)),
        rate=np.eye(4),
        covariance=np.eye(4),
        **dict.fromkeys(("x_from_xy", "x_from_yy", "y_forcing")),
        **dict.fromkeys(("y_from_x", "y_from_xx", "y_from_xy")),
    )
    assert noisy.y_from_xy.shape == (4, 2, 4)
    assert not noisy.y_from_xy.any()


def test_arrays_are_copies():
    forcing = np.zeros(2)
    model = ReducedModel(
        name="own memory",
        x_forcing=forcing,
        x_from_x=np.eye(2),
        x_from_xx=np.zeros((2, 2, 2)),
    )
    forcing += 1
    assert not model.x_forcing.any()


@pytest.mark.parametrize(
    ("field", "value", "complaint"),
    [
        ("x_from_x", np.zeros((2, 3)), r"x_from_x of shape \(2, 3\), must be \(3, 3\)"),
        ("y_from_xy", np.zeros((5, 5, 3)), r"must be \(5, 3, 5\) \(ny nx ny\)"),
        ("x_from_y", np.full((3, 5), np.nan), "x_from_y has values that are not"),
        ("covariance", np.triu(np.ones((5, 5))), "covariance is not symmetric"),
        ("rate", np.eye(4), "must be"),
    ],
)
def test_fields_that_do_not_fit_are_refused(field, value, complaint, rng):
    model = all_terms(rng, conserving=True)
    with pytest.raises(DataError, match=complaint) as caught:
        dataclasses.replace(model, **{field: value})
    assert 'reduced model "all terms"' in str(caught.value)


def test_operators_are_stored_as_sparse_as_they_are(rng):
    matrix = rng.standard_normal((30, 40))
    thin = matrix * (rng.random(matrix.shape) < 0.05)
    assert as_operator(thin).nnz == np.count_nonzero(thin)
    assert np.array_equal(as_operator(thin).toarray(), thin)
    assert np.array_equal(as_operator(matrix), matrix)


@pytest.mark.parametrize("count", [0, 1, 15, 16, 40])
def test_column_products_are_products(count, rng):
    matrix, columns = rng.standard_normal((7, 5)), rng.standard_normal((5, count))
    for operator in (matrix, sparse.csr_array(matrix)):
        # Sums of five products of order one.
        np.testing.assert_allclose(
            column_product(operator, columns), matrix @ columns, rtol=0, atol=1e-14
        )
