"""Empirical orthogonal functions: the directions in which the truth varies most."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from eddyshed.solver.errors import DataError
from eddyshed.solver.record import TruthRecord

from ..contract import Model
from .basis import Basis, Flat
from .functions import Anomalies, leading_functions
from .settings import EofSettings


def eof_basis(
    settings: EofSettings,
    model: Model,
    records: Sequence[TruthRecord],
    mean: np.ndarray,
    *,
    share: float,
    memory: float,
) -> tuple[Basis, Basis]:
    """Find the empirical orthogonal functions in the model's inner product.

    Parameters
    ----------
    settings : EofSettings
        How many are resolved.
    model : Model
        Gives the inner product.
    records : sequence of TruthRecord
        The members of the truth, read in blocks.
    mean : ndarray, shape (size,)
        Its mean.
    share : float
        Share of the variance beyond them that further functions must hold.
    memory : float
        Budget [B]; see :func:`~.functions.leading_functions` for the three
        ways of which it is the judge.

    Returns
    -------
    resolved, unresolved : Basis
        The leading functions, and as many more as hold the share, by falling
        variance. Each function's largest component is positive, which fixes
        its sign.

    Raises
    ------
    DataError
        If more are asked for than there are states or coordinates, or than
        fit into the budget.
    """
    truth = anomalies(model, records, mean, np.zeros((len(mean), 0)), memory)
    count, size = truth.count, len(mean)
    rank = min(size, count - 1)
    if settings.modes >= rank:
        message = (
            f"[resolved] modes = {settings.modes}, but {count} states of {size} "
            f"coordinates have {rank} functions, and some must be left unresolved; "
            "ask for fewer"
        )
        raise DataError(message)
    everything = basis_of_functions(truth, settings.modes, share)
    chosen = np.arange(everything.n_modes)
    return (
        everything.take(chosen[: settings.modes]),
        everything.take(chosen[settings.modes :]),
    )


def remainder_basis(
    resolved: np.ndarray,
    model: Model,
    records: Sequence[TruthRecord],
    mean: np.ndarray,
    *,
    share: float,
    memory: float,
) -> Basis:
    """Find the empirical orthogonal functions of what some vectors leave.

    Parameters
    ----------
    resolved : ndarray, shape (size, nx)
        Columns, orthonormal in the model's inner product.
    model, records, mean, share, memory
        As for :func:`eof_basis`.

    Returns
    -------
    Basis
        As many as hold the share of the variance that is left, named
        ``remainder 1, 2, ...``.

    Raises
    ------
    DataError
        If nothing is left, or they do not fit into the budget.
    """
    flat = Flat.of(model).states(resolved.T).T
    truth = anomalies(model, records, mean, flat, memory)
    if min(len(mean) - resolved.shape[1], truth.count - 1) < 1:
        message = (
            f"[resolved] keeps {resolved.shape[1]} modes of {len(mean)} coordinates, "
            "and some must be left unresolved; keep fewer"
        )
        raise DataError(message)
    return basis_of_functions(truth, 0, share, name="remainder")


def anomalies(model, records, mean, removed, memory) -> Anomalies:
    """Departures of a truth in the coordinates of a model's inner product."""
    return Anomalies(
        records=records,
        mean=mean,
        flat=Flat.of(model),
        removed=removed,
        memory=memory,
    )


def basis_of_functions(
    truth: Anomalies, modes: int, share: float, name: str = "EOF"
) -> Basis:
    """Leading functions of a truth as a basis; see `leading_functions`."""
    found = leading_functions(truth, modes, share)
    vectors = truth.flat.vectors(found.vectors)
    largest = np.abs(vectors).argmax(axis=0)
    vectors *= np.sign(vectors[largest, np.arange(len(largest))])
    count = len(found.variance)
    return Basis(
        vectors=vectors,
        labels=tuple(f"{name} {i + 1}" for i in range(count)),
        partners=np.full(count, -1),
        variance=found.variance,
    )
