"""Resampling of time series by blocks.

Neighbouring values of a series are not independent, so whole blocks of it
are drawn anew, each many integral times long (moving blocks: H. R. Kunsch
(1989), Ann. Stat. 17, 1217; circular: D. N. Politis and J. P. Romano (1992),
in "Exploring the Limits of Bootstrap", Wiley, 263). A block stays within one
member, whose end is joined to its beginning.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import stats
from scipy.sparse import csr_array

from .correlation import correlation_scales

BLOCK_TIMES = 8  # a block lasts at least so many integral times
MOST_BLOCKS = 1000  # longer blocks rather than more: 2 % error of the error


@dataclass(frozen=True, slots=True, eq=False)
class Blocks:
    """Blocks of each mode.

    They last eight integral times (of the correlation function or of its
    square, whichever is longer), but not more than a member or a third of
    the record, nor less than a thousandth of it.

    Parameters
    ----------
    length : ndarray of int, shape (mode,)
        In samples.
    widening : ndarray, shape (mode,)
        What the scatter of resampled records is multiplied by.
    resolved : ndarray of bool, shape (mode,)
        Whether the record is long enough to know the integral times.

    Notes
    -----
    Three factors widen the scatter:

    - Centring on the mean of ``k`` blocks: ``1 / (1 - 1 / k)`` in variance.
    - Correlation across the edges of a block of ``b`` samples, of which the
      resampling knows nothing: for an AR(1) series of integral time ``m``
      samples the variance of the mean lacks the fraction
      ``(m - 1 / (4 m)) / b``.
    - The variance has about ``1.5 (k - 1)`` degrees of freedom (M. S. Meketon
      and B. Schmeiser (1984), Proc. Winter Simulation Conf., 227). The ratio
      of Student's to the normal 97.5 % quantile makes 1.96 errors what they
      are taken for.
    """

    length: np.ndarray
    widening: np.ndarray
    resolved: np.ndarray

    @classmethod
    def of(cls, series: np.ndarray, step: float) -> Blocks:
        """Choose the blocks of a checked series with a step [s]."""
        members, times, _ = series.shape
        count = members * times
        scales = correlation_scales(series, step)
        time = np.maximum(scales.time.value, scales.squared.value) / step
        resolved = np.isfinite(scales.time.error + scales.squared.error)
        length = np.maximum(np.ceil(BLOCK_TIMES * time), count // MOST_BLOCKS)
        length = np.clip(length, 1, max(1, min(times, count // 3))).astype(int)
        number = count / length
        drawn = np.round(number)
        # The bound matters only where the integral time is not known.
        time = scales.time.value / step
        edges = np.minimum((time - 1 / (4 * time)) / length, 0.5)
        variance = drawn / number / (1 - 1 / number) / (1 - edges)
        student = stats.t.ppf(0.975, 1.5 * (number - 1)) / stats.norm.ppf(0.975)
        return cls(length, student * np.sqrt(variance), resolved)


def resampled_means(
    columns: np.ndarray, block: int, rng: np.random.Generator, samples: int
) -> np.ndarray:
    """Means of records put together from blocks of a (member, time, column) array.

    Sums over all possible blocks are differences of cumulative sums; a
    sparse matrix picks and adds those drawn. The result is (sample, column).
    """
    members, times, width = columns.shape
    count = members * times
    total = np.zeros((members, times + block, width))
    np.cumsum(columns, axis=1, out=total[:, 1 : times + 1])
    total[:, times + 1 :] = total[:, times, None] + total[:, 1:block]
    sums = (total[:, block:] - total[:, :-block]).reshape(count, width)
    number = round(count / block)
    starts = rng.integers(count, size=samples * number)
    weights = np.full(starts.size, 1 / (number * block))
    rows = np.arange(samples + 1) * number
    return csr_array((weights, starts, rows), shape=(samples, count)) @ sums
