"""The truth divided: what is kept, what noise stands in for, what is left out."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from eddyshed.solver.record import TruthRecord

from .bases.basis import Basis
from .bases.eof import eof_basis
from .bases.fourier import fourier_basis
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
    x : ndarray, shape (n_time, nx)
        Resolved coordinates, less their mean [state unit].
    tendency : ndarray, shape (n_time, nx)
        Full tendency of the resolved coordinates [state unit s-1].
    step : float
        Interval between records [s].
    fine_x : ndarray, shape (n_fine, nx)
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

    @property
    def shares(self) -> tuple[float, float, float]:
        """Shares of variance: resolved, unresolved, left out."""
        parts = (
            self.resolved.variance.sum(),
            self.unresolved.variance.sum(),
            self.left_out_variance,
        )
        return tuple(float(part / self.total_variance) for part in parts)


def split_truth(config: StudyConfig, model: Model, record: TruthRecord) -> Split:
    """Divide a truth.

    Parameters
    ----------
    config : StudyConfig
        Sections ``[resolved]`` and ``[unresolved]``.
    model : Model
        The equation that made the truth.
    record : TruthRecord
        The truth, read in stretches of at most 64 MB.

    Returns
    -------
    Split

    Raises
    ------
    DataError
        If the basis cannot be made from this truth.
    """
    mean, variance = _moments(record)
    if isinstance(config.resolved, FourierSettings):
        resolved, remainder = fourier_basis(config.resolved, model, variance)
    else:
        resolved, remainder = eof_basis(config.resolved, model, record, mean)
    unresolved = _enough(remainder, config.unresolved.variance)
    weights = metric(model)
    if weights.ndim == 1:
        total = float(variance @ weights)
    else:
        total = float(resolved.variance.sum() + remainder.variance.sum())
    kept = float(resolved.variance.sum() + unresolved.variance.sum())
    dual = dual_vectors(model, resolved.vectors)
    x = np.empty((len(record.times), resolved.n_modes))
    rate = np.empty_like(x)
    for where, states in record.chunks():
        x[where] = (states - mean) @ dual
        times = record.times[where]
        rates = np.array(
            [tendency(model, t, z) for t, z in zip(times, states, strict=True)]
        )
        rate[where] = rates @ dual
    fine_x, fine_step = _fine(record, dual, mean)
    return Split(
        mean=mean,
        resolved=resolved,
        unresolved=unresolved,
        resolved_mean=mean @ dual,
        x=x,
        tendency=rate,
        step=record.step,
        fine_x=x if fine_x is None else fine_x,
        fine_step=record.step if fine_x is None else fine_step,
        total_variance=total,
        left_out_variance=max(0.0, total - kept),
    )


def unresolved_series(split: Split, model: Model, record: TruthRecord) -> np.ndarray:
    """Unresolved coordinates, less their mean, shape (n_time, ny)."""
    dual = dual_vectors(model, split.unresolved.vectors)
    y = np.empty((len(record.times), split.unresolved.n_modes))
    for where, states in record.chunks():
        y[where] = (states - split.mean) @ dual
    return y


def _moments(record):
    """Mean and variance of every coordinate, from stretches of the record."""
    count = len(record.times)
    mean = np.zeros(record.size)
    for _, states in record.chunks():
        mean += states.sum(axis=0) / count
    variance = np.zeros(record.size)
    for _, states in record.chunks():
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


def _fine(record, dual, mean):
    """Resolved coordinates from the fine stream, if it holds all they need."""
    held, times = record.resolved_coordinates, record.resolved_times
    outside = np.ones(record.size, dtype=bool)
    outside[held] = False
    if len(times) < 2 or np.any(dual[outside]):
        return None, 0.0
    fine_x = (record.read_resolved() - mean[held]) @ dual[held]
    return fine_x, float(times[1] - times[0])
