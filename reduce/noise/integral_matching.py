"""Rates of an Ornstein-Uhlenbeck process from its covariance and its integral.

The process has ``P = rate^-1 C``, with P the integral of its lag covariance
over lags from zero (a Green-Kubo integral), so that ``rate = C P^-1``. The
numerics of :func:`eddyshed.reduce.noise.fit.fit_ornstein_uhlenbeck`.
"""

from __future__ import annotations

import numpy as np

from ..statistics.jackknife import less_bias
from .lag_integrals import bartlett_kernels, matrix_means, unit_means
from .ornstein_uhlenbeck import ROUND_OFF
from .repair import MOST_REPAIR, check_independent, repaired_rate
from .replicates import (
    BlockRates,
    Replicates,
    replicates_of_blocks,
    replicates_of_units,
)

ITERATIONS = 100  # Newton takes under ten unless there is no solution
LEAST = 1e-3  # e-folding times in a window; cancellation spoils fewer


def match_units(
    series: np.ndarray,
    step: float,
    lags: int,
    batches: int,
    first: np.ndarray,
    second: np.ndarray,
) -> Replicates:
    """Fit one rate to each pair and to each unpaired coordinate.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
    step : float
        Time between samples [s].
    lags : int
        Length of the window in samples.
    batches : int
        Number of parts of the record.
    first, second : ndarray of int, shape (unit,)
        Coordinates of the real and the imaginary part; -1 for no second.

    Returns
    -------
    Replicates
    """
    record = series.shape[0] * series.shape[1] * step
    means = unit_means(series, bartlett_kernels(lags, step), batches, first, second)
    paired = second >= 0
    square = means.square.sum(axis=0)
    variance, raw, rate, solved = unit_rates(
        square, means.integral[0], lags, step, record, paired
    )
    _, wide_raw, wide, wide_solved = unit_rates(
        square, means.integral[1], 2 * lags, step, record, paired
    )
    # All replicates alike: the errors are those of the fit that is shown.
    uncorrected = ~solved.all(axis=0)
    rate = np.where(uncorrected, raw, _decaying(rate))
    wide = np.where(wide_solved.all(axis=0), _decaying(wide), wide_raw)

    return replicates_of_units(
        first, second, means.square, variance, raw, rate, wide, uncorrected
    )


def _decaying(rates):
    """Rates of units less their bias, unless this would make one grow."""
    better = less_bias(rates)
    return np.where(better[0].real > 0, better, rates)


def match_blocks(
    series: np.ndarray,
    step: float,
    lags: int,
    batches: int,
    blocks: list[np.ndarray],
) -> Replicates:
    """Fit one matrix to each group of coordinates.

    Parameters
    ----------
    series, step, lags, batches
        As in `match_units`.
    blocks : list of ndarray of int
        Coordinates of each group.

    Returns
    -------
    Replicates

    Raises
    ------
    DataError
        If the coordinates of a group are linearly dependent.
    """
    record = series.shape[0] * series.shape[1] * step
    kernels = bartlett_kernels(lags, step)
    fits = []
    for block in blocks:
        means = matrix_means(series[:, :, block], kernels, batches)
        check_independent(means.square[0])
        covariance, raw, rate, solved = _matrix_fits(
            means.square, means.integral[0], lags, step, record
        )
        _, _, wide, wide_solved = _matrix_fits(
            means.square, means.integral[1], 2 * lags, step, record
        )
        # The raw rate has no noise of negative variance, whatever the series.
        share, tries = 0.0, [less_bias(rate), rate] if solved else []
        rate = raw
        for best in tries:
            repaired, change = repaired_rate(best[0], covariance[0])
            if change <= MOST_REPAIR:
                rate, share = np.concatenate([[repaired], best[1:]]), change
                break
        else:
            solved = False
        fits.append(
            BlockRates(
                coordinates=block,
                covariance=covariance,
                raw=raw,
                rate=rate,
                wide=less_bias(wide) if wide_solved else wide,
                uncorrected=not solved,
                repair=share,
            )
        )
    return replicates_of_blocks(fits)


def _matrix_fits(squares, integrals, lags, step, record):
    """Covariances, raw rates, rates, and whether all of these are corrected."""
    fits = [
        matrix_rates(square, integral, lags, step, record)
        for square, integral in zip(squares, integrals, strict=True)
    ]
    covariance, raw, rate, solved = zip(*fits, strict=True)
    rate = rate if all(solved) else raw
    return np.stack(covariance), np.stack(raw), np.stack(rate), all(solved)


def unit_rates(
    square: np.ndarray,
    integral: np.ndarray,
    lags: int,
    step: float,
    record: float,
    paired: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Rates of units from their means.

    Parameters
    ----------
    square : ndarray, shape (..., unit)
        Mean of the squared modulus.
    integral : ndarray of complex, shape (..., unit)
        Windowed integral of the lag covariance [s].
    lags : int
        Length of the window in samples.
    step, record : float
        Time between samples and length of the record [s].
    paired : ndarray of bool, shape (unit,)
        Whether the rate may be complex.

    Returns
    -------
    variance : ndarray
        With that of the mean, which was taken from the same record, put back.
    raw : ndarray of complex
        Variance over integral [s-1].
    rate : ndarray of complex
        Corrected for the window and for the sum over samples [s-1].
    solved : ndarray of bool
        Whether there is a corrected rate.
    """
    lost = 2 * integral.real / record
    variance = square + lost
    integral = integral + lost * lags * step / 2
    rate, solved = windowed_rate(integral / (variance * step), lags, paired)
    return variance, variance / integral, rate / step, solved


def matrix_rates(
    square: np.ndarray, integral: np.ndarray, lags: int, step: float, record: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray, bool]:
    """Rate matrix from mean matrices; arguments and results as in `unit_rates`.

    The correction is a function of a matrix: it acts on the eigenvalues and
    leaves the eigenvectors. It is not made if an eigenvalue has none, or if the
    eigenvectors are nearly parallel.
    """
    lost = (integral + integral.T) / record
    covariance = square + lost
    covariance = (covariance + covariance.T) / 2
    integral = integral + lost * lags * step / 2
    raw = np.linalg.solve(integral.T, covariance).T
    ratio = np.linalg.solve(covariance, integral.T).T / step
    values, vectors = np.linalg.eig(ratio)
    rates, solved = windowed_rate(values, lags, values.imag != 0)
    if not solved.all() or np.linalg.cond(vectors) * np.finfo(float).eps > ROUND_OFF:
        return covariance, raw, raw, False
    rate = np.linalg.solve(vectors.T, (vectors * rates).T).T.real / step
    return covariance, raw, rate, True


def windowed_rate(
    integral: np.ndarray, lags: int, turning: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    r"""Rate of the process whose windowed integral is given, counted in samples.

    For a correlation ``exp(-u l)`` at lag l the sum under a triangle of L
    samples is

    .. math:: q(u) = \frac{\coth(u/2)}{2}
                     - \frac{1 - e^{-L u}}{4 L \sinh^2(u/2)},

    for short steps ``1 / u - (1 - exp(-L u)) / (L u**2)``. It is inverted by
    Newton's method from the solution for a wide window, with the step
    shortened where it would leave the decaying rates.

    Parameters
    ----------
    integral : ndarray, shape (..., unit)
        The sum q.
    lags : int
        Length L of the window in samples.
    turning : ndarray of bool, shape (unit,)
        Whether the rate may be complex.

    Returns
    -------
    rate : ndarray of complex, shape (..., unit)
        The solution u; without meaning where there is none.
    solved : ndarray of bool, shape (..., unit)
        Not so if the correlation hardly decays within the window or, for a
        real rate, is negative on average beyond lag zero.
    """
    target = np.asarray(integral, dtype=complex)
    possible = (target.real > 0) & (turning | (target.real > 0.5))
    target = np.where(possible, target, 1.0)
    rate = np.log((2 * target + 1) / (2 * target - 1))
    for _ in range(ITERATIONS):
        value, slope = _windowed_sum(rate, lags)
        moved = rate - (value - target) / slope
        least = np.maximum(rate.real / 5, LEAST / lags)
        moved = np.maximum(moved.real, least) + 1j * moved.imag
        settled = np.abs(moved - rate) <= 1e-12 * np.abs(rate)
        rate = moved
        if settled.all():
            break
    value, _ = _windowed_sum(rate, lags)
    # Cancellation leaves about 1e-16 / LEAST**2 of the sum.
    solved = possible & (np.abs(value - target) <= 1e-9 * np.abs(target))
    return rate, solved


def _windowed_sum(rate: np.ndarray, lags: int) -> tuple[np.ndarray, np.ndarray]:
    """The sum q of `windowed_rate` and its derivative."""
    cotangent = 1 / np.tanh(rate / 2)
    square = cotangent**2 - 1  # 1 / sinh**2, which would overflow by itself
    left = np.exp(-lags * rate)
    value = cotangent / 2 - (1 - left) * square / (4 * lags)
    slope = (1 - left) * cotangent * square / (4 * lags) - (1 + left) * square / 4
    return value, slope
