"""The truth divided: what is kept, what noise stands in for, what is left out."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from eddyshed.solver.hooks import Hook
from eddyshed.solver.record import TruthRecord, walk

from .bases.basis import Basis
from .bases.eof import eof_basis
from .bases.fourier import fourier_basis
from .bases.hooked import hooked_basis
from .contract import Model, dual_vectors, metric, tendency
from .settings import FourierSettings, StudyConfig


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
        Sections ``[resolved]`` and ``[unresolved]``.
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
        If the basis cannot be made from this truth.
    """
    mean, variance = _moments(records)
    if isinstance(config.resolved, FourierSettings):
        resolved, remainder = fourier_basis(config.resolved, model, variance)
    elif isinstance(config.resolved, Hook):
        resolved, remainder = hooked_basis(config.resolved, model, records, mean)
    else:
        resolved, remainder = eof_basis(config.resolved, model, records, mean)
    unresolved = _enough(remainder, config.unresolved.variance)
    weights = metric(model)
    if weights.ndim == 1:
        total = float(variance @ weights)
    else:
        total = float(resolved.variance.sum() + remainder.variance.sum())
    kept = float(resolved.variance.sum() + unresolved.variance.sum())
    dual = dual_vectors(model, resolved.vectors)
    x = np.empty((len(records), len(records[0].times), resolved.n_modes))
    rate = np.empty_like(x)
    for member, where, states in walk(records):
        x[member, where] = (states - mean) @ dual
        times = records[member].times[where]
        rates = np.array(
            [tendency(model, t, z) for t, z in zip(times, states, strict=True)]
        )
        rate[member, where] = rates @ dual
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


def unresolved_series(
    split: Split, model: Model, records: Sequence[TruthRecord]
) -> np.ndarray:
    """Unresolved coordinates, less their mean, shape (member, time, ny)."""
    dual = dual_vectors(model, split.unresolved.vectors)
    y = np.empty((len(records), len(records[0].times), split.unresolved.n_modes))
    for member, where, states in walk(records):
        y[member, where] = (states - split.mean) @ dual
    return y


def _moments(records):
    """Mean and variance of every coordinate, from stretches of the records."""
    count = sum(len(record.times) for record in records)
    mean = np.zeros(records[0].size)
    for _, _, states in walk(records):
        mean += states.sum(axis=0) / count
    variance = np.zeros(records[0].size)
    for _, _, states in walk(records):
        variance += ((states - mean) ** 2).sum(axis=0) / count
    return mean, variance


def _enough(remainder: Basis, share: float) -> Basis:
    """Leading modes of the remainder that hold a share of its variance."""
    gathered = np.cumsum(remainder.variance)
    # A rounding error below the share must not cost another hundred modes.
    count = int(np.searchsorted(gathered, share * gathered[-1] * (1 - 1e-12))) + 1
    count = min(count, remainder.n_modes)
    partner = remainder.partners[count - 1]
    if partner >= count:  # keep the two parts of a wave together
        count = int(partner) + 1
    return remainder.take(np.arange(count))


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
