"""Functions of many small matrices at once: exponentials and their relatives.

A linear operator that couples only the fields of one wave is a small matrix
for each wave. What a time step needs of it, its exponential and the weights of
exponential schemes, are functions of such a matrix.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

# Eigenvalues nearer to each other than this part of the matrix's size are
# taken together: a quotient of differences would lose more than one digit.
NEAR = 0.1
POINTS = 64  # on a circle at twice the eigenvalues' distance: error 2^-64


def block_function(
    blocks: np.ndarray, function: Callable[[np.ndarray], np.ndarray]
) -> np.ndarray:
    r"""Evaluate a function of each of many small matrices.

    Parameters
    ----------
    blocks : ndarray of float or complex, shape (n, d, d)
        The matrices; d is at most 3.
    function : callable
        Entire function of a complex number, called with arrays of any shape.

    Returns
    -------
    ndarray of complex, shape (n, d, d)
        ``function(blocks)``. For a real matrix and a function that is real on
        the real axis the imaginary parts are round-off.

    Notes
    -----
    Newton's interpolation of the function at the eigenvalues (Higham,
    Functions of Matrices, 2008, section 1.2),

    .. math:: f(M) = f(\lambda_1) + f[\lambda_1, \lambda_2](M - \lambda_1)
              + f[\lambda_1, \lambda_2, \lambda_3]
              (M - \lambda_1)(M - \lambda_2)

    which needs no eigenvectors, so that coinciding eigenvalues do no harm.
    Divided differences of near eigenvalues are means over a circle c +
    r exp(i theta) around them (Cauchy's formula, as in Kassam & Trefethen
    2005, SIAM J. Sci. Comput. 26:1214):

    .. math:: f[\lambda_1, ..., \lambda_d]
              = \langle f(z) (z - c) / \prod_j (z - \lambda_j) \rangle
    """
    blocks = np.asarray(blocks, dtype=complex)
    d = blocks.shape[-1]
    identity = np.eye(d)
    values = _nearest_first(np.linalg.eigvals(blocks))
    centre = values.mean(axis=-1)
    size = np.abs(blocks - centre[:, np.newaxis, np.newaxis] * identity).max((-2, -1))
    table = function(values)
    result = table[:, 0, np.newaxis, np.newaxis] * identity
    factor = np.broadcast_to(identity, blocks.shape)
    for order in range(1, d):
        table = np.stack(
            [
                _difference(
                    function, values[:, first : first + order + 1], size, table, first
                )
                for first in range(d - order)
            ],
            axis=1,
        )
        node = values[:, order - 1, np.newaxis, np.newaxis]
        factor = factor @ (blocks - node * identity)
        result = result + table[:, 0, np.newaxis, np.newaxis] * factor
    return result


def _nearest_first(values):
    """Order eigenvalues (n, d) so that the two nearest ones come first."""
    if values.shape[-1] < 3:
        return values
    distance = np.abs(values - np.roll(values, -1, axis=-1))
    first = np.argmin(distance, axis=-1)
    order = (first[:, np.newaxis] + np.arange(3)) % 3
    return np.take_along_axis(values, order, axis=-1)


def _difference(function, nodes, size, lower, first):
    """Divided difference over `nodes` (n, j), given those of one order less."""
    step = nodes[:, -1] - nodes[:, 0]
    near = np.abs(step) <= NEAR * size
    result = np.zeros(len(nodes), dtype=complex)
    far = ~near
    result[far] = (lower[far, first + 1] - lower[far, first]) / step[far]
    # A multiple of the identity (size 0) has no part in what this multiplies.
    near &= size > 0
    if near.any():
        close = nodes[near]
        centre = close.mean(axis=-1, keepdims=True)
        spread = np.abs(close - centre).max(axis=-1, keepdims=True)
        radius = np.maximum(2 * spread, NEAR * size[near, np.newaxis] / 10)
        circle = radius * np.exp(2j * np.pi * np.arange(POINTS) / POINTS)
        z = centre + circle
        product = np.prod(z[:, :, np.newaxis] - close[:, np.newaxis], axis=-1)
        result[near] = np.mean(function(z) * circle / product, axis=-1)
    return result
