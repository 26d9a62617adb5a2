"""Curves of the report: correlation functions and densities, with their errors."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from ..flow.means import batch_edges, of_batches
from ..noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from ..statistics.correlation import autocovariance, effective_size
from ..statistics.estimate import Estimate

BARTLETT = "Bartlett 1946, J. R. Stat. Soc. Suppl. 8:27"  # of `large_lag_error`


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Correlation:
    """Correlation functions that one panel shows.

    Attributes
    ----------
    label : str
        Name of the mode.
    lags, truth : ndarray, shape (lag,)
        Lags [s] and the correlation of the truth there.
    error : float
        Standard error of the truth's; infinite if unknown.
    curves : mapping of int to (lags, values)
        Those of models, by their place among the closures.
    longest : float
        End of the axis [s].
    """

    label: str
    lags: np.ndarray
    truth: np.ndarray
    error: float
    curves: Mapping[int, tuple[np.ndarray, np.ndarray]]
    longest: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Distribution:
    """Densities that one panel shows.

    Attributes
    ----------
    label : str
        Name of the mode.
    edges : ndarray, shape (bin + 1,)
        Bins [state unit].
    truth : Estimate, shape (bin,)
        Density of the truth.
    curves : mapping of int to ndarray, shape (bin,)
        Those of closures, by their place.
    """

    label: str
    edges: np.ndarray
    truth: Estimate
    curves: Mapping[int, np.ndarray]


def large_lag_error(series: np.ndarray, step: float) -> np.ndarray:
    """Standard error of a sample correlation at lags where the true one is gone.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
    step : float
        Time between samples [s].

    Returns
    -------
    ndarray, shape (mode,)
        Infinite where the record is too short to know.

    Notes
    -----
    The variance is the integral time of the squared correlation function over
    the length of the record: the sum over v of ``rho_v**2`` over the number of
    samples (M. S. Bartlett 1946, J. R. Stat. Soc. Suppl. 8, 27). At short
    lags, where correlations are known better, it overstates the error.
    """
    size = effective_size(series, step).variance
    return np.where(np.isfinite(size.error), 1 / np.sqrt(size.value), np.inf)


def rotating_units(partners: np.ndarray) -> list[tuple[int, ...]]:
    """Pairs (lower index first) and unpaired modes, in order of the first index."""
    return [
        (mode,) if partner < 0 else (mode, int(partner))
        for mode, partner in enumerate(partners)
        if partner < 0 or mode < partner
    ]


def unit_correlation(series: np.ndarray, lags: int) -> np.ndarray:
    """Correlation function of a mode, or real part of that of a rotating pair.

    Parameters
    ----------
    series : ndarray, shape (member, time, 1 or 2)
    lags : int
        Longest lag in samples.

    Returns
    -------
    ndarray, shape (lags + 1,)
        For ``z = y_1 + i y_2`` the real part of ``E[z(t + lag) conj z(t)]``
        is the sum of the two lag covariances.
    """
    total = autocovariance(series, lags).sum(axis=1)
    return total / total[0]


def process_correlation(
    process: OrnsteinUhlenbeck, unit: tuple[int, ...], spacing: float, count: int
) -> np.ndarray:
    """The same of an Ornstein-Uhlenbeck process, at lags ``0, spacing, ...``.

    Parameters
    ----------
    process : OrnsteinUhlenbeck
        The process.
    unit : tuple of int
        One or two of its coordinates.
    spacing : float
        Between lags [s].
    count : int
        Number of lags.

    Returns
    -------
    ndarray, shape (count,)
    """
    unit = list(unit)
    onward = process.propagator(spacing)
    columns = process.covariance[:, unit]
    result = np.empty(count)
    for lag in range(count):
        result[lag] = np.trace(columns[unit])
        columns = onward @ columns
    return result / result[0]


def density(series: np.ndarray, edges: np.ndarray) -> Estimate:
    """Density of a series in bins, with errors by batch means.

    Parameters
    ----------
    series : ndarray, shape (member, time)
        Members count as one record.
    edges : ndarray, shape (bin + 1,)
        Equally spaced; values outside count in the total.

    Returns
    -------
    Estimate, shape (bin,)
        Per unit of the series.
    """
    flat, bins, width = series.ravel(), len(edges) - 1, edges[1] - edges[0]
    cuts = batch_edges(len(flat))
    bin_of = np.clip(np.searchsorted(edges, flat, "right"), 0, bins + 1)
    batch_of = np.repeat(np.arange(len(cuts) - 1), np.diff(cuts))
    counts = np.bincount(
        batch_of * (bins + 2) + bin_of, minlength=(len(cuts) - 1) * (bins + 2)
    ).reshape(-1, bins + 2)[:, 1:-1]
    whole = counts.sum(axis=0) / (len(flat) * width)
    return of_batches(counts / (np.diff(cuts)[:, np.newaxis] * width), whole)
