"""What the unresolved modes do to the resolved ones, against direct evaluation."""

import numpy as np
import pytest
from splits import divided
from toys import orthonormal_vectors, random_model, random_weights

from eddyshed.reduce.contract import tendency
from eddyshed.reduce.coupling import SAMPLE, coupling, coupling_sizes, covariance
from eddyshed.reduce.operators import galerkin

SIZE, NX = 9, 3


def case(*, conserving, dense, ny):
    """A model, its divided states and operators; all modes if ny = SIZE - NX."""
    rng = np.random.default_rng(41)
    weights = random_weights(rng, SIZE) if dense else None
    model = random_model(rng, SIZE, weights=weights, conserving=conserving)
    vectors = orthonormal_vectors(rng, model.weights, NX + ny)
    states = rng.standard_normal((50, SIZE)) + rng.standard_normal(SIZE)
    split, y = divided(model, states, vectors, NX)
    op = galerkin(model, vectors[:, :NX], vectors[:, NX:], split.mean)
    return model, states, split, y, op


@pytest.mark.parametrize("conserving", [True, False])
@pytest.mark.parametrize("dense", [True, False])
def test_coupling_is_all_terms_with_unresolved_modes(conserving, dense):
    _, _, split, y, op = case(conserving=conserving, dense=dense, ny=SIZE - NX)
    x = split.x
    expected = (
        np.einsum("im,atm->ati", op.A12, y)
        + 2 * np.einsum("ijm,atj,atm->ati", op.B112, x, y)
        + np.einsum("imn,atm,atn->ati", op.B122, y, y)
    )
    # Round-off of sums of a thousand products of order ten.
    np.testing.assert_allclose(coupling(split, op), expected, rtol=0, atol=1e-10)


@pytest.mark.parametrize("ny", [0, 2, SIZE - NX])
def test_coupling_is_full_less_truncated_tendency(ny):
    # With modes left out as well: they act on the resolved modes like the others.
    model, states, split, _, op = case(conserving=True, dense=True, ny=ny)
    vectors = split.resolved.vectors
    kept = split.mean + split.x[0] @ vectors.T
    difference = tendency(model, 0.0, states) - tendency(model, 0.0, kept)
    expected = model.inner(vectors.T, difference[:, np.newaxis])
    np.testing.assert_allclose(coupling(split, op)[0], expected, rtol=0, atol=1e-10)


def independent(covariance, count, seed):
    """Gaussian vectors of a covariance, independent in time."""
    rng = np.random.default_rng(seed)
    root = np.linalg.cholesky(covariance)
    return rng.standard_normal((count, len(root))) @ root.T


def test_sizes_are_those_of_gaussian_modes():
    # For independent Gaussian x and y, with the covariances Cx and Cy, second and
    # fourth moments follow from Isserlis (1918), Biometrika 12, 134: the mean square
    # of A12 y + 2 B112(x, y) is tr(A12 Cy A12') + 4 B112 (Cx x Cy) B112', and
    # the variance of y'My is 2 tr(M Cy M Cy).
    rng = np.random.default_rng(42)
    _, _, _, _, op = case(conserving=True, dense=False, ny=SIZE - NX)
    cx = random_weights(rng, NX) / NX
    cy = random_weights(rng, SIZE - NX) / SIZE
    linear = np.einsum("im,mn,in->i", op.A12, cy, op.A12)
    linear += 4 * np.einsum("ijm,jk,mn,ikn->i", op.B112, cx, cy, op.B112)
    products = op.B122 @ cy
    quadratic = 2 * np.trace(products @ products, axis1=1, axis2=2)
    expected = np.array([linear.mean(), quadratic.mean()])
    found = np.array(
        [
            coupling_sizes(
                op,
                independent(cx, SAMPLE, [1, k])[np.newaxis],
                independent(cy, SAMPLE, [2, k])[np.newaxis],
            )
            for k in range(30)
        ]
    )
    squares = found**2
    error = squares.std(axis=0, ddof=1) / np.sqrt(len(squares))
    # Four standard errors (29 degrees of freedom: 4e-4 by chance); the mean that is
    # taken off costs one part in 2000, which is far less.
    assert np.all(np.abs(squares.mean(axis=0) - expected) < 4 * error)
    assert np.all(error < 0.02 * expected)


@pytest.mark.parametrize(
    "count", [1, 2, SAMPLE, SAMPLE + 1, 2 * SAMPLE - 1, 7 * SAMPLE]
)
def test_sizes_are_from_a_sample_of_a_long_record(count):
    _, _, _, _, op = case(conserving=True, dense=False, ny=SIZE - NX)
    x, y = (independent(np.eye(n), count, n)[np.newaxis] for n in (NX, SIZE - NX))
    every = -(-count // SAMPLE)
    sizes = coupling_sizes(op, x, y)
    used = np.zeros(count, dtype=bool)
    used[::every] = True
    assert used.sum() <= SAMPLE
    assert used.sum() > SAMPLE / 2 or every == 1
    x[:, ~used] = y[:, ~used] = np.nan
    assert coupling_sizes(op, x, y) == sizes
    assert np.isfinite(sizes).all()


def test_no_unresolved_modes_have_no_size():
    _, _, split, y, op = case(conserving=True, dense=False, ny=0)
    assert coupling_sizes(op, split.x, y) == (0.0, 0.0)


def test_covariance_is_over_all_members():
    rng = np.random.default_rng(43)
    u, v = rng.standard_normal((3, 50, 2)), rng.standard_normal((3, 50, 4))
    both = np.concatenate([*np.concatenate([u, v], axis=2)])
    expected = np.cov(both.T, bias=True) + np.outer(
        both.mean(axis=0), both.mean(axis=0)
    )
    # Round-off of sums of 150 products.
    np.testing.assert_allclose(covariance(u, v), expected[:2, 2:], atol=1e-13)
    assert covariance(u, v[..., :0]).shape == (2, 0)
