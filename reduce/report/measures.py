"""What the report says of the flow: means with errors by batch means, and fields."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from eddyshed.solver.record import TruthRecord

from ..estimate import Estimate

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
