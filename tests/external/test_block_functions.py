"""Functions of small matrices, against scipy's exponential and exact powers."""

import numpy as np
import pytest
from scipy import linalg

from eddyshed.solver.block_functions import block_function


@pytest.mark.parametrize("d", [1, 2, 3])
def test_exponential_of_random_matrices(d):
    rng = np.random.default_rng(1)
    blocks = rng.standard_normal((40, d, d)) + 1j * rng.standard_normal((40, d, d))
    found = block_function(blocks, np.exp)
    # Both are good to round-off times the matrices' condition, some hundreds.
    np.testing.assert_allclose(found, linalg.expm(blocks), rtol=1e-11, atol=1e-12)


@pytest.mark.parametrize("gap", [0.0, 1e-14, 1e-9, 1e-5, 1e-2, 0.3])
@pytest.mark.parametrize("third", [None, 0.0, -3.0])
def test_coinciding_eigenvalues(gap, third):
    # A Jordan block and its neighbours: the exponential of [[a, 1], [0, a]] is
    # exp(a) [[1, 1], [0, 1]] (Higham, Functions of Matrices, 2008, section 1.2).
    block = np.array([[-0.7, 1.0], [0.0, -0.7 + gap]])
    if third is not None:
        block = linalg.block_diag(block, [[-0.7 + third]])
        turn = linalg.qr(np.random.default_rng(2).standard_normal((3, 3)))[0]
        block = turn @ block @ turn.T
    found = block_function(block[np.newaxis], np.exp)[0]
    # Eigenvalues of a Jordan block are good to 1e-8 only; the interpolation is
    # insensitive to it, so round-off is left.
    np.testing.assert_allclose(found, linalg.expm(block), atol=5e-13)


def test_three_near_eigenvalues():
    block = np.diag([-1.0, -1.0 + 1e-7, -1.0 - 2e-7]) + np.diag([2.0, 3.0], 1)
    found = block_function(block[np.newaxis], np.exp)[0]
    np.testing.assert_allclose(found, linalg.expm(block), atol=1e-12)


def test_multiples_of_the_identity():
    blocks = np.array([np.zeros((2, 2)), -4.0 * np.eye(2)])
    found = block_function(blocks, np.exp)
    np.testing.assert_allclose(found[0], np.eye(2), atol=1e-15)
    np.testing.assert_allclose(found[1], np.exp(-4.0) * np.eye(2), rtol=1e-14)


def test_stiff_damping_with_a_slow_wave():
    # Eigenvalues -1e5 and -1 of a triangular matrix: exp of the first is zero in
    # floating point, and [[a, c], [0, b]] has c (e^a - e^b) / (a - b) beside it.
    block = np.array([[-1e5, 30.0], [0.0, -1.0]])
    found = block_function(block[np.newaxis], np.exp)[0]
    beside = 30.0 * -np.exp(-1.0) / (1.0 - 1e5)
    np.testing.assert_allclose(found, [[0, beside], [0, np.exp(-1)]], atol=1e-14)


def test_a_cube():
    # f(x) = x^3 has the plain matrix power for its value.
    blocks = np.random.default_rng(3).standard_normal((20, 3, 3))
    found = block_function(blocks, lambda x: x**3)
    np.testing.assert_allclose(found, np.linalg.matrix_power(blocks, 3), atol=1e-11)
