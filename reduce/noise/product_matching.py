r"""Rates of Ornstein-Uhlenbeck pairs from the integral of squared correlations.

A slow mode that feels the product of two fast ones feels the integral of the
lag covariance of that product, which for Gaussian noise is a product of two
lag covariances (Isserlis 1918, Biometrika 12:134). For one wave and its
conjugate that is the integral of ``|rho|^2``, with rho its complex correlation
function. An Ornstein-Uhlenbeck pair of rate ``g + i w`` has

    int_0^T |rho|^2 dt = (1 - exp(-2 g T)) / 2 g,
    int_0^T conj(rho) rho' dt / int_0^T |rho|^2 dt = -g - i w (as T -> oo),

so the first gives g and the imaginary part of the second w. The numerics of
:func:`eddyshed.reduce.noise.fit.fit_ornstein_uhlenbeck` for noise that acts through
its products.
"""

from __future__ import annotations

import numpy as np
from scipy import fft

from ..statistics.jackknife import jackknife_error, left_out
from ..statistics.series import mode_blocks
from .replicates import Replicates, replicates_of_units

HALVINGS = 60  # of the interval that holds a rate: to the last bit
SLOWEST = 1e-3  # e-folding times of |rho|^2 in a window, below which g is not known


def match_products(
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
    members, times, _ = series.shape
    units, paired = len(first), second >= 0
    squares = np.empty((2, batches + 1, units))
    shape = (batches + 1, units)
    raw, rate, wide = (np.empty(shape, dtype=complex) for _ in range(3))
    solved, wide_solved = np.empty(shape, dtype=bool), np.empty(shape, dtype=bool)
    # A block holds each unit's series, padded spectra and lag covariances.
    for block in mode_blocks(units, 16 * 6 * members * times):
        parts = _parts(series, first[block], second[block])
        covariance, squares[:, :, block] = _lag_covariances(parts, 2 * lags, batches)
        record = members * times
        raw[:, block], rate[:, block], solved[:, block] = _rates(
            covariance[:, :, : lags + 1], step, record
        )
        _, wide[:, block], wide_solved[:, block] = _rates(covariance, step, record)
    rate.imag[:, ~paired] = raw.imag[:, ~paired] = 0.0
    uncorrected = ~solved.all(axis=0)
    record = members * times * step
    rate = np.where(uncorrected, raw, rate - _excess(rate, record, paired))
    wide -= np.where(wide_solved.all(axis=0), _excess(wide, record, paired), 0.0)

    return replicates_of_units(
        first, second, squares, squares.sum(axis=0), raw, rate, wide, uncorrected
    )


def _parts(series, first, second):
    """Complex series of units, shape (unit, member, time), less their means."""
    real = np.moveaxis(series[:, :, first], 2, 0)
    parts = (real - real.mean(axis=(1, 2), keepdims=True)).astype(complex)
    paired = second >= 0
    imag = np.moveaxis(series[:, :, second[paired]], 2, 0)
    parts.imag[paired] = imag - imag.mean(axis=(1, 2), keepdims=True)
    return parts


def _lag_covariances(parts, lags, batches):
    """Means of ``s(t + l) conj(s(t))`` over all, and all but each batch.

    Returns
    -------
    covariance : ndarray of complex, shape (batch + 1, unit, lags + 1)
    squares : ndarray, shape (2, batch + 1, unit)
        Mean squares of the two parts.
    """
    units, members, times = parts.shape
    # A batch is a stretch of time of every member: none crosses a member's end.
    edges = np.arange(batches + 1) * times // batches
    sums = np.empty((batches, units, lags + 1), dtype=complex)
    squares = np.empty((2, batches, units))
    for batch in range(batches):
        start, stop = edges[batch], edges[batch + 1]
        own, ahead = parts[:, :, start:stop], parts[:, :, start : stop + lags]
        length = fft.next_fast_len(stop - start + lags)
        product = fft.fft(own, length).conj() * fft.fft(ahead, length)
        sums[batch] = fft.ifft(product)[:, :, : lags + 1].sum(axis=1)
        squares[:, batch] = (
            (own.real**2).sum(axis=(1, 2)),
            (own.imag**2).sum(axis=(1, 2)),
        )
    counts = np.diff(edges) * members
    return left_out(sums, counts, 0), left_out(squares, counts, 1)


def _rates(covariance, step, record):
    """Raw rate, rate corrected for the window, and whether there is one."""
    correlation = covariance / covariance[..., :1].real
    weights = np.full(correlation.shape[-1], step)
    weights[[0, -1]] /= 2
    squared = np.abs(correlation) ** 2 @ weights
    window = step * (correlation.shape[-1] - 1)
    # Sampling adds to each |rho|^2 the variance of rho, which far from zero lag
    # is twice the integral over the record (Bartlett 1946, J. R. Stat. Soc. Suppl.
    # 8:27).
    squared = squared / (1 + 2 * window / (record * step))
    raw = 1 / (2 * squared)
    decay, solved = _solve(squared, step, correlation.shape[-1] - 1)
    turned = correlation[..., 1:] * correlation[..., :-1].conj()
    frequency = -(np.angle(turned) * np.abs(turned)).sum(axis=-1)
    frequency /= step * np.abs(turned).sum(axis=-1)
    return raw + 1j * frequency, decay + 1j * frequency, solved


def _excess(rate, record, paired):
    r"""How much the decays found in a record are too high on average.

    Beside the noise that `_rates` takes off, the integral of ``|rho|^2`` of a
    process of rate g + i w lacks ``k / (2 g^2 T)``, to first order in the record
    T. By integrals of the variance of rho (Bartlett 1946) and its bias (see
    :mod:`.lagged`), and as fewer products are left at longer lags, k is 5 for a
    single coordinate and 4 for a wave, if the mean is known; that it is not adds
    ``8 g^4 / (g^2 + w^2)^2 - 4 g^2 / (g^2 + w^2)``. The decay is one over the
    integral, and its scatter makes the mean of that too high as well.
    """
    decay, squared = rate[0].real, np.abs(rate[0]) ** 2
    share = decay**2 / squared
    lacking = np.where(paired, 4.0, 5.0) + 8 * share**2 - 4 * share
    error = jackknife_error(rate.real) / decay
    excess = lacking / (decay * record) + error**2
    return decay * excess / (1 + excess)


def _solve(squared, step, lags):
    """Decay whose windowed trapezoid sum of ``exp(-2 g t)`` is the given one."""
    window = lags * step

    def integral(decay):
        q = np.exp(-2 * decay * step)
        inner = q * -np.expm1(-2 * decay * step * (lags - 1)) / (1 - q)
        return step * (0.5 + inner + 0.5 * q**lags)

    low = np.full(squared.shape, SLOWEST / (2 * window))
    high = np.full(squared.shape, 50 / step)
    solved = (integral(low) > squared) & (integral(high) < squared)
    for _ in range(HALVINGS):
        middle = np.sqrt(low * high)
        above = integral(middle) > squared
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    return np.sqrt(low * high), solved
