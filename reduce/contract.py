"""The equation that every model here obeys, as a contract that can be run.

    dz/dt = F(t) + A z + B(z, z)

with z in a real inner-product space of dimension n and B bilinear and
symmetric. The reduction knows this equation and nothing about fluids. A
model is any object with the members of :class:`Model`; it needs no base
class. :func:`check_model` says which of its promises a model does not keep.

A config names a user's own model by ``[ocean] kind = "package.module:Name"``:
that is called with the keys of the table ``options`` and returns a model. The
truth is then stepped by the classical Runge-Kutta method, without a grid, and
its coordinates go by their `labels`. See :mod:`.bases.hooked` and
:mod:`.closures` for a basis and a closure of one's own.
"""

from __future__ import annotations

from typing import Protocol, runtime_checkable

import numpy as np

from eddyshed.solver.errors import ContractError

from .promises import broken_promises, unit_states

DIAGONAL = 1e-12  # relative size of off-diagonal products that is round-off


@runtime_checkable
class Model(Protocol):
    """A quadratic system: what the reduction needs to know of a model.

    States are real float64 arrays of shape (..., size); leading axes are
    batches and broadcast against each other. Every method is pure: it
    returns the same bits for the same input, leaves its input alone, and
    returns memory of its own (or memory that cannot be written to).

    A model may also have

    ``tendency(t, z) -> (..., size)``
        A faster way to the sum of the three parts.
    ``energy_conserving : bool``
        A promise that ``inner(z, bilinear(z, z)) = 0`` for every z. It saves
        most of the work in :func:`eddyshed.reduce.operators.galerkin`.
    ``labels : tuple of str``
        Names of the coordinates.
    ``variations : tuple of (function, pattern)``
        How F depends on time, if it does: pairs of a ``Seasonal``, ``Ramp`` or
        ``Step`` of :mod:`eddyshed.solver.time_functions` and an array of shape
        (size,), such that F less the sum of ``function.factor(t) * pattern``
        is the same at all times. A reduction needs it.
    """

    @property
    def size(self) -> int:
        """Number n of real coordinates."""

    def forcing(self, t: float) -> np.ndarray:
        """F [state unit s-1] at time t [s], shape (size,)."""

    def linear(self, z: np.ndarray) -> np.ndarray:
        """A z [state unit s-1], shape (..., size)."""

    def bilinear(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """B(u, w) = B(w, u) [state unit s-1], shape (..., size)."""

    def inner(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """Inner product, symmetric and positive, shape (...)."""


def tendency(model: Model, t: float, z: np.ndarray) -> np.ndarray:
    """Tendency dz/dt of a model, by its own fast way if it has one.

    Parameters
    ----------
    model : Model
    t : float
        Time [s].
    z : ndarray, shape (..., size)

    Returns
    -------
    ndarray, shape (..., size)
        ``F(t) + A z + B(z, z)`` [state unit s-1].
    """
    fused = getattr(model, "tendency", None)
    if fused is not None:
        return fused(t, z)
    return model.forcing(t) + model.linear(z) + model.bilinear(z, z)


def conserves_energy(model: Model) -> bool:
    """Whether the model declares ``inner(z, bilinear(z, z)) = 0``."""
    return bool(getattr(model, "energy_conserving", False))


def labels(model: Model) -> tuple[str, ...]:
    """Names of the coordinates; ``z0, z1, ...`` where the model gives none."""
    named = getattr(model, "labels", None)
    return tuple(f"z{i}" for i in range(model.size)) if named is None else named


def metric(model: Model) -> np.ndarray:
    """Matrix W of the inner product, ``inner(u, w) = u . W w``.

    Parameters
    ----------
    model : Model

    Returns
    -------
    ndarray, shape (size,) or (size, size)
        The diagonal of W if W is diagonal, else W.

    Notes
    -----
    The diagonal costs n inner products, taken in batches of 32 MB. Whether
    it is all of W is judged by inner products of three states in general
    position. Only if it is not are all n^2 entries asked for.
    """
    diagonal = _diagonal(model)
    if diagonal is not None:
        return diagonal
    return _products_with_units(model, np.eye(model.size))


def dual_vectors(model: Model, vectors: np.ndarray) -> np.ndarray:
    """Vectors d_a such that ``inner(u_a, z) = z . d_a`` for every state z.

    Parameters
    ----------
    model : Model
    vectors : ndarray, shape (size, k)
        The u_a, as columns.

    Returns
    -------
    ndarray, shape (size, k)
        The d_a, as columns. ``z @ dual`` then projects any batch of states
        without another call of the model.

    Notes
    -----
    A diagonal inner product costs n products of n numbers; any other one
    n k of them. Either is taken in batches of 32 MB.
    """
    diagonal = _diagonal(model)
    if diagonal is not None:
        return diagonal[:, np.newaxis] * vectors
    return _products_with_units(model, vectors)


def project(model: Model, vectors: np.ndarray, z: np.ndarray) -> np.ndarray:
    """Coefficients of states in a basis orthonormal in the model's product.

    Parameters
    ----------
    model : Model
    vectors : ndarray, shape (size, k)
        The basis, as columns.
    z : ndarray, shape (..., size)

    Returns
    -------
    ndarray, shape (..., k)
        ``inner(u_a, z)`` [the unit of z times that of `vectors`].

    Notes
    -----
    Every call finds the inner product anew. To project a record piece by
    piece, call :func:`dual_vectors` once and multiply by what it returns.
    """
    return z @ dual_vectors(model, vectors)


def check_model(
    model: Model,
    rng: np.random.Generator | None = None,
    states: np.ndarray | None = None,
) -> None:
    """Check that a model keeps every promise of the contract.

    Parameters
    ----------
    model : Model
        Anything that claims to be one.
    rng : numpy.random.Generator, optional
        Draws the states that are tried; a fixed stream by default, so that
        the verdict is the same each time.
    states : ndarray, shape (k, size), optional
        Typical states: their root mean square sets the scale of each
        coordinate, which is 1 by default.

    Raises
    ------
    ContractError
        With all promises that are broken, one line each.
    """
    rng = np.random.Generator(np.random.PCG64(0)) if rng is None else rng
    problems = broken_promises(model, rng, states)
    if problems:
        count = "1 promise" if len(problems) == 1 else f"{len(problems)} promises"
        lines = "".join(f"\n  - {problem}" for problem in problems)
        message = f"model {type(model).__name__} breaks {count}:{lines}"
        raise ContractError(message)


def _diagonal(model):
    """Diagonal of the inner product's matrix, or None if that is not all."""
    n = model.size
    diagonal = np.empty(n)
    for where, units in unit_states(n, n):
        diagonal[where] = model.inner(units, units)
    # Incommensurate frequencies: no symmetry that could hide an entry.
    phases = np.outer(np.sqrt([2.0, 3.0, 5.0]), np.arange(1, n + 1))
    u, w = np.cos(phases), np.cos(phases[[1, 2, 0]] + 1)
    expected = (u * diagonal * w).sum(axis=-1)
    size = np.sqrt((u * diagonal * u).sum(axis=-1) * (w * diagonal * w).sum(axis=-1))
    is_all = np.all(np.abs(model.inner(u, w) - expected) <= DIAGONAL * size)
    return diagonal if is_all else None


def _products_with_units(model, vectors):
    """``inner(u_a, e_j)`` for all unit states e_j, shape (size, k)."""
    products = np.empty(vectors.shape)
    for where, units in unit_states(len(vectors), vectors.size):
        products[where] = model.inner(units[:, np.newaxis], vectors.T)
    return products
