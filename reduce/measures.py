"""Numbers that the report shows beside those of the audit and the benchmark.

Each comes with a standard error: by batch means where it is the mean of a
record, by Bartlett's formula where it is a correlation.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from eddyshed.solver.record import TruthRecord

from .estimate import Estimate
from .ornstein_uhlenbeck import OrnsteinUhlenbeck
from .statistics import autocovariance, effective_size

BATCHES = 20  # batch means: common practice, the error is then known to a sixth


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EnergyBudget:
    """Mean energy and the mean of the terms that change it.

    Attributes
    ----------
    energy : Estimate, shape ()
        [m2 s-2]
    change : Estimate, shape ()
        Energy at the end less that at the start, over the length [m2 s-3].
    work, dissipation : Estimate, shape ()
        Fed by the steady forcing, lost to friction (negative) [m2 s-3].
    residual : Estimate, shape ()
        Change less work less dissipation [m2 s-3]: what stirring fed, and the
        error of integrating over the sampled record.
    batches : int
        Stretches of the record that the errors come from.
    """

    energy: Estimate
    change: Estimate
    work: Estimate
    dissipation: Estimate
    residual: Estimate
    batches: int


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


def batch_edges(count: int) -> np.ndarray:
    """Cut a record of `count` samples into equal parts; first index of each, and end.

    There are 20 parts, or fewer if they would hold less than two samples.
    """
    batches = max(1, min(BATCHES, count // 2))
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


def energy_budget(times: np.ndarray, terms: dict[str, np.ndarray]) -> EnergyBudget:
    """Energy budget of a record.

    Parameters
    ----------
    times : ndarray, shape (n_time,)
        Equally spaced [s].
    terms : dict of ndarray, each (n_time,)
        ``energy``, ``work`` and ``dissipation``.

    Returns
    -------
    EnergyBudget

    Notes
    -----
    Rates are integrated by the trapezoidal rule, over the record for the
    values and over each batch for the errors.
    """
    edges = batch_edges(len(times) - 1)
    length = times[-1] - times[0]
    spans = np.diff(times[edges])

    def mean(series):
        middle = (series[1:] + series[:-1]) / 2 * np.diff(times)
        parts = np.add.reduceat(middle, edges[:-1])
        return parts / spans, middle.sum() / length

    energy = terms["energy"]
    change = np.diff(energy[edges]) / spans, (energy[-1] - energy[0]) / length
    work, dissipation = mean(terms["work"]), mean(terms["dissipation"])
    residual = tuple(
        c - w - d for c, w, d in zip(change, work, dissipation, strict=True)
    )
    return EnergyBudget(
        energy=of_batches(*mean(energy)),
        change=of_batches(*change),
        work=of_batches(*work),
        dissipation=of_batches(*dissipation),
        residual=of_batches(*residual),
        batches=len(edges) - 1,
    )


def batch_states(record: TruthRecord) -> np.ndarray:
    """Mean state of each batch of a record, shape (batch, size)."""
    edges = batch_edges(len(record.times))
    means = np.zeros((len(edges) - 1, record.size))
    for where, states in record.chunks():
        place = np.searchsorted(edges, np.arange(where.start, where.stop), "right") - 1
        first = np.flatnonzero(np.diff(place, prepend=-1))
        means[place[first]] += np.add.reduceat(states, first, axis=0)
    return means / np.diff(edges)[:, np.newaxis]


def eastward_profile(ocean, z: np.ndarray) -> np.ndarray:
    """Eastward velocity averaged along x [m s-1], shape (ny,)."""
    u, _ = ocean.space.velocity(ocean.streamfunction(z))
    return u.mean(axis=1)


def refined(field: np.ndarray, least: int) -> np.ndarray:
    """A periodic field on a finer grid, by its Fourier series.

    Parameters
    ----------
    field : ndarray, shape (ny, nx)
        Without waves of two grid points, which no truth here has.
    least : int
        Points that the longer axis has at least in the result.

    Returns
    -------
    ndarray, shape (factor * ny, factor * nx)
        Every `factor`-th point is one of the field.
    """
    factor = max(1, -(-least // max(field.shape)))
    ny, nx = field.shape
    padded = np.zeros((factor * ny, factor * nx // 2 + 1), dtype=complex)
    spectrum = np.fft.rfft2(field)
    half = ny // 2
    padded[:half, : nx // 2 + 1] = spectrum[:half]
    padded[-half:, : nx // 2 + 1] = spectrum[half:]
    return np.fft.irfft2(padded, s=(factor * ny, factor * nx)) * factor**2


def block_ranges(series: np.ndarray, most: int) -> tuple[np.ndarray, ...]:
    """Mean, least and greatest of at most `most` blocks of a series, for drawing.

    Parameters
    ----------
    series : ndarray, shape (n_time,)
    most : int
        Number of blocks at most.

    Returns
    -------
    mean, low, high : ndarray, shape (block,)
    """
    starts = np.unique(np.linspace(0, len(series), min(most, len(series)) + 1)[:-1])
    starts = starts.astype(int)
    sizes = np.diff(starts, append=len(series))
    return (
        np.add.reduceat(series, starts) / sizes,
        np.minimum.reduceat(series, starts),
        np.maximum.reduceat(series, starts),
    )


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
    series : ndarray, shape (n_time, 1 or 2)
    lags : int
        Longest lag in samples.

    Returns
    -------
    ndarray, shape (lags + 1,)
        For ``z = y_1 + i y_2`` the real part of ``E[z(t + lag) conj z(t)]``
        is the sum of the two lag covariances.
    """
    total = autocovariance(series[np.newaxis], lags).sum(axis=1)
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
