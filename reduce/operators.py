"""Galerkin projection: the tensors of a quadratic model in a split basis."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from eddyshed.solver.errors import ContractError, DataError

from .contract import Model, conserves_energy, dual_vectors
from .memory import check_memory, spare_bytes
from .variation import Variation, mean_forcing, project_variation

# A basis from an eigenvalue problem is orthonormal to 1e-13; one that is off
# by more than this was made in another inner product.
ORTHONORMAL = 1e-8
# Transforms leave coefficients of this size, relative to the largest
# B(u_j, w), where the true one is zero: sixteen digits, less those lost by
# derivatives that weight round-off by the ratio of the scales.
ROUND_OFF = 1e-12
# Departure from energy conservation, relative to the largest coefficient,
# that can still be round-off; beyond it the model's promise is false.
CYCLIC = 1e-9
BATCH_BYTES = 2**25  # that one batch of tendencies takes
PROBES = 4  # evaluations that test the coefficients found by conservation


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Operators:
    """Tendency of resolved (x) and unresolved (y) coordinates.

    With u_i the resolved and v_m the unresolved vectors, and x, y the
    departures from the mean state::

        dx/dt = F1 + A11 x + B111(x, x) + A12 y + 2 B112(x, y) + B122(y, y)
        dy/dt = F2 + A21 x + B211(x, x) + 2 B212(x, y) + ...

    where the dots are what y does to itself, which is not projected. Where the
    forcing varies, F1 and F2 hold its time mean over the truth, and `variation`
    the rest.

    Attributes
    ----------
    F1, F2 : ndarray, shapes (nx,), (ny,)
        Tendency of the mean state [state unit s-1].
    A11, A12, A21 : ndarray, shapes (nx, nx), (nx, ny), (ny, nx)
        Linear operators about the mean state [s-1].
    B111 : ndarray, shape (nx, nx, nx)
        ``B111[i, j, k] = <u_i, B(u_j, u_k)>`` [s-1 per state unit], as all
        that follow.
    B112 : ndarray, shape (nx, nx, ny)
        ``B112[i, j, m] = <u_i, B(u_j, v_m)>``.
    B122 : ndarray, shape (nx, ny, ny)
        ``B122[i, m, n] = <u_i, B(v_m, v_n)>``.
    B211 : ndarray, shape (ny, nx, nx)
        ``B211[m, j, k] = <v_m, B(u_j, u_k)>``.
    B212 : ndarray, shape (ny, nx, ny)
        ``B212[m, j, n] = <v_m, B(u_j, v_n)>``.
    cyclic_residual : float
        Largest sum of ``B[a, b, c]`` over its three cyclic permutations,
        as it was before any correction, relative to the largest coefficient.
        Zero if the quadratic terms conserve energy.
    variation : Variation or None
        How F1 and F2 depart from their means; None for a steady forcing.
    """

    F1: np.ndarray
    F2: np.ndarray
    A11: np.ndarray
    A12: np.ndarray
    A21: np.ndarray
    B111: np.ndarray
    B112: np.ndarray
    B122: np.ndarray
    B211: np.ndarray
    B212: np.ndarray
    cyclic_residual: float
    variation: Variation | None = None

    @property
    def nx(self) -> int:
        """Number of resolved coordinates."""
        return len(self.F1)

    @property
    def ny(self) -> int:
        """Number of unresolved coordinates."""
        return len(self.F2)


def galerkin(
    model: Model,
    resolved: np.ndarray,
    unresolved: np.ndarray,
    mean: np.ndarray,
    *,
    times: np.ndarray | float = 0.0,
    batch: int | None = None,
    memory: float = math.inf,
    progress: Callable[[int, int], None] | None = None,
) -> Operators:
    """Project a model on a basis, about a mean state.

    Parameters
    ----------
    model : Model
    resolved : ndarray, shape (size, nx)
        Orthonormal columns in the model's inner product, at least one.
    unresolved : ndarray, shape (size, ny)
        Orthonormal columns, also to the resolved ones; there may be none.
    mean : ndarray, shape (size,)
        State that x and y are departures from.
    times : ndarray, shape (time,), or float
        Times that the forcing is averaged over [s]: those of the truth's records.
    batch : int, optional
        States in one call of the model; by default as many as fill 32 MB, or a
        sixteenth of what `memory` leaves.
    memory : float
        Budget [B], refused beforehand if it is too small.
    progress : callable, optional
        Called as ``progress(done, total)`` with numbers of evaluations of B.

    Returns
    -------
    Operators

    Raises
    ------
    DataError
        If shapes do not fit or the columns are not orthonormal.
    ContractError
        If the model declares that it conserves energy but its coefficients
        do not, or if its forcing varies in time and it does not declare how.

    Notes
    -----
    Conservation of energy makes the sum of ``<a, B(b, c)>`` over the cyclic
    permutations of any three vectors vanish, so that

        B122[i, m, n] = -(B212[m, i, n] + B212[n, i, m]).

    For a model that declares it, B is therefore evaluated about nx (nx + ny)
    times and never for two unresolved vectors; four evaluations on sums of
    all unresolved vectors test what was inferred. The remaining sums, which
    vanish up to round-off, are then made to vanish by taking each of them, in
    equal shares, off its terms. Other models need ny (ny + 1) / 2 evaluations
    more.

    Coefficients below 1e-12 of the largest norm of ``B(u_j, w)`` are the
    round-off of transforms. They are set to zero, which leaves the tensors of
    Fourier modes as sparse as they are.
    """
    nx, ny = _checked_counts(model, resolved, unresolved, mean)
    batch_bytes = batch_bytes_of(memory) if batch is None else 8 * model.size * batch
    check_memory(
        memory_bytes(model.size, nx, ny, batch_bytes),
        memory,
        f"projecting the equation on {nx} resolved and {ny} unresolved modes",
        "keep fewer modes, or less of the variance by [unresolved] variance",
    )
    # Rows u_i, then v_m, each in one piece of memory, which stacking does not promise.
    states = np.ascontiguousarray(np.vstack([resolved.T, unresolved.T]))
    dual = dual_vectors(model, states.T)
    _check_orthonormal(states @ dual, nx)
    conserving = conserves_energy(model)
    pairs = nx * (nx + 1) // 2 + nx * ny
    more = (PROBES if ny else 0) if conserving else ny * (ny + 1) // 2
    work = _Evaluations(model, batch_bytes, progress, total=1 + nx + ny + pairs + more)

    times = np.atleast_1d(np.asarray(times, dtype=float))
    forcing = mean_forcing(model, times)
    start, columns = _about_mean(work, states, mean, forcing, dual)
    b111, b112, b211, b212 = _interactions(work, states, dual, nx)
    scale = _largest(b111, b112, b211, b212)
    sums = _cyclic_sums(b111, b112, b211)
    if conserving:
        b122 = np.stack([-(b212[:, i] + b212[:, i].T) for i in range(nx)])
        residual = _relative(_largest(*sums), scale)
        residual = max(residual, _probe(work, b122, states[nx:], dual[:, :nx]))
        _check_conservation(residual)
        _take_off(sums, b111, b112, b211)
    else:
        b122 = _fast_pairs(work, states[nx:], dual[:, :nx])
        fast = b212.transpose(1, 0, 2) + b212.transpose(1, 2, 0)
        fast += b122
        residual = _relative(_largest(*sums, fast), max(scale, _largest(b122)))
    return Operators(
        F1=start[:nx],
        F2=start[nx:],
        A11=columns[:nx, :nx].copy(),
        A12=columns[:nx, nx:].copy(),
        A21=columns[nx:, :nx].copy(),
        B111=b111,
        B112=b112,
        B122=b122,
        B211=b211,
        B212=b212,
        cyclic_residual=residual,
        variation=project_variation(model, times, dual[:, :nx], dual[:, nx:]),
    )


def batch_bytes_of(memory: float) -> float:
    """Size of a batch of states in a budget [B]."""
    return min(BATCH_BYTES, spare_bytes(memory) / 16)


def memory_bytes(n: int, nx: int, ny: int, batch_bytes: float = BATCH_BYTES) -> int:
    """Forecast the largest memory that :func:`galerkin` takes.

    Parameters
    ----------
    n, nx, ny : int
        Numbers of coordinates: of the state, resolved, unresolved.
    batch_bytes : float
        Size of a batch of states.

    Returns
    -------
    int
        Bytes for the tensors, the basis and its dual, and one batch with the
        work arrays of a typical model.
    """
    k = nx + ny
    tensors = nx**3 + 2 * nx**2 * ny + 2 * nx * ny**2 + nx * ny**2 + k**2
    return 8 * (tensors + 3 * n * k) + 6 * max(int(batch_bytes), 8 * n)


class _Evaluations:
    """Batches of B(u, w), counted."""

    def __init__(self, model, batch_bytes, progress, total):
        self.model = model
        self.batch = max(1, int(batch_bytes // (8 * model.size)))
        self.largest = 0.0
        self._progress, self._total, self._done = progress, total, 0

    def __call__(self, left, right):
        """B(u, w) of one batch, shape (m, size)."""
        made = self.model.bilinear(left, right)
        self._done += len(made)
        if self._progress is not None:
            self._progress(self._done, self._total)
        return made

    def project(self, left, right, onto):
        """Coefficients of B(u, w), shape (k, m); the largest norm is kept."""
        made = self(left, right)
        self.largest = max(self.largest, np.sqrt(self.model.inner(made, made).max()))
        return (made @ onto).T

    def parts(self, count):
        """Slices of at most a batch."""
        return (slice(i, i + self.batch) for i in range(0, count, self.batch))


def _about_mean(work, states, mean, forcing, dual):
    """Tendency of the mean state, and linear operator about it."""
    model, mean = work.model, mean[np.newaxis]
    start = (forcing + model.linear(mean) + work(mean, mean))[0] @ dual
    columns = np.empty((len(states), len(states)))
    for part in work.parts(len(states)):
        made = model.linear(states[part]) + 2 * work(mean, states[part])
        columns[:, part] = (made @ dual).T
    return start, columns


def _interactions(work, states, dual, nx):
    """Tensors from B(u_j, u_k) and B(u_j, v_m), without round-off."""
    ny = len(states) - nx
    slow, fast = states[:nx], states[nx:]
    b111, b211 = np.empty((nx, nx, nx)), np.empty((ny, nx, nx))
    j, k = np.triu_indices(nx)
    for part in work.parts(len(j)):
        found = work.project(slow[j[part]], slow[k[part]], dual)
        for one, other in ((j[part], k[part]), (k[part], j[part])):
            b111[:, one, other], b211[:, one, other] = found[:nx], found[nx:]
    b112, b212 = np.empty((nx, nx, ny)), np.empty((ny, nx, ny))
    j, m = (index.ravel() for index in np.indices((nx, ny)))
    for part in work.parts(len(j)):
        found = work.project(slow[j[part]], fast[m[part]], dual)
        b112[:, j[part], m[part]], b212[:, j[part], m[part]] = found[:nx], found[nx:]
    for tensor in (b111, b112, b211, b212):
        tensor[np.abs(tensor) < ROUND_OFF * work.largest] = 0.0
    return b111, b112, b211, b212


def _fast_pairs(work, fast, onto):
    """``<u_i, B(v_m, v_n)>`` by evaluation, shape (nx, ny, ny)."""
    result = np.empty((onto.shape[1], len(fast), len(fast)))
    m, n = np.triu_indices(len(fast))
    for part in work.parts(len(m)):
        found = work.project(fast[m[part]], fast[n[part]], onto)
        result[:, m[part], n[part]] = result[:, n[part], m[part]] = found
    result[np.abs(result) < ROUND_OFF * work.largest] = 0.0
    return result


def _largest(*arrays):
    return max(float(np.abs(array).max(initial=0.0)) for array in arrays)


def _relative(error, scale):
    return error / scale if scale > 0 else 0.0


def _cyclic_sums(b111, b112, b211):
    """Sums over the cyclic permutations of three vectors: u u u and u u v."""
    return (
        b111 + b111.transpose(1, 2, 0) + b111.transpose(2, 0, 1),
        b112 + b112.transpose(1, 0, 2) + b211.transpose(1, 2, 0),
    )


def _take_off(sums, b111, b112, b211):
    """Take each sum, in equal shares, off those of its terms that are not zero."""
    terms = _cyclic_sums(*((b != 0).astype(float) for b in (b111, b112, b211)))
    uuu, uuv = (s / np.maximum(n, 1) for s, n in zip(sums, terms, strict=True))
    b111 -= uuu * (b111 != 0)
    b112 -= uuv * (b112 != 0)
    b211 -= uuv.transpose(2, 0, 1) * (b211 != 0)


def _probe(work, inferred, fast, onto):
    """Error of the inferred B122 on sums of all unresolved vectors."""
    if len(fast) == 0:
        return 0.0
    # Incommensurate frequencies: no symmetry that could hide an error.
    phases = np.outer(np.sqrt([2.0, 3.0, 5.0, 7.0]), np.arange(1, len(fast) + 1))
    weights = np.cos(phases)
    made = np.vstack([work(w[np.newaxis], w[np.newaxis]) for w in weights @ fast])
    expected = np.einsum("imn,pm,pn->pi", inferred, weights, weights, optimize=True)
    # B(w, w) may vanish; it is then round-off of sums of B(u_j, v_m).
    scale = max(
        np.sqrt(work.model.inner(made, made).max()),
        work.largest * np.square(weights).sum(axis=1).max(),
    )
    return _relative(_largest(made @ onto - expected), float(scale))


def _check_conservation(residual):
    if residual > CYCLIC:
        message = (
            "galerkin: the model declares energy_conserving, but its coefficients "
            f"miss it by {residual:.2g} of the largest one, allowed is {CYCLIC:g}; "
            "correct B or the inner product, or do not declare it"
        )
        raise ContractError(message)


def _checked_counts(model, resolved, unresolved, mean):
    n = model.size
    for name, vectors in (("resolved", resolved), ("unresolved", unresolved)):
        if np.ndim(vectors) != 2 or len(vectors) != n:
            message = (
                f"galerkin: {name} vectors of shape {np.shape(vectors)}, allowed are "
                f"columns of the model's size, ({n}, any number)"
            )
            raise DataError(message)
    if np.shape(mean) != (n,):
        message = f"galerkin: a mean state of shape {np.shape(mean)}, allowed is ({n},)"
        raise DataError(message)
    if resolved.shape[1] == 0:
        message = "galerkin: no resolved vectors were given; keep at least one"
        raise DataError(message)
    return resolved.shape[1], unresolved.shape[1]


def _check_orthonormal(products, nx):
    error = np.abs(products - np.eye(len(products)))
    if not error.max() <= ORTHONORMAL:
        a, b = np.unravel_index(np.nanargmax(error), error.shape)
        names = [f"resolved {i}" if i < nx else f"unresolved {i - nx}" for i in (a, b)]
        message = (
            f"galerkin: the inner product of vectors {names[0]} and {names[1]} is "
            f"{products[a, b]:.6g}, must be {float(a == b):g}; orthonormalise the "
            "basis in the model's inner product"
        )
        raise DataError(message)
