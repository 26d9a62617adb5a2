"""Time series as the reduction holds them, and whether they can be used.

Every series is a float array ``(member, time, mode)``: the members are
independent realisations of equal length, sampled at an equal `step` [s].
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

import numpy as np

from eddyshed.solver.errors import DataError

SHORTEST = 8  # fewest times in a member that any statistic accepts
WORKING_MEMORY = 2**26  # bytes that a block of modes may take while in work


def checked_series(
    series: np.ndarray, where: str, labels: Sequence[str] | None = None
) -> np.ndarray:
    """Return the series as a float array, or say why it cannot be used.

    Parameters
    ----------
    series : array_like, shape (member, time, mode)
        Real and finite, at least eight times, no mode constant. There may
        be no modes at all.
    where : str
        Who asks; the error begins with it.
    labels : sequence of str, optional
        Names of the modes for the errors; their index otherwise.

    Returns
    -------
    ndarray of float, shape (member, time, mode)

    Raises
    ------
    DataError
        If the series is anything else.
    """
    series = np.asarray(series)
    if series.ndim != 3 or series.dtype.kind not in "fiu":
        message = (
            f"{where}: a series of shape {series.shape} and type {series.dtype}, "
            "allowed are real numbers of shape (member, time, mode); add the "
            "missing axes, or put real and imaginary parts in two modes"
        )
        raise DataError(message)
    members, times, modes = series.shape
    if labels is not None and len(labels) != modes:
        message = (
            f"{where}: {len(labels)} labels for {modes} modes; give one to each mode"
        )
        raise DataError(message)
    if members < 1 or times < SHORTEST:
        message = (
            f"{where}: {members} members of {times} times, allowed is at least one "
            f"member of {SHORTEST} times; give a longer series"
        )
        raise DataError(message)
    series = series.astype(float, copy=False)
    low, high = series.min(axis=(0, 1)), series.max(axis=(0, 1))
    bad = ~(np.isfinite(low) & np.isfinite(high))
    if bad.any():
        message = (
            f"{where}: {_names(bad, labels)} holds NaN or infinity, allowed are "
            "finite numbers; cut the record before the gap or fill it"
        )
        raise DataError(message)
    # A constant that went through a sum or a file differs in its last digits.
    bad = high - low <= 64 * np.finfo(float).eps * np.maximum(abs(low), abs(high))
    if bad.any():
        message = (
            f"{where}: {_names(bad, labels)} is constant, allowed are modes that "
            "vary; leave it out"
        )
        raise DataError(message)
    return series


def checked_step(step: float, where: str) -> float:
    """Return the step [s] as a float, or raise DataError if it is not positive."""
    step = float(step)
    if not (math.isfinite(step) and step > 0):
        message = (
            f"{where}: a step of {step} s, allowed is a positive number; give the "
            "time between two samples"
        )
        raise DataError(message)
    return step


def _names(bad: np.ndarray, labels: Sequence[str] | None) -> str:
    """Name the first marked mode, and say how many more there are."""
    marked = np.flatnonzero(bad)
    name = f"mode {marked[0]}" if labels is None else f"mode {labels[marked[0]]}"
    return name if marked.size == 1 else f"{name} (and {marked.size - 1} more)"


def mode_blocks(count: int, bytes_each: int) -> Iterator[slice]:
    """Cut `count` modes into blocks that each fit the working memory (64 MiB)."""
    width = max(1, WORKING_MEMORY // max(1, bytes_each))
    for start in range(0, count, width):
        yield slice(start, min(start + width, count))
