"""How a record is cut into batches, whose absence in turn gives errors.

A record, all members together, is cut into contiguous batches, each many
correlation times long. A statistic is a function of means over the record;
what it scatters by, with each batch left out in turn, is its error (see
:mod:`eddyshed.reduce.statistics.jackknife`), with one degree of freedom fewer
than there are batches.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ..statistics.correlation import correlation_scales
from ..statistics.jackknife import jackknife_error, left_out, less_bias
from ..statistics.series import checked_series

MOST = 20  # batches: Student's quantile is then 7 % above the normal one
FEWEST = 4  # a scatter of fewer is no error
LENGTH = 6  # integral times in a batch: its mean then lacks a twelfth of variance


@dataclass(frozen=True, slots=True, kw_only=True)
class Batches:
    """How a record is cut.

    Attributes
    ----------
    number : int
        Of batches; 0 if the record is too short for any error.
    widening : float
        What errors are multiplied by, for the correlation across the edges of
        batches: of an exponential with the integral time m the variance of a
        batch of length b lacks the fraction ``m / b``.
    more : float
        How many times longer the record must be to be cut at all.
    """

    number: int
    widening: float
    more: float

    @classmethod
    def of(cls, series: np.ndarray, step: float, where: str) -> Batches:
        """Cut a record by the slowest of its series, shape (member, time, mode)."""
        series = checked_series(series, where)
        scales = correlation_scales(series, step)
        time = max(scales.time.value.max(), scales.squared.value.max())
        return cls.by(time, series.shape[0] * series.shape[1] * step)

    @classmethod
    def by(cls, time: float, length: float) -> Batches:
        """Cut a record of a length by a correlation time."""
        number = min(MOST, int(length / (LENGTH * time)))
        if number < FEWEST:
            more = 1.05 * FEWEST * LENGTH * time / length
            return cls(number=0, widening=1.0, more=more)
        lacking = min(0.5, time * number / length)
        return cls(number=number, widening=(1 - lacking) ** -0.5, more=1.0)

    @property
    def freedom(self) -> float:
        """Degrees of freedom of the errors."""
        return max(1, self.number - 1)

    def means(self, values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Means over batches of values at all times, and the batches' sizes.

        Parameters
        ----------
        values : ndarray, shape (time, ...)
            Members one after the other.

        Returns
        -------
        ndarray, shape (batch, ...), and ndarray, shape (batch,)
        """
        parts = np.array_split(values, max(1, self.number))
        return np.array([p.mean(axis=0) for p in parts]), np.array(
            [len(p) for p in parts]
        )

    def jackknife(
        self,
        means: np.ndarray,
        counts: np.ndarray,
        statistic: Callable[[np.ndarray], np.ndarray],
    ) -> tuple[np.ndarray, np.ndarray]:
        """A function of means over the record, and its error.

        Parameters
        ----------
        means : ndarray, shape (batch, ...)
            Means over batches.
        counts : ndarray, shape (batch,)
        statistic : callable
            Takes means over the record, shape (...), returns shape (place,).

        Returns
        -------
        value, error : ndarray, shape (place,)
            The error is infinite if the record is too short.
        """
        sums = counts.reshape(-1, *(1,) * (means.ndim - 1)) * means
        if self.number == 0:
            value = np.atleast_1d(statistic(sums.sum(axis=0) / counts.sum()))
            return value, np.full(value.shape, math.inf)
        replicates = np.array(
            [np.atleast_1d(statistic(one)) for one in left_out(sums, counts, 0)]
        )
        return less_bias(replicates)[0], self.error(replicates)

    def error(self, replicates: np.ndarray) -> np.ndarray:
        """Error from estimates of the record and without each batch.

        Parameters
        ----------
        replicates : ndarray, shape (batch + 1, ...)

        Returns
        -------
        ndarray, shape (...)
            Infinite if the record is too short.
        """
        if self.number == 0:
            return np.full(replicates.shape[1:], math.inf)
        return self.widening * jackknife_error(replicates)
