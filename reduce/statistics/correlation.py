"""Covariances, times and effective sizes of stationary time series.

Knows nothing but numbers in time: series are as
:mod:`eddyshed.reduce.statistics.series` has them. The record is all members
together, its length ``T = members * times * step``.

Distributions and resampled errors are in
:mod:`eddyshed.reduce.statistics.resampling`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft

from eddyshed.solver.errors import DataError

from .estimate import Estimate
from .series import checked_series, checked_step, mode_blocks

__all__ = [
    "CorrelationScales",
    "EffectiveSize",
    "Estimate",
    "autocovariance",
    "correlation_function",
    "correlation_scales",
    "covariance",
    "effective_size",
    "integral_time",
]

CROSSING = 0.05  # integrals of a correlation function end where it falls below


@dataclass(frozen=True, slots=True, eq=False)
class EffectiveSize:
    """How many independent values would tell as much as the record does.

    Parameters
    ----------
    mean : Estimate, shape (mode,)
        ``variance / mean`` is the squared standard error of the mean.
    variance : Estimate, shape (mode,)
        ``2 variance**2 / size`` is the squared standard error of the
        variance of a Gaussian series.
    """

    mean: Estimate
    variance: Estimate


@dataclass(frozen=True, slots=True, eq=False)
class CorrelationScales:
    """How long a series remembers [s].

    Parameters
    ----------
    time : Estimate, shape (mode,)
        One-sided integral of the correlation function; see `integral_time`.
    squared : Estimate, shape (mode,)
        Two-sided integral of the squared correlation function. The same as
        `time` for an exponential, but longer for an oscillation, whose
        amplitude outlives its phase.
    """

    time: Estimate
    squared: Estimate


def autocovariance(series: np.ndarray, lags: int) -> np.ndarray:
    """Autocovariance of each mode at lags 0 to `lags` samples.

    The mean over all members and times is removed. The sum of products at
    each lag is divided by the full number of times, not by the number of
    products, so that the result is a positive semi-definite sequence.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
    lags : int
        The longest lag in samples, less than the number of times.

    Returns
    -------
    ndarray, shape (lags + 1, mode)
        Averaged over members; the unit of the series squared.

    Raises
    ------
    DataError
        If the series or the lag cannot be used.
    """
    where = "autocovariance"
    series = checked_series(series, where)
    members, times, modes = series.shape
    if not 0 <= lags < times:
        message = (
            f"{where}: a lag of {lags} samples in members of {times} times, allowed "
            "is zero or more and less than the number of times"
        )
        raise DataError(message)
    length = fft.next_fast_len(times + lags, real=True)  # zeros: no wrap-around
    result = np.empty((lags + 1, modes))
    for block in mode_blocks(modes, 32 * members * length):
        part = np.moveaxis(series[:, :, block], 2, 0)
        part = part - part.mean(axis=(1, 2), keepdims=True)
        spectrum = fft.rfft(part, length)
        power = (spectrum.real**2 + spectrum.imag**2).mean(axis=1)
        result[:, block] = fft.irfft(power, length)[:, : lags + 1].T / times
    return result


def correlation_function(series: np.ndarray, lags: int) -> np.ndarray:
    """Autocovariance divided by its value at lag zero; see `autocovariance`."""
    result = autocovariance(series, lags)
    return result / result[0]


def integral_time(series: np.ndarray, step: float) -> Estimate:
    """One-sided integral of the correlation function of each mode.

    The integral (trapezoid) ends at the window, the lag where the
    correlation first falls below 0.05 (interpolated between samples). For an
    exponential it is 0.95 of the full integral.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
    step : float
        Time between samples [s].

    Returns
    -------
    Estimate, shape (mode,)
        Integral times [s]. If the correlation stays above 0.05 up to half
        the length of a member, the value is the integral up to there, and
        the error infinite: the record is too short to know the time.

    Raises
    ------
    DataError
        If the series cannot be used; a constant mode is named.

    Notes
    -----
    With the sum over lags ``-M..M`` the relative variance is
    ``2 (2 M + 1) / n`` for ``n`` samples [1]_. Halving the sum to one side
    leaves a relative variance as it is, so with the window ``w = M step``
    and the record ``T = n step`` it is ``(4 w + 2 step) / T``, that is, an
    error of about ``sqrt(12 time / T)`` of the value. It leaves out that the
    variance is estimated from the same record, which makes it a little too
    large. Measured on 2000 exponentially correlated series each, 1.96 errors
    hold the true integral in 87, 94 and 97 % of records of 30, 100 and 300
    integral times.

    References
    ----------
    .. [1] N. Madras and A. D. Sokal (1988), J. Stat. Phys. 50, 109, app. C.
    """
    step = checked_step(step, "integral time")
    return correlation_scales(checked_series(series, "integral time"), step).time


def effective_size(series: np.ndarray, step: float) -> EffectiveSize:
    """Effective numbers of independent values for the mean and the variance.

    For the mean ``T / (2 time)`` with the time of `integral_time`; for the
    variance of a Gaussian series ``T`` over the two-sided integral of the
    squared correlation function. Neither is let above the number of samples.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
    step : float
        Time between samples [s].

    Returns
    -------
    EffectiveSize
        Errors are infinite where the record is too short to know the size.

    Raises
    ------
    DataError
        If the series cannot be used.

    Notes
    -----
    The sizes follow M. S. Bartlett (1946), J. R. Stat. Soc. Suppl. 8, 27
    and C. E. Leith (1973), J. Appl. Meteorol. 12, 1066.
    """
    step = checked_step(step, "effective size")
    series = checked_series(series, "effective size")
    scales = correlation_scales(series, step)
    count = series.shape[0] * series.shape[1]

    def size(scale):
        value = np.minimum(count * step / scale.value, count)
        return Estimate(value, value * scale.error / scale.value)

    twice = Estimate(2 * scales.time.value, 2 * scales.time.error)
    return EffectiveSize(mean=size(twice), variance=size(scales.squared))


def correlation_scales(series: np.ndarray, step: float) -> CorrelationScales:
    """Integral scales of the correlation function and of its square.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
        As `checked_series` returns it.
    step : float
        Time between samples [s].

    Returns
    -------
    CorrelationScales

    Notes
    -----
    The squared correlation is integrated to the shortest lag that is four
    times as long as the integral (both sides) up to it: the automatic
    windowing of N. Madras and A. D. Sokal (1988), J. Stat. Phys. 50, 109.
    Unlike the first zero of the correlation, this lag outlasts the
    envelope of an oscillation. Sampling noise of the correlation, of
    variance ``J / n`` at long lags, adds ``2 w J / n`` to the integral ``J``
    up to lag ``w``, which is taken out.

    Its error: a sum ``sum w_l c_l`` of sample autocovariances of a Gaussian
    series has the variance ``(2 / n) sum_j ((w * c)_j)**2`` (Isserlis). To
    first order ``J = sum c_l**2 / c_0**2`` changes, relative to itself, as
    such a sum with ``w = 2 r / J`` inside the window, less 2 at lag zero.
    Measured as in `integral_time`, 1.96 errors hold the size for the variance
    in 95, 94 and 94 % of records.
    """
    members, times, modes = series.shape
    count = members * times
    longest = times // 2
    result = np.empty((4, modes))
    for block in mode_blocks(modes, 64 * longest):
        rho = correlation_function(series[:, :, block], longest)
        below = rho < CROSSING
        resolved = below.any(axis=0)
        first = np.where(resolved, below.argmax(axis=0), longest)
        before, after = _row(rho, first - 1), _row(rho, first)
        part = np.where(resolved, (before - CROSSING) / (before - after), 1.0)
        last = np.where(resolved, CROSSING, after)
        time = _row(_trapezoid(rho), first - 1) + part * (before + last) / 2
        # Relative variance 2 (2 window + 1) / count; see integral_time.
        spread = np.sqrt((4 * (first - 1 + part) + 2) / count)
        result[:2, block] = time, np.where(resolved, time, np.inf) * spread

        squared = 2 * _trapezoid(rho**2)
        lag = np.arange(longest + 1)[:, None]
        beyond = (lag >= 4 * squared) & (lag > 0)
        resolved = beyond.any(axis=0)
        window = np.where(resolved, beyond.argmax(axis=0), longest)
        squared = _row(squared, window) / (1 + 2 * window / count)
        inside = np.where(lag <= window, rho, 0.0)[: window.max() + 1]
        spread = np.sqrt(2 / count) * _squared_spread(inside, squared)
        result[2:, block] = squared, np.where(resolved, squared, np.inf) * spread
    result *= step
    return CorrelationScales(Estimate(*result[:2]), Estimate(*result[2:]))


def covariance(series: np.ndarray, *, batches: int = 20) -> Estimate:
    """Covariance matrix with the standard error of each entry.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
    batches : int
        Contiguous parts of the record whose scatter gives the errors
        (method of batch means). The errors are right only if a part lasts
        many integral times.

    Returns
    -------
    Estimate, shape (mode, mode)

    Raises
    ------
    DataError
        If the series cannot be used, or has fewer times than batches.
    """
    where = "covariance"
    series = checked_series(series, where)
    flat = series.reshape(series.shape[0] * series.shape[1], series.shape[2])
    if not 2 <= batches <= len(flat):
        message = (
            f"{where}: {batches} batches of a record of {len(flat)} samples, allowed "
            "are 2 or more and no more than samples; give about 20"
        )
        raise DataError(message)
    flat = flat - flat.mean(axis=0)
    value = flat.T @ flat / len(flat)
    scatter = np.zeros_like(value)
    for part in np.array_split(flat, batches):
        scatter += (part.T @ part / len(part) - value) ** 2
    return Estimate(value, np.sqrt(scatter / (batches * (batches - 1))))


def _row(function: np.ndarray, lag: np.ndarray) -> np.ndarray:
    """Take from (lag, mode) the value of each mode at its own lag."""
    return np.take_along_axis(function, lag[None], axis=0)[0]


def _trapezoid(function: np.ndarray) -> np.ndarray:
    """Integrate (lag, mode) from zero up to each lag."""
    total = np.zeros_like(function)
    np.cumsum((function[1:] + function[:-1]) / 2, axis=0, out=total[1:])
    return total


def _squared_spread(rho: np.ndarray, squared: np.ndarray) -> np.ndarray:
    """Root of ``sum_j ((w * r)_j)**2`` with ``w = 2 r / J - 2`` at lag zero only.

    Parameters
    ----------
    rho : ndarray, shape (lag, mode)
        From lag zero; zero beyond the window.
    squared : ndarray, shape (mode,)
        J, the two-sided integral of the square.
    """
    length = fft.next_fast_len(4 * len(rho), real=True)
    # The two-sided function is real and even, and so is its transform.
    line = 2 * fft.rfft(rho, length, axis=0).real - rho[0]
    folded = fft.irfft(2 * line * (line / squared - 1), length, axis=0)
    return np.sqrt((folded**2).sum(axis=0))
