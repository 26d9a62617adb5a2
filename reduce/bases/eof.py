"""Empirical orthogonal functions: the directions in which the truth varies most."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy import linalg

from eddyshed.solver.errors import DataError
from eddyshed.solver.record import TruthRecord, walk

from ..contract import Model, metric
from ..settings import EofSettings
from .basis import Basis

LARGEST = 8192  # rows of the matrix whose eigenvectors are taken: 512 MB


def eof_basis(
    settings: EofSettings,
    model: Model,
    records: Sequence[TruthRecord],
    mean: np.ndarray,
) -> tuple[Basis, Basis]:
    """Find the empirical orthogonal functions in the model's inner product.

    Parameters
    ----------
    settings : EofSettings
        How many are kept.
    model : Model
        Gives the inner product.
    records : sequence of TruthRecord
        The members of the truth, read in stretches.
    mean : ndarray, shape (size,)
        Its mean.

    Returns
    -------
    resolved, remainder : Basis
        The leading functions, and all others that carry variance, by falling
        variance. Each function's largest component is positive, which fixes
        its sign.

    Raises
    ------
    DataError
        If more are asked for than there are states or coordinates, or if both
        are beyond 8192.

    Notes
    -----
    Eigenvectors of the covariance matrix where there are fewer coordinates
    than states, else of the states' matrix of inner products (Sirovich 1987,
    Quart. Appl. Math. 45:561). The covariance is gathered from stretches of
    the record; in the second case all anomalies are held in memory.
    """
    lengths = [len(record.times) for record in records]
    n_time, size = sum(lengths), records[0].size
    rank = min(size, n_time - 1)
    if settings.modes >= rank:
        message = (
            f"[resolved] modes = {settings.modes}, but {n_time} states of {size} "
            f"coordinates have {rank} functions, and some must be left unresolved; "
            "ask for fewer"
        )
        raise DataError(message)
    if min(size, n_time) > LARGEST:
        message = (
            f'[resolved] kind = "eof": {n_time} states of {size} coordinates need a '
            f"matrix of order {min(size, n_time)}, above {LARGEST}; record fewer "
            "states or use a coarser grid"
        )
        raise DataError(message)
    # In y = root z the model's inner product is the plain dot product.
    weights = metric(model)
    root = np.sqrt(weights) if weights.ndim == 1 else linalg.cholesky(weights)

    def flat(states):
        anomalies = states - mean
        return anomalies * root if root.ndim == 1 else anomalies @ root.T

    if size <= n_time:
        covariance = np.zeros((size, size))
        for _, _, states in walk(records):
            anomalies = flat(states)
            covariance += anomalies.T @ anomalies
        variance, vectors = linalg.eigh(covariance / n_time)
    else:
        anomalies = np.empty((n_time, size))
        start = 0
        for _, _, states in walk(records):
            anomalies[start : start + len(states)] = flat(states)
            start += len(states)
        variance, weights_in_time = linalg.eigh(anomalies @ anomalies.T / n_time)
        vectors = anomalies.T @ weights_in_time
    variance, vectors = variance[::-1][:rank], vectors[:, ::-1][:, :rank]
    varying = variance > 1e-12 * variance[0]  # beyond it eigenvectors are round-off
    if varying.sum() <= settings.modes:
        message = (
            f"[resolved] modes = {settings.modes}, but the truth varies in "
            f"{varying.sum()} directions only; ask for fewer"
        )
        raise DataError(message)
    variance, vectors = variance[varying], vectors[:, varying]
    # Products of states with weights lose orthogonality by the ratio of variances.
    vectors, _ = linalg.qr(vectors, mode="economic")
    vectors = (
        vectors / root[:, np.newaxis]
        if root.ndim == 1
        else linalg.solve_triangular(root, vectors)
    )
    largest = np.abs(vectors).argmax(axis=0)
    vectors = vectors * np.sign(vectors[largest, np.arange(len(largest))])
    everything = Basis(
        vectors=vectors,
        labels=tuple(f"EOF {i + 1}" for i in range(len(variance))),
        partners=np.full(len(variance), -1),
        variance=variance,
    )
    chosen = np.arange(len(variance))
    return (
        everything.take(chosen[: settings.modes]),
        everything.take(chosen[settings.modes :]),
    )
