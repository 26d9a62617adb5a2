"""Means over records with their errors, and series cut short for drawing."""

from __future__ import annotations

import numpy as np

from ..statistics.correlation import effective_size
from ..statistics.estimate import Estimate
from ..statistics.series import SHORTEST

BATCHES = 20  # batch means: common practice, the error is then known to a sixth


def mean_of(series: np.ndarray, step: float) -> Estimate:
    """Time mean of each column, with the error that its own memory leaves.

    Parameters
    ----------
    series : ndarray, shape (member, time, column)
        Equal steps; columns may be constant.
    step : float
        Time between samples [s].

    Returns
    -------
    Estimate, shape (column,)
        The error is zero for a constant column, and infinite where the record is
        too short to know the integral time.

    Notes
    -----
    The larger of two errors. One squared is the variance over the effective size
    less one, since the variance about the mean of the record lacks that part; the
    effective size is that of `eddyshed.reduce.statistics.correlation.effective_size`
    for a mean. It ends where the correlation first falls, and so misses a slow change
    behind a fast oscillation, as of gyres that pulsate. The other is that of batch
    means (20 of all members), which sees it. Where both are right, the larger of
    the two is some 6 % too large.
    """
    low, high = series.min(axis=(0, 1)), series.max(axis=(0, 1))
    # What is constant but for round-off has no correlation function.
    varies = high - low > 64 * np.finfo(float).eps * np.maximum(abs(low), abs(high))
    error = np.where(varies, np.inf, 0.0)
    if series.shape[1] >= SHORTEST and varies.any():
        chosen = series[:, :, varies]
        size = effective_size(chosen, step).mean
        with np.errstate(divide="ignore"):
            squared = chosen.var(axis=(0, 1)) / np.maximum(size.value - 1, 0.0)
        scatter = of_batches(_batch_means(chosen), chosen.mean(axis=(0, 1))).error
        known = np.maximum(np.sqrt(squared), scatter)
        error[varies] = np.where(np.isfinite(size.error), known, np.inf)
    return Estimate(series.mean(axis=(0, 1)), error)


def _batch_means(series):
    """Means of 20 batches of whole or parts of members, shape (batch, column)."""
    edges = batch_edges(series.shape[1], max(1, BATCHES // len(series)))
    sums = np.add.reduceat(series, edges[:-1], axis=1)
    return (sums / np.diff(edges)[:, np.newaxis]).reshape(-1, series.shape[2])


def batch_edges(count: int, most: int = BATCHES) -> np.ndarray:
    """Cut a record of `count` samples into equal parts; first index of each, and end.

    There are `most` parts, or fewer if they would hold less than two samples.
    """
    batches = max(1, min(most, count // 2))
    return np.round(np.linspace(0, count, batches + 1)).astype(int)


def of_batches(values: np.ndarray, whole: np.ndarray) -> Estimate:
    """Estimate of a mean whose values in batches are known.

    Parameters
    ----------
    values : ndarray, shape (batch, ...)
        Mean of each batch.
    whole : ndarray, shape (...)
        Mean of the record.

    Returns
    -------
    Estimate, shape (...)
        The error is infinite if there is one batch only.
    """
    count = len(values)
    if count < 2:
        return Estimate(whole, np.full(np.shape(whole), np.inf))
    return Estimate(whole, values.std(axis=0, ddof=1) / np.sqrt(count))


def block_ranges(series: np.ndarray, most: int) -> tuple[np.ndarray, ...]:
    """Mean, least and greatest of at most `most` blocks of a series, for drawing.

    Parameters
    ----------
    series : ndarray, shape (..., n_time)
    most : int
        Number of blocks at most.

    Returns
    -------
    mean, low, high : ndarray, shape (..., block)
    """
    count = np.shape(series)[-1]
    starts = np.unique(np.linspace(0, count, min(most, count) + 1)[:-1].astype(int))
    sizes = np.diff(starts, append=count)
    return (
        np.add.reduceat(series, starts, axis=-1) / sizes,
        np.minimum.reduceat(series, starts, axis=-1),
        np.maximum.reduceat(series, starts, axis=-1),
    )
