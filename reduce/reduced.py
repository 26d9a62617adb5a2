"""Reduced models: a few slow modes, driven by coloured noise."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from scipy import sparse

from eddyshed.solver.errors import DataError

from .variation import Variation

# Below this share of non-zero entries a compressed sparse matrix times a
# block of columns beats a dense product (measured for 10^2 to 10^3 rows).
SPARSE = 0.1
SMALL = 1024  # entries of a matrix below which calling a sparse product costs more
FEW_COLUMNS = 64  # up to these one gather of all pairs beats a loop over rows
# Columns in one dense product. BLAS adds in an order that depends on the
# shape of the product (and, with threads, does so for most shapes); a fixed
# shape makes a member's path the same bits in any company, at 1.5 times the
# cost of a product of a hundred columns.
COLUMNS = 16

ABSENT: Any = None  # a field that is left out; it is an array once constructed

X, Y = "x", "y"
_SHAPES = {
    "x_forcing": X,
    "x_from_x": X + X,
    "x_from_xx": X + X + X,
    "x_from_y": X + Y,
    "x_from_xy": X + X + Y,
    "x_from_yy": X + Y + Y,
    "y_forcing": Y,
    "y_from_x": Y + X,
    "y_from_xx": Y + X + X,
    "y_from_xy": Y + X + Y,
    "rate": Y + Y,
    "covariance": Y + Y,
}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ReducedModel:
    r"""A quadratic system coupled to an Ornstein-Uhlenbeck process.

    ::

        dx = [x_forcing + x_from_x x + x_from_xx(x, x)
              + x_from_y y + 2 x_from_xy(x, y) + x_from_yy(y, y)] dt
        dy = [y_forcing + y_from_x x + y_from_xx(x, x) + 2 y_from_xy(x, y)] dt
             - rate y dt + Sigma dW

    with ``Sigma Sigma^T = rate covariance + covariance rate^T``, so that y
    alone, without its other terms, has the stationary covariance
    `covariance`. Fields that are left out are zero; without `rate` there is
    no y at all. Every field is a plain array of its own.

    Attributes
    ----------
    name : str
        The closure that made it.
    x_forcing : ndarray, shape (nx,)
        [state unit s-1]
    x_from_x : ndarray, shape (nx, nx)
        [s-1]
    x_from_xx : ndarray, shape (nx, nx, nx)
        Acts as ``sum_jk x_from_xx[i, j, k] x_j x_k``
        [s-1 per state unit].
    x_from_y : ndarray, shape (nx, ny)
        [s-1]
    x_from_xy : ndarray, shape (nx, nx, ny)
        Acts with the factor 2 above [s-1 per state unit].
    x_from_yy : ndarray, shape (nx, ny, ny)
        [s-1 per state unit]
    y_forcing : ndarray, shape (ny,)
        [state unit s-1]
    y_from_x : ndarray, shape (ny, nx)
        [s-1]
    y_from_xx : ndarray, shape (ny, nx, nx)
        [s-1 per state unit]
    y_from_xy : ndarray, shape (ny, nx, ny)
        ``2 sum_jn y_from_xy[m, j, n] x_j y_n`` [s-1 per state unit].
    rate : ndarray, shape (ny, ny)
        Damping and rotation of y [s-1].
    covariance : ndarray, shape (ny, ny)
        [state unit squared]
    variation : Variation or None
        How `x_forcing` and `y_forcing` vary in time, about the constants above;
        None if they do not.
    notes : tuple of str
        What a reader of results must know about this model.
    facts : dict of str to float
        Numbers found on the way, by name.

    Raises
    ------
    DataError
        If shapes do not fit each other, a number is not finite, or
        `covariance` is not symmetric.
    """

    name: str
    x_forcing: np.ndarray
    x_from_x: np.ndarray
    x_from_xx: np.ndarray
    x_from_y: np.ndarray = ABSENT
    x_from_xy: np.ndarray = ABSENT
    x_from_yy: np.ndarray = ABSENT
    y_forcing: np.ndarray = ABSENT
    y_from_x: np.ndarray = ABSENT
    y_from_xx: np.ndarray = ABSENT
    y_from_xy: np.ndarray = ABSENT
    rate: np.ndarray = ABSENT
    covariance: np.ndarray = ABSENT
    variation: Variation | None = None
    notes: tuple[str, ...] = ()
    facts: dict[str, float] = field(default_factory=dict)

    def __post_init__(self):
        sizes = {
            X: np.size(self.x_forcing),
            Y: 0 if self.rate is None else len(np.atleast_1d(self.rate)),
        }
        for name, axes in _SHAPES.items():
            shape = tuple(sizes[axis] for axis in axes)
            given = getattr(self, name)
            array = np.zeros(shape) if given is None else np.array(given, dtype=float)
            if array.shape != shape:
                self._refuse(
                    f"{name} of shape {array.shape}, must be {shape} "
                    f"({' '.join('n' + axis for axis in axes)})"
                )
            if not np.all(np.isfinite(array)):
                self._refuse(f"{name} has values that are not finite")
            object.__setattr__(self, name, array)
        if self.variation is not None:
            resolved, unresolved = self.variation.resolved, self.variation.unresolved
            shapes = (resolved.shape[1], unresolved.shape[1])
            if shapes != (sizes[X], sizes[Y]):
                self._refuse(
                    f"variation for {shapes[0]} and {shapes[1]} coordinates, must be "
                    f"for {sizes[X]} (x) and {sizes[Y]} (y)"
                )
        asymmetry = np.abs(self.covariance - self.covariance.T).max(initial=0.0)
        # A product of matrices is symmetric only to round-off.
        if asymmetry > 1e-12 * np.abs(self.covariance).max(initial=0.0):
            self._refuse(f"covariance is not symmetric (off by {asymmetry:.3g})")

    def _refuse(self, problem):
        message = f'reduced model "{self.name}": {problem}; check what the closure made'
        raise DataError(message)

    @property
    def nx(self) -> int:
        """Number of resolved coordinates."""
        return len(self.x_forcing)

    @property
    def ny(self) -> int:
        """Number of coordinates of the noise."""
        return len(self.y_forcing)


def column_product(
    matrix: np.ndarray | sparse.csr_array, columns: np.ndarray
) -> np.ndarray:
    """Product whose columns do not depend, in any bit, on how many there are.

    Parameters
    ----------
    matrix : ndarray or scipy.sparse.csr_array, shape (k, n)
    columns : ndarray, shape (n, m)
        The bits of a column of the result depend on that column and on its
        place modulo 16 only.

    Returns
    -------
    ndarray, shape (k, m)
    """
    n, count = columns.shape
    if not isinstance(matrix, np.ndarray) or count == COLUMNS:
        return matrix @ columns  # a sparse one adds row by row, each column for itself
    blocks = -(-count // COLUMNS)
    if blocks * COLUMNS > count:
        columns = np.pad(columns, ((0, 0), (0, blocks * COLUMNS - count)))
    result = np.empty((len(matrix), blocks * COLUMNS))
    np.matmul(
        matrix,
        columns.reshape(n, blocks, COLUMNS).transpose(1, 0, 2),
        out=result.reshape(len(matrix), blocks, COLUMNS).transpose(1, 0, 2),
    )
    return result[:, :count]


def as_operator(matrix: np.ndarray) -> np.ndarray | sparse.csr_array:
    """Compressed sparse form of a matrix that is mostly zeros, else itself."""
    if matrix.size >= SMALL and np.count_nonzero(matrix) < SPARSE * matrix.size:
        return sparse.csr_array(matrix)
    return np.ascontiguousarray(matrix)


def compiled_drift(
    model: ReducedModel,
) -> Callable[[np.ndarray, np.ndarray], tuple[np.ndarray, np.ndarray]]:
    """Make a fast function for the deterministic tendency of many members.

    Parameters
    ----------
    model : ReducedModel

    Returns
    -------
    callable
        ``drift(x, y) -> (dx, dy)`` for arrays of shapes (nx, member) and
        (ny, member): all terms of the equation but ``-rate y`` and the noise
        [state unit s-1].

    Notes
    -----
    Products of x go through one matrix on the stacked rows 1, x_i and
    x_i x_j, i <= j. All terms with y come from one stacked matrix, sparse if
    the tensors are, whose product with y holds ``V_i = 2 y_from_xy[:, i] y``.
    Where the fast part conserves energy to the bit,

        x_from_yy[i, m, n] = -(y_from_xy[m, i, n] + y_from_xy[n, i, m]),

    the same V serves x: ``x_from_yy(y, y)_i = -y . V_i``.
    """
    nx, ny = model.nx, model.ny
    upper = np.triu_indices(nx)
    has_squares = bool(np.any(model.x_from_xx) or np.any(model.y_from_xx))
    rows = []
    for constant, linear, quadratic in (
        (model.x_forcing, model.x_from_x, model.x_from_xx),
        (model.y_forcing, model.y_from_x, model.y_from_xx),
    ):
        parts = [constant, linear]
        if has_squares:
            parts.append(_packed(quadratic, upper))
        rows.append(np.column_stack(parts))
    alone = as_operator(np.vstack(rows))
    modulated = 2 * model.y_from_xy.transpose(1, 0, 2)  # (i, m, n)
    inferred = -(modulated + modulated.transpose(0, 2, 1)) / 2
    is_shared = np.array_equal(model.x_from_yy, inferred)
    pieces = {
        "modulated": modulated,
        "pairs": np.zeros(0) if is_shared else model.x_from_yy,
        "mixed": 2 * model.x_from_xy,
        "linear": model.x_from_y,
    }
    pieces = {name: piece for name, piece in pieces.items() if np.any(piece)}
    coupled, place = None, {}
    if pieces:
        rows = [piece.reshape(-1, ny) for piece in pieces.values()]
        ends = np.cumsum([len(row) for row in rows])
        place = {
            name: slice(end - len(row), end)
            for name, row, end in zip(pieces, rows, ends, strict=True)
        }
        coupled = as_operator(np.vstack(rows))

    monomials = _monomials(nx, upper if has_squares else None)

    def drift(x, y):
        count = x.shape[1]
        made = column_product(alone, monomials(x))
        dx, dy = made[:nx], made[nx:]
        if coupled is not None:
            acted = column_product(coupled, y)
            if "modulated" in place:
                v = acted[place["modulated"]].reshape(nx, ny, count)
                dy += np.einsum("im,inm->nm", x, v)
                if is_shared:
                    dx -= np.einsum("nm,inm->im", y, v)
            if "pairs" in place:
                u = acted[place["pairs"]].reshape(nx, ny, count)
                dx += np.einsum("nm,inm->im", y, u)
            if "mixed" in place:
                h = acted[place["mixed"]].reshape(nx, nx, count)
                dx += np.einsum("jm,ijm->im", x, h)
            if "linear" in place:
                dx += acted[place["linear"]]
        return dx, dy

    return drift


def _monomials(nx, upper):
    """Make a function for the rows 1, x_i and, with `upper`, x_i x_j, i <= j."""
    rows = np.empty((1 + nx + (0 if upper is None else len(upper[0])), 0))

    def stacked(x):
        nonlocal rows  # a work array; what is in it does not outlive the drift
        if rows.shape[1] != x.shape[1]:
            rows = np.empty((len(rows), x.shape[1]))
            rows[0] = 1.0
        rows[1 : 1 + nx] = x
        if upper is not None and x.shape[1] <= FEW_COLUMNS:
            np.multiply(x[upper[0]], x[upper[1]], out=rows[1 + nx :])
        elif upper is not None:
            first = 1 + nx
            for i in range(nx):
                last = first + nx - i
                np.multiply(x[i], x[i:], out=rows[first:last])
                first = last
        return rows

    return stacked


def _packed(quadratic, upper):
    """Coefficients of x_i x_j, i <= j, shape (rows, pairs)."""
    first, second = upper
    both = quadratic[:, first, second] + quadratic[:, second, first]
    return np.where(first == second, both / 2, both)
