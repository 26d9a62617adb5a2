"""Rates of an Ornstein-Uhlenbeck process from its covariance and its integral.

The process has ``P = rate^-1 C``, with P the integral of its lag covariance
over lags from zero (a Green-Kubo integral), so that ``rate = C P^-1``. The
numerics of :func:`eddyshed.reduce.noise.fit.fit_ornstein_uhlenbeck`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from eddyshed.solver.errors import DataError

from .lag_integrals import (
    bartlett_kernels,
    jackknife_error,
    matrix_means,
    unit_means,
)
from .ornstein_uhlenbeck import ROUND_OFF, diffusion_defect

ITERATIONS = 100  # Newton takes under ten unless there is no solution
LEAST = 1e-3  # e-folding times in a window; cancellation spoils fewer


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Replicates:
    """A fit to the record (first of each array) and without each batch (rest).

    Parameters
    ----------
    variance, decay, frequency, raw_decay, raw_frequency, double_window_decay : ndarray
        Shape (batch + 1, n); see `NoiseFit` for their meaning.
    imbalance : ndarray, shape (batch + 1, n)
        Difference of the mean squares of two parts over their sum; zero for
        an unpaired coordinate.
    unit : ndarray of int, shape (n,)
        Number of the pair or single coordinate that each belongs to.
    uncorrected : ndarray of bool, shape (n,)
        Where `decay` and `frequency` are the raw ones.
    rate, rate_error, covariance : ndarray, shape (n, n)
        Matrices of the fit to the record.
    """

    variance: np.ndarray
    decay: np.ndarray
    frequency: np.ndarray
    raw_decay: np.ndarray
    raw_frequency: np.ndarray
    double_window_decay: np.ndarray
    imbalance: np.ndarray
    unit: np.ndarray
    uncorrected: np.ndarray
    rate: np.ndarray
    rate_error: np.ndarray
    covariance: np.ndarray


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
    rate = np.where(uncorrected, raw, rate)
    wide = np.where(wide_solved.all(axis=0), wide, wide_raw)

    return replicates_of_units(
        first, second, means.square, variance, raw, rate, wide, uncorrected
    )


def replicates_of_units(
    first: np.ndarray,
    second: np.ndarray,
    squares: np.ndarray,
    variance: np.ndarray,
    raw: np.ndarray,
    rate: np.ndarray,
    wide: np.ndarray,
    uncorrected: np.ndarray,
) -> Replicates:
    """Give each coordinate what was found for its unit.

    Parameters
    ----------
    first, second : ndarray of int, shape (unit,)
        Coordinates of the real and the imaginary part; -1 for no second.
    squares : ndarray, shape (2, batch + 1, unit)
        Mean squares of the two parts.
    variance : ndarray, shape (batch + 1, unit)
        Mean square of the unit, both parts together.
    raw, rate, wide : ndarray of complex, shape (batch + 1, unit)
        Rates as found, corrected for the window, and from twice the window.
    uncorrected : ndarray of bool, shape (unit,)
        Where `rate` is the raw one.

    Returns
    -------
    Replicates
    """
    paired = second >= 0
    owner = np.empty(len(first) + paired.sum(), dtype=int)  # unit of a coordinate
    owner[first] = np.arange(first.size)
    owner[second[paired]] = np.flatnonzero(paired)
    difference = np.where(paired, squares[0] - squares[1], 0.0)
    variance = (variance / np.where(paired, 2, 1))[:, owner]
    decay, frequency = rate.real[:, owner], rate.imag[:, owner]
    real, imag = first[paired], second[paired]
    matrix, error = np.diag(decay[0]), np.diag(jackknife_error(decay))
    matrix[imag, real] = frequency[0, real]
    matrix[real, imag] = -frequency[0, real]
    error[imag, real] = error[real, imag] = jackknife_error(frequency)[real]
    return Replicates(
        variance=variance,
        decay=decay,
        frequency=frequency,
        raw_decay=raw.real[:, owner],
        raw_frequency=raw.imag[:, owner],
        double_window_decay=wide.real[:, owner],
        imbalance=(difference / squares.sum(axis=0))[:, owner],
        unit=owner,
        uncorrected=uncorrected[owner],
        rate=matrix,
        rate_error=error,
        covariance=np.diag(variance[0]),
    )


def match_matrix(
    series: np.ndarray, step: float, lags: int, batches: int
) -> Replicates:
    """Fit one matrix to all coordinates; arguments as in `match_units`.

    Raises
    ------
    DataError
        If the coordinates are linearly dependent.
    """
    size = series.shape[2]
    record = series.shape[0] * series.shape[1] * step
    means = matrix_means(series, bartlett_kernels(lags, step), batches)
    if diffusion_defect(means.square[0] / 2, means.square[0]) < ROUND_OFF:
        message = (
            "Ornstein-Uhlenbeck fit: the covariance of the coordinates is singular, "
            "allowed are linearly independent ones for a full matrix; leave some out, "
            "or fit a diagonal"
        )
        raise DataError(message)

    def fit(integrals, length):
        """Covariances, raw rates, rates, and whether these are corrected."""
        fits = [
            matrix_rates(square, integral, length, step, record)
            for square, integral in zip(means.square, integrals, strict=True)
        ]
        covariance, raw, rate, solved = zip(*fits, strict=True)
        rate = rate if all(solved) else raw
        return np.stack(covariance), np.stack(raw), np.stack(rate), all(solved)

    covariance, raw, rate, solved = fit(means.integral[0], lags)
    wide = fit(means.integral[1], 2 * lags)[2]
    none = np.zeros((batches + 1, size))
    return Replicates(
        variance=_diagonals(covariance),
        decay=_diagonals(rate),
        frequency=none,
        raw_decay=_diagonals(raw),
        raw_frequency=none,
        double_window_decay=_diagonals(wide),
        imbalance=none,
        unit=np.arange(size),
        uncorrected=np.full(size, not solved),
        rate=rate[0],
        rate_error=jackknife_error(rate),
        covariance=covariance[0],
    )


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
    leaves the eigenvectors. It is not made if an eigenvalue has none, if the
    eigenvectors are nearly parallel, or if the noise that follows would have
    a negative variance.
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
    if diffusion_defect(rate @ covariance, covariance) < 0:
        return covariance, raw, raw, False
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


def _diagonals(matrices: np.ndarray) -> np.ndarray:
    """Diagonals of a stack of matrices."""
    return np.diagonal(matrices, axis1=-2, axis2=-1)
