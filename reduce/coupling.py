"""How the unresolved modes reach the resolved ones along a truth."""

from __future__ import annotations

import numpy as np

from .operators import Operators
from .split import Split

SAMPLE = 2000  # records that sizes of terms are taken from


def coupling(split: Split, operators: Operators) -> np.ndarray:
    """What the unresolved modes do to the resolved ones.

    Parameters
    ----------
    split : Split
    operators : Operators

    Returns
    -------
    ndarray, shape (member, time, nx)
        The full resolved tendency less that of the truncated equation, so it
        holds what is in no mode at all as well [state unit s-1].
    """
    x = split.x
    truncated = (
        operators.F1
        + x @ operators.A11.T
        + np.einsum("ijk,...j,...k->...i", operators.B111, x, x, optimize=True)
    )
    variation = operators.variation
    if variation is not None:
        truncated += variation.factors(split.times) @ variation.resolved
    return split.tendency - truncated


def covariance(u: np.ndarray, v: np.ndarray) -> np.ndarray:
    """Mean product of two series, shape (n, m), of shapes (member, time, n or m)."""
    members, times, _ = u.shape
    return np.einsum("mti,mtj->ij", u, v, optimize=True) / (members * times)


def coupling_sizes(
    operators: Operators, x: np.ndarray, y: np.ndarray
) -> tuple[float, float]:
    """Sizes of the linear and of the quadratic coupling.

    Parameters
    ----------
    operators : Operators
    x, y : ndarray, shapes (member, time, nx), (member, time, ny)
        Resolved and unresolved coordinates; at most 2000 records, spread over
        all, are used.

    Returns
    -------
    linear, quadratic : float
        Root mean square of ``A12 y + 2 B112(x, y)`` and of ``B122(y, y)`` less
        its mean [state unit s-1].
    """
    x, y = np.concatenate(x), np.concatenate(y)
    every = -(-len(x) // SAMPLE)
    x, y = x[::every], y[::every]
    linear = y @ operators.A12.T
    linear += 2 * np.einsum("ijm,tj,tm->ti", operators.B112, x, y, optimize=True)
    quadratic = np.stack(
        [((y @ matrix) * y).sum(axis=1) for matrix in operators.B122], axis=1
    )
    quadratic -= quadratic.mean(axis=0)
    return float(np.sqrt(np.mean(linear**2))), float(np.sqrt(np.mean(quadratic**2)))
