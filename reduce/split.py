"""The truth divided: what is kept, what noise stands in for, what is left out."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from eddyshed.solver.hooks import Hook
from eddyshed.solver.record import TruthRecord, walk

from .bases.basis import Basis
from .bases.boxes import boxes_basis
from .bases.eof import eof_basis, remainder_basis
from .bases.file_vectors import file_basis
from .bases.fourier import fourier_basis
from .bases.hooked import hooked_basis
from .contract import Model, dual_vectors, metric, tendency
from .memory import check_memory, spare_bytes, stretch_rows
from .operators import batch_bytes_of, memory_bytes
from .settings import (
    BoxesSettings,
    EofSettings,
    FileSettings,
    FourierSettings,
    StudyConfig,
)

SERIES = 4  # copies of the unresolved series that the fit of the noise takes


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Split:
    """Resolved and unresolved parts of a truth, centred on its time mean.

    Attributes
    ----------
    mean : ndarray, shape (size,)
        Time mean of the full state.
    resolved, unresolved : Basis
        The two subspaces.
    resolved_mean : ndarray, shape (nx,)
        Mean of the resolved coordinates, which `x` is centred on.
    x : ndarray, shape (member, time, nx)
        Resolved coordinates, less their mean [state unit].
    tendency : ndarray, shape (member, time, nx)
        Full tendency of the resolved coordinates [state unit s-1].
    step : float
        Interval between records [s].
    start : float
        Time of the first record, on the clock that forcing varies by [s].
    fine_x : ndarray, shape (member, fine_time, nx)
        Resolved coordinates at the interval of the fine stream, less the same
        mean; `x` itself where the stream does not hold them.
    fine_step : float
        Interval of `fine_x` [s].
    total_variance, left_out_variance : float
        Variance of the truth, and of what is in no mode at all.
    """

    mean: np.ndarray
    resolved: Basis
    unresolved: Basis
    resolved_mean: np.ndarray
    x: np.ndarray
    tendency: np.ndarray
    step: float
    fine_x: np.ndarray
    fine_step: float
    total_variance: float
    left_out_variance: float
    start: float = 0.0

    @property
    def times(self) -> np.ndarray:
        """Times of the records [s], the same for all members."""
        return self.start + self.step * np.arange(self.x.shape[1])

    @property
    def shares(self) -> tuple[float, float, float]:
        """Shares of variance: resolved, unresolved, left out."""
        parts = (
            self.resolved.variance.sum(),
            self.unresolved.variance.sum(),
            self.left_out_variance,
        )
        return tuple(float(part / self.total_variance) for part in parts)

    @property
    def length(self) -> float:
        """Length of the truth, all members together [s]."""
        members, times, _ = self.x.shape
        return members * times * self.step


def split_truth(
    config: StudyConfig, model: Model, records: Sequence[TruthRecord]
) -> Split:
    """Divide a truth.

    Parameters
    ----------
    config : StudyConfig
        Sections ``[resolved]``, ``[unresolved]`` and ``[limits]``.
    model : Model
        The equation that made the truth.
    records : sequence of TruthRecord
        The members of the truth, of equal length, read in stretches of at most
        64 MB.

    Returns
    -------
    Split

    Raises
    ------
    DataError
        If the basis cannot be made from this truth, or what comes of it does
        not fit into the memory that is allowed.
    """
    memory, share = config.limits.memory, config.unresolved.variance
    settings, size = config.resolved, records[0].size
    mean, variance, total = _moments(model, records, memory)
    how = {"share": share, "memory": memory}
    if isinstance(settings, FourierSettings):
        resolved, unresolved = fourier_basis(settings, model, variance, share=share)
    elif isinstance(settings, EofSettings):
        resolved, unresolved = eof_basis(settings, model, records, mean, **how)
    else:
        resolved = prescribed_basis(settings, model)
        unresolved = remainder_basis(resolved.vectors, model, records, mean, **how)
    _check_series(resolved, unresolved, records, share, memory)
    dual = dual_vectors(model, resolved.vectors)
    x = np.empty((len(records), len(records[0].times), resolved.n_modes))
    rate = np.empty_like(x)
    for member, where, states in walk(records, stretch_rows(memory, size)):
        x[member, where] = (states - mean) @ dual
        times = records[member].times[where]
        rates = np.array(
            [tendency(model, t, z) for t, z in zip(times, states, strict=True)]
        )
        rate[member, where] = rates @ dual
    if not resolved.variance.any():  # a basis that knew nothing of the truth
        resolved = replace(resolved, variance=np.square(x).mean(axis=(0, 1)))
    kept = float(resolved.variance.sum() + unresolved.variance.sum())
    fine_x, fine_step = _fine(records, dual, mean)
    step = records[0].step
    return Split(
        mean=mean,
        resolved=resolved,
        unresolved=unresolved,
        resolved_mean=mean @ dual,
        x=x,
        tendency=rate,
        step=step,
        fine_x=x if fine_x is None else fine_x,
        fine_step=step if fine_x is None else fine_step,
        total_variance=total,
        left_out_variance=max(0.0, total - kept),
        start=float(records[0].times[0]),
    )


def prescribed_basis(
    settings: BoxesSettings | FileSettings | Hook, model: Model
) -> Basis:
    """Resolved modes that need no truth to be known, without their variances."""
    if isinstance(settings, Hook):
        return hooked_basis(settings, model)
    if isinstance(settings, BoxesSettings):
        return boxes_basis(settings, model)
    return file_basis(settings, model)


def unresolved_series(
    split: Split,
    model: Model,
    records: Sequence[TruthRecord],
    memory: float = math.inf,
) -> np.ndarray:
    """Unresolved coordinates, less their mean, shape (member, time, ny).

    The budget `memory` [B] tells how much of the truth is read at once.
    """
    dual = dual_vectors(model, split.unresolved.vectors)
    y = np.empty((len(records), len(records[0].times), split.unresolved.n_modes))
    for member, where, states in walk(records, stretch_rows(memory, len(dual))):
        y[member, where] = (states - split.mean) @ dual
    return y


def _moments(model, records, memory):
    """Mean and variance of every coordinate, and variance of the whole state."""
    count = sum(len(record.times) for record in records)
    size = records[0].size
    rows = stretch_rows(memory, size)
    mean = np.zeros(size)
    for _, _, states in walk(records, rows):
        mean += states.sum(axis=0) / count
    variance, total = np.zeros(size), 0.0
    weights = metric(model)
    for _, _, states in walk(records, rows):
        anomalies = states - mean
        variance += (anomalies**2).sum(axis=0) / count
        if weights.ndim == 2:
            total += float(np.sum(anomalies * (anomalies @ weights))) / count
    return mean, variance, float(variance @ weights) if weights.ndim == 1 else total


def _check_series(resolved, unresolved, records, share, memory):
    """Refuse unresolved series that would not fit, and say which share would."""
    states = sum(len(record.times) for record in records)
    size, nx, ny = records[0].size, resolved.n_modes, unresolved.n_modes

    def needed(ny):
        # Vectors and duals; tensors; x, its tendency and the series of y.
        series = 8 * states * (2 * nx + SERIES * ny)
        return memory_bytes(size, nx, ny, batch_bytes_of(memory)) + series

    fits = [k for k in range(1, ny + 1) if needed(k) <= spare_bytes(memory)]
    held = unresolved.variance[: len(fits)].sum() / unresolved.variance.sum()
    held = np.floor(100 * share * held) / 100
    instead = "record fewer states, or keep fewer modes"
    if held > 0:
        instead = (
            "keep less of the variance ([unresolved] "
            f"variance = {held:g} would do), or record fewer states"
        )
    what = f"{ny} unresolved modes at {states} states"
    check_memory(needed(ny), memory, what, instead)


def _fine(records, dual, mean):
    """Resolved coordinates from the fine streams, if they hold all they need."""
    held, times = records[0].resolved_coordinates, records[0].resolved_times
    outside = np.ones(records[0].size, dtype=bool)
    outside[held] = False
    if len(times) < 2 or np.any(dual[outside]):
        return None, 0.0
    fine_x = np.stack(
        [(record.read_resolved() - mean[held]) @ dual[held] for record in records]
    )
    return fine_x, float(times[1] - times[0])
