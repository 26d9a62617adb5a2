"""Empirical orthogonal functions of a truth of any length, within a budget."""

from __future__ import annotations

import logging
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import linalg

from eddyshed.solver.errors import DataError
from eddyshed.solver.quantities import format_quantity
from eddyshed.solver.record import TruthRecord

from ..memory import check_memory, spare_bytes, stretch_rows
from .basis import Flat, count_for_share

log = logging.getLogger(__name__)

ROUND_OFF = 1e-12  # of the largest variance, below which eigenvectors are noise
# Matrices of the order of the eigenproblem that solving it takes: the matrix,
# its eigenvectors, and these once more while they are made orthogonal.
EIGENPROBLEM = 4
# Arrays like the vectors: themselves, their image, and two to orthogonalise.
VECTORS = 4
SPARE_VECTORS = 1.25  # sought for each that is wanted: it speeds convergence
PASSES = 24  # through the truth at most, for each number of vectors
SETTLED = 1e-6  # relative change of the variance held, from pass to pass


@dataclass(frozen=True, slots=True, eq=False)
class Functions:
    """Leading empirical orthogonal functions.

    Attributes
    ----------
    vectors : ndarray, shape (size, k)
        Orthonormal columns in flat coordinates.
    variance : ndarray, shape (k,)
        Falling.
    """

    vectors: np.ndarray
    variance: np.ndarray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Anomalies:
    """Departures of a truth from its mean, read block by block.

    Attributes
    ----------
    records : sequence of TruthRecord
        The members.
    mean : ndarray, shape (size,)
    flat : Flat
        What the departures are given in.
    removed : ndarray, shape (size, r)
        Orthonormal flat columns that are taken out of them.
    memory : float
        Budget [B].
    """

    records: Sequence[TruthRecord]
    mean: np.ndarray
    flat: Flat
    removed: np.ndarray
    memory: float

    @property
    def count(self) -> int:
        """Number of states, all members together."""
        return sum(len(record.times) for record in self.records)

    def read(self, start: int, stop: int) -> np.ndarray:
        """Departures start to stop of all, shape (stop - start, size)."""
        parts, first = [], 0
        for record in self.records:
            last = first + len(record.times)
            if start < last and stop > first:
                wanted = max(start, first) - first, min(stop, last) - first
                parts.append(record.read(*wanted))
            first = last
        found = parts[0] if len(parts) == 1 else np.concatenate(parts)
        del parts
        found -= self.mean
        if self.flat.root.ndim == 1:  # in place: blocks are as large as they can be
            found *= self.flat.root
        else:
            found = self.flat.states(found)
        if self.removed.shape[1]:
            found -= (found @ self.removed) @ self.removed.T
        return found

    def blocks(self, rows: int | None = None) -> Iterator[slice]:
        """Slices of at most so many states; as the budget allows by default."""
        if rows is None:
            rows = stretch_rows(self.memory, len(self.mean))
        for start in range(0, self.count, rows):
            yield slice(start, min(start + rows, self.count))

    def after(self, vectors: np.ndarray) -> np.ndarray:
        """Covariance times vectors, shape (size, k), in one pass."""
        made = np.zeros(vectors.shape)
        for where in self.blocks():
            states = self.read(where.start, where.stop)
            made += states.T @ (states @ vectors)
        return made / self.count


def leading_functions(truth: Anomalies, modes: int, share: float) -> Functions:
    """Find the leading functions, as many as are wanted.

    Parameters
    ----------
    truth : Anomalies
    modes : int
        How many are resolved.
    share : float
        Share of the variance beyond them that further functions must hold.

    Returns
    -------
    Functions
        The resolved and the further ones.

    Raises
    ------
    DataError
        If the truth varies in too few directions, or too many functions are
        wanted for the budget.

    Notes
    -----
    One of three ways, of which the log tells:

    - *covariance*, where there are no more coordinates than states: the
      covariance matrix is added up in one pass and solved;
    - *snapshots*, where there are fewer states: their matrix of inner products
      is put together from pairs of blocks (L. Sirovich 1987, Quart. Appl.
      Math. 45:561), and the functions are added up in a last pass;
    - *subspace iteration*, where neither matrix fits: random vectors are
      multiplied by the covariance, a pass through the truth each time, until
      the variance that they hold settles (N. Halko, P. G. Martinsson and
      J. A. Tropp 2011, SIAM Rev. 53:217). Their number doubles until they hold
      the share. Trailing functions come out a little mixed with those beyond.
    """
    size, count = len(truth.mean), truth.count
    order = min(size, count)
    rank = min(size - truth.removed.shape[1], count - 1)
    if EIGENPROBLEM * 8 * order**2 > spare_bytes(truth.memory) / 1.5:
        return _iterated(truth, modes, share, rank)
    solve = _from_covariance if size <= count else _from_snapshots
    return solve(truth, modes, share, rank)


def _wanted(truth, variance, modes, share):
    """How many functions are wanted of a whole spectrum; and that they fit."""
    varying = int((variance > ROUND_OFF * variance[0]).sum()) if len(variance) else 0
    if varying <= modes:
        message = (
            f"[resolved] modes = {modes}, but the truth varies in {varying} "
            "directions only; ask for fewer"
            if modes
            else "[resolved] keeps all directions in which the truth varies, and some "
            "must be left unresolved; keep fewer"
        )
        raise DataError(message)
    rest = variance[modes:varying]
    count = min(count_for_share(rest, share, rest.sum()), len(rest))
    check_functions(len(truth.mean), modes + count, truth.memory, variance, modes)
    return modes + count


def check_functions(
    size: int, count: int, memory: float, variance: np.ndarray, modes: int
) -> None:
    """Refuse more functions than fit, and say which share of variance would.

    Parameters
    ----------
    size, count : int
        Coordinates, and functions that are wanted.
    memory : float
        Budget [B].
    variance : ndarray
        Known variances, falling.
    modes : int
        How many of them are resolved.

    Raises
    ------
    DataError
        If they do not fit.
    """
    fitting = int(spare_bytes(memory) // (8 * VECTORS * size))
    rest = variance[modes:]
    held = rest[: max(0, fitting - modes)].sum() / rest.sum() if len(rest) else 0.0
    # A share that is given with two digits, rounded down.
    held = np.floor(100 * held) / 100
    instead = (
        f"keep less of the variance: [unresolved] variance = {held:.2g} would do"
        if 0 < held < 1
        else "keep fewer modes or use a coarser grid"
    )
    needed = 8 * VECTORS * size * count
    check_memory(needed, memory, f"{count} vectors of {size} coordinates", instead)


def _from_covariance(truth, modes, share, rank):
    size = len(truth.mean)
    log.info(
        "reduce: empirical orthogonal functions from the covariance of %d coordinates",
        size,
    )
    covariance = np.zeros((size, size))
    for where in truth.blocks():
        states = truth.read(where.start, where.stop)
        covariance += states.T @ states
    covariance /= truth.count
    # A symmetric matrix transposed is itself, in the order that LAPACK overwrites.
    variance, vectors = linalg.eigh(covariance.T, overwrite_a=True)
    del covariance
    variance = variance[::-1][:rank]
    count = _wanted(truth, variance, modes, share)
    vectors = vectors[:, ::-1][:, :count].copy()
    return Functions(_orthonormal(vectors, truth.removed), variance[:count])


def _from_snapshots(truth, modes, share, rank):
    states, size = truth.count, len(truth.mean)
    log.info(
        "reduce: empirical orthogonal functions from the inner products of %d states",
        states,
    )
    products = np.empty((states, states))
    left = spare_bytes(truth.memory) - 8 * states**2
    # One large block, which takes its size again while it is made, and small ones
    # that go past it.
    rows = max(1, int(left / 2 // (8 * size)))
    for one in truth.blocks(rows):
        first = truth.read(one.start, one.stop)
        products[one, one] = first @ first.T
        for start in range(one.stop, states, max(1, rows // 4)):
            other = slice(start, min(start + max(1, rows // 4), states))
            products[one, other] = first @ truth.read(other.start, other.stop).T
            products[other, one] = products[one, other].T
        del first
    products /= states
    variance, in_time = linalg.eigh(products.T, overwrite_a=True)
    del products
    variance = variance[::-1][:rank]
    count = _wanted(truth, variance, modes, share)
    in_time = in_time[:, ::-1][:, :count].copy()
    vectors = np.zeros((size, count))
    for where in truth.blocks():
        vectors += truth.read(where.start, where.stop).T @ in_time[where]
    # Else the last columns would drown in the round-off of the first.
    vectors /= np.linalg.norm(vectors, axis=0)
    return Functions(_orthonormal(vectors, truth.removed), variance[:count])


def _iterated(truth, modes, share, rank):
    size = len(truth.mean)
    total = sum(
        float(np.square(truth.read(where.start, where.stop)).sum())
        for where in truth.blocks()
    )
    total /= truth.count
    log.info(
        "reduce: empirical orthogonal functions by subspace iteration: %d states of "
        "%d coordinates, with %s to work in",
        truth.count,
        size,
        format_quantity(spare_bytes(truth.memory), "B"),
    )
    # Half of the budget: the other half holds a block of the truth.
    most = int(spare_bytes(truth.memory) / 2 // (8 * VECTORS * size))
    most = min(most, rank)
    number = min(most, int(SPARE_VECTORS * (modes + 32)) + 1)
    least = 2 * 8 * VECTORS * size * (int(SPARE_VECTORS * (modes + 1)) + 1)
    what = f"{modes} functions of {size} coordinates and room to find them"
    check_memory(least, truth.memory, what, "keep fewer modes")
    rng = np.random.Generator(np.random.PCG64(0))
    vectors = np.zeros((size, 0))
    while True:
        more = rng.standard_normal((size, number - vectors.shape[1]))
        vectors = _orthonormal(np.hstack([vectors, more]), truth.removed)
        vectors, variance, error = _settled(truth, vectors, number)
        sure = number if number == rank else int(number / SPARE_VECTORS)
        rest = max(total - variance[:modes].sum(), 0.0)
        count = count_for_share(variance[modes:sure], share, rest)
        if modes + count <= sure:
            break
        if number == most:
            held = variance[modes:sure].sum() / rest
            message = (
                f"[unresolved] variance = {share:g} of the truth lies in more than "
                f"the {sure} functions that {format_quantity(truth.memory, 'B')} of "
                f"memory give room for: they hold {held:.3g} of what is not resolved; "
                f"ask for variance = {np.floor(100 * held) / 100:g}, or raise [limits] "
                "memory"
            )
            raise DataError(message)
        number = min(most, 2 * number)
    log.info(
        "reduce: %d functions, the resolved ones to %.1g of the largest variance",
        modes + count,
        error[: max(modes, 1)].max(),
    )
    count += modes
    return Functions(vectors[:, :count].copy(), variance[:count])


def _settled(truth, vectors, number):
    """Iterate until the variance that vectors hold settles.

    Returns
    -------
    vectors, variance : ndarray
        Ritz vectors and values, falling.
    error : ndarray
        Norm of what the covariance makes of each vector less the value times
        the vector, over the largest value: it bounds the error of the value.
    """
    sure, before = int(number / SPARE_VECTORS), 0.0
    image = vectors
    for done in range(PASSES):
        if done:
            vectors = _orthonormal(image, truth.removed)
        image = truth.after(vectors)
        small = vectors.T @ image
        variance, turn = linalg.eigh((small + small.T) / 2)
        variance, turn = variance[::-1], turn[:, ::-1]
        held = variance[:sure].sum()
        if abs(held - before) <= SETTLED * held:
            break
        before = held
    vectors, image = vectors @ turn, image @ turn
    image -= vectors * variance
    error = np.linalg.norm(image, axis=0) / variance[0]
    return vectors, variance, error


def _orthonormal(vectors, removed):
    """Orthonormal columns of the same span, also to those removed."""
    if not removed.shape[1]:
        return linalg.qr(vectors, mode="economic", overwrite_a=True)[0]
    joint = np.hstack([removed, vectors])
    joint, _ = linalg.qr(joint, mode="economic", overwrite_a=True)
    return joint[:, removed.shape[1] :]
