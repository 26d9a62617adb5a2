"""Errors of any statistic of a record, by leaving out one batch after the other.

Neighbours in time are not independent, so batches are long contiguous parts of the
record. Estimates lie along one axis: from all batches first, then from all but each
(jackknife: B. Efron and R. J. Tibshirani 1993, An Introduction to the Bootstrap,
ch. 11).
"""

from __future__ import annotations

import numpy as np


def left_out(sums: np.ndarray, counts: np.ndarray, axis: int) -> np.ndarray:
    """Means over all batches, then over all but each one.

    Parameters
    ----------
    sums : ndarray
        Sums over each batch, along `axis`.
    counts : ndarray of int, shape (batch,)
        Number of terms in each.
    axis : int

    Returns
    -------
    ndarray
        One longer than `sums` along `axis`.
    """
    sums = np.moveaxis(sums, axis, 0)
    counts = counts.reshape(-1, *(1,) * (sums.ndim - 1))
    total, count = sums.sum(axis=0), counts.sum()
    means = np.concatenate([total[None] / count, (total - sums) / (count - counts)])
    return np.moveaxis(means, 0, axis)


def jackknife_error(values: np.ndarray) -> np.ndarray:
    """Standard error from estimates with each batch left out.

    Parameters
    ----------
    values : ndarray, shape (batch + 1, ...)
        The first, from all batches, is not used.

    Returns
    -------
    ndarray, shape (...)
    """
    left_out = values[1:]
    return np.sqrt((len(left_out) - 1) * left_out.var(axis=0))


def less_bias(values: np.ndarray) -> np.ndarray:
    """Estimates less the bias that their scatter gives them (jackknife).

    The mean of estimates without a batch differs from the estimate of all by
    the bias of a record times ``1 / (batches - 1)``.

    Parameters
    ----------
    values : ndarray, shape (batch + 1, ...)

    Returns
    -------
    ndarray, shape (batch + 1, ...)
        All moved alike, so that their scatter is what it was.

    References
    ----------
    M. H. Quenouille (1956), Biometrika 43, 353.
    """
    batches = len(values) - 1
    return values + (batches - 1) * (values[0] - values[1:].mean(axis=0))
