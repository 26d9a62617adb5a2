"""Vector fields that are polynomials of degree three at most."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import combinations_with_replacement, permutations
from typing import Any

import numpy as np

from eddyshed.solver.errors import DataError

from .reduced import as_operator, column_product

ABSENT: Any = None  # a field that is left out; it is an array once constructed
DEGREES = ("constant", "linear", "quadratic", "cubic")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Polynomial:
    """``constant + linear x + quadratic(x, x) + cubic(x, x, x)``.

    Attributes
    ----------
    constant : ndarray, shape (nx,)
    linear : ndarray, shape (nx, nx)
    quadratic : ndarray, shape (nx, nx, nx)
        Acts as ``sum_jk quadratic[i, j, k] x_j x_k``; it is made symmetric in
        its last two axes.
    cubic : ndarray, shape (nx, nx, nx, nx)
        Likewise; it is made symmetric in its last three axes. Fields that are
        left out are zero.

    Raises
    ------
    DataError
        If shapes do not fit each other, or a number is not finite.
    """

    constant: np.ndarray
    linear: np.ndarray = ABSENT
    quadratic: np.ndarray = ABSENT
    cubic: np.ndarray = ABSENT

    def __post_init__(self):
        nx = np.size(self.constant)
        for degree, name in enumerate(DEGREES):
            shape, given = (nx,) * (degree + 1), getattr(self, name)
            array = np.zeros(shape) if given is None else np.array(given, dtype=float)
            if array.shape != shape:
                message = (
                    f"polynomial: {name} coefficients of shape {array.shape}, must be "
                    f"{shape}; give every degree for the same coordinates"
                )
                raise DataError(message)
            if not np.all(np.isfinite(array)):
                message = (
                    f"polynomial: {name} coefficients are not all finite; look at "
                    "what they were computed from"
                )
                raise DataError(message)
            object.__setattr__(self, name, _symmetric(array))

    @property
    def nx(self) -> int:
        """Number of coordinates."""
        return len(self.constant)

    def __add__(self, other: Polynomial) -> Polynomial:
        return Polynomial(
            **{name: getattr(self, name) + getattr(other, name) for name in DEGREES}
        )

    def __call__(self, x: np.ndarray) -> np.ndarray:
        """Value at states, both of shape (..., nx)."""
        states = np.asarray(x, dtype=float).reshape(-1, self.nx)
        return compiled(self)(states.T).T.reshape(np.shape(x))


def _symmetric(array):
    """Mean over permutations of the last axes; symmetric input keeps its bits."""
    axes = range(1, array.ndim)
    turned = [array.transpose(0, *order) for order in permutations(axes)]
    if all(np.array_equal(array, other) for other in turned):
        return array
    return sum(turned) / len(turned)


def packed(array: np.ndarray) -> np.ndarray:
    """Coefficients of each product of coordinates once.

    Parameters
    ----------
    array : ndarray, shape (rows, nx, ..., nx)
        Symmetric in all axes but the first.

    Returns
    -------
    ndarray, shape (rows, products)
        In the order of :func:`itertools.combinations_with_replacement`.
    """
    nx, degree = array.shape[-1], array.ndim - 1
    columns = [
        len(set(permutations(chosen))) * array[(slice(None), *chosen)]
        for chosen in combinations_with_replacement(range(nx), degree)
    ]
    return np.column_stack(columns)


def compiled(polynomial: Polynomial) -> Callable[[np.ndarray], np.ndarray]:
    """Make a fast function for the values at many states.

    Parameters
    ----------
    polynomial : Polynomial

    Returns
    -------
    callable
        ``field(x)`` for an array of shape (nx, member), returned in the same
        shape. The bits of a column depend on that column only.

    Notes
    -----
    One product with a matrix on the stacked rows 1, x_i, x_i x_j (i <= j) and
    x_i x_j x_k (i <= j <= k), as far as these degrees occur.
    """
    nx = polynomial.nx
    highest = max(
        (d for d, name in enumerate(DEGREES) if np.any(getattr(polynomial, name))),
        default=0,
    )
    parts = [packed(getattr(polynomial, name)) for name in DEGREES[: highest + 1]]
    matrix = as_operator(np.hstack(parts))
    # Where the products of two, and those of three that begin with x_i, start.
    pairs = 1 + nx
    triples = pairs + nx * (nx + 1) // 2
    pair_starts = pairs + np.array([nx * i - i * (i - 1) // 2 for i in range(nx)])

    def field(x):
        products = np.empty((matrix.shape[1], x.shape[1]))
        products[0] = 1.0
        if highest >= 1:
            products[1:pairs] = x
        if highest >= 2:
            for i, first in enumerate(pair_starts):
                np.multiply(x[i], x[i:], out=products[first : first + nx - i])
        if highest >= 3:
            first = triples
            for i, start in enumerate(pair_starts):
                last = first + triples - start
                np.multiply(x[i], products[start:triples], out=products[first:last])
                first = last
        return column_product(matrix, products)

    return field
