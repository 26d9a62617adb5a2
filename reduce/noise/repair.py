"""Rates that ask for noise of negative variance: a small repair, or none."""

from __future__ import annotations

import numpy as np

from eddyshed.solver.errors import DataError

from .ornstein_uhlenbeck import ROUND_OFF, diffusion_defect

MOST_REPAIR = 0.05  # of the noise variance; more is another process, not a repair
FLOOR = 1e-3  # of the largest noise variance: what is repaired must still be forced


def repaired_rate(rate: np.ndarray, covariance: np.ndarray) -> tuple[np.ndarray, float]:
    """Rate whose noise has no negative variance, and the share that this changes.

    Negative eigenvalues of the noise, for unit variances, are raised to a
    thousandth of the largest. The covariance stays, and so does the
    antisymmetric part of the rate times the covariance (what turns).

    Parameters
    ----------
    rate, covariance : ndarray, shape (n, n)

    Returns
    -------
    rate : ndarray, shape (n, n)
        The same, if nothing had to be done.
    share : float
        What the eigenvalues were raised by, over the sum of their moduli.
    """
    scale = np.sqrt(np.diagonal(covariance))
    outer = np.outer(scale, scale)
    half = rate @ covariance / outer
    values, vectors = np.linalg.eigh(half + half.T)
    if values[0] >= 0:
        return rate, 0.0
    raised = np.where(values < 0, max(FLOOR * values[-1], 0.0), values)
    share = float((raised - values).sum() / np.abs(values).sum())
    noise = (vectors * raised) @ vectors.T
    half = (noise + half - half.T) / 2 * outer
    return np.linalg.solve(covariance, half.T).T, share


def check_independent(square: np.ndarray) -> None:
    """Raise DataError if coordinates are linearly dependent.

    Parameters
    ----------
    square : ndarray, shape (n, n)
        Their covariance.
    """
    if diffusion_defect(square / 2, square) < ROUND_OFF:
        message = (
            "Ornstein-Uhlenbeck fit: the covariance of the coordinates is singular, "
            "allowed are linearly independent ones for a matrix; leave some out, or "
            "fit a diagonal"
        )
        raise DataError(message)
