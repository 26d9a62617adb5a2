"""What is new in each sample of a series, and whether it was foreseen."""

from __future__ import annotations

import numpy as np

from ..statistics.estimate import Estimate
from .ornstein_uhlenbeck import OrnsteinUhlenbeck

INNOVATION_LAGS = 8


def largest_innovation(
    series: np.ndarray,
    step: float,
    process: OrnsteinUhlenbeck,
    modes: list[int] | slice = slice(None),
) -> tuple[Estimate, int]:
    """Largest correlation of what a process cannot foresee one step ahead.

    Parameters
    ----------
    series : ndarray, shape (member, time, n)
    step : float
        Time between samples [s].
    process : OrnsteinUhlenbeck
        Of n coordinates.
    modes : list of int, optional
        Those that are looked at; all by default.

    Returns
    -------
    Estimate, shape (mode,)
        Largest modulus at lags of one to eight steps.
    int
        Number of lags that it is the largest of.

    Notes
    -----
    Of n innovations that are white a correlation has the error ``1 / sqrt(n)``
    (M. S. Bartlett (1946), J. R. Stat. Soc. Suppl. 8, 27).
    """
    centred = series - series.mean(axis=(0, 1))
    foreseen = centred[:, :-1] @ process.propagator(step)[modes].T
    left = centred[:, 1:, modes] - foreseen
    lags = range(1, min(INNOVATION_LAGS, left.shape[1] - 1) + 1)
    square = (left**2).sum(axis=(0, 1))
    correlation = np.array(
        [(left[:, lag:] * left[:, :-lag]).sum(axis=(0, 1)) / square for lag in lags]
    )
    largest = np.abs(correlation).max(axis=0)
    number = left.shape[0] * left.shape[1]
    return Estimate(largest, np.full(largest.shape, number**-0.5)), len(lags)
