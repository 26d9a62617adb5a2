"""Windowed integrals of lag covariances, as time means of products.

With the filtered series

    f(t) = step (s(t) / 2 + sum_l (1 - l / L) s(t + l)),    l = 1 .. L - 1

(a trapezoid integral under a triangle of L samples, zeros beyond the end of
each member), the integral over lags from zero of the covariance
``E[s(t + l) s(t)^T]`` is the time mean of ``f(t) s(t)^T``. A contiguous part
of the record thus has its own share of it, and leaving out one part after
the other gives standard errors. As covariances at all lags are divided by
the full number of times, the integral plus its transpose is Bartlett's
estimate of the spectrum at frequency zero, which has no negative eigenvalue
(M. S. Bartlett (1950), Biometrika 37, 1).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy import fft

from eddyshed.solver.errors import DataError

from ..statistics.jackknife import left_out
from ..statistics.series import mode_blocks


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Means:
    """Time means over the record (first) and with each batch left out (rest).

    Parameters
    ----------
    square : ndarray
        Mean squares ``(part, batch + 1, unit)`` of the real and the imaginary
        part (zero if there is none) of each unit, or mean product matrices
        ``(batch + 1, n, n)``.
    integral : ndarray
        Integrals ``(window, batch + 1, unit)``, complex, or
        ``(window, batch + 1, n, n)`` [s].
    """

    square: np.ndarray
    integral: np.ndarray


def units_of(
    partners: np.ndarray | None, size: int, where: str
) -> tuple[np.ndarray, np.ndarray]:
    """Units that the coordinates form.

    Parameters
    ----------
    partners : array_like of int, shape (size,), optional
        Coordinate that each forms a pair with, or -1; none by default.
    size : int
        Number of coordinates.
    where : str
        Who asks; the error begins with it.

    Returns
    -------
    first, second : ndarray of int, shape (unit,)
        Lower and higher coordinate of a pair; -1 for no second.

    Raises
    ------
    DataError
        If a partner is not a coordinate or has another partner.
    """
    index = np.arange(size)
    partner = np.full(size, -1) if partners is None else np.asarray(partners)
    if partner.shape != (size,) or partner.dtype.kind not in "iu":
        message = (
            f"{where}: partners of shape {partner.shape} and type {partner.dtype}, "
            f"allowed is one whole number for each of {size} coordinates; give -1 to "
            "those without"
        )
        raise DataError(message)
    within = (partner >= 0) & (partner < size)
    mutual = within & (partner[np.where(within, partner, 0)] == index)
    wrong = (partner != -1) & ~(mutual & (partner != index))
    if wrong.any():
        which = np.flatnonzero(wrong)[0]
        message = (
            f"{where}: partner {partner[which]} of coordinate {which}, allowed is "
            "another coordinate that names this one in turn, or -1; name both parts "
            "of a wave"
        )
        raise DataError(message)
    first = np.flatnonzero((partner == -1) | (index < partner))
    return first, partner[first]


def bartlett_kernels(lags: int, step: float) -> np.ndarray:
    """Weights of f for windows of `lags` and of twice as many samples [s].

    Returns
    -------
    ndarray, shape (2, 2 * lags)
    """
    lag = np.arange(2 * lags)
    kernels = step * np.maximum(1 - lag / np.array([[lags], [2 * lags]]), 0.0)
    kernels[:, 0] /= 2
    return kernels


def unit_means(
    series: np.ndarray,
    kernels: np.ndarray,
    batches: int,
    first: np.ndarray,
    second: np.ndarray,
) -> Means:
    """Means of units: a pair of coordinates as one complex series, or one alone.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
        The mean of each coordinate is removed.
    kernels : ndarray, shape (window, lag)
        Weights of the filters.
    batches : int
        Number of contiguous parts of the record, all members in a row.
    first, second : ndarray of int, shape (unit,)
        Coordinates of the real and the imaginary part; -1 for no second.

    Returns
    -------
    Means

    Notes
    -----
    Units are worked on in blocks of at most 64 MiB (one unit, if that is
    more), which is all the memory taken beside the series.
    """
    edges = _edges(series, batches)
    square = np.zeros((2, batches, first.size))
    integral = np.zeros((len(kernels), batches, first.size), dtype=complex)
    for units in (np.flatnonzero(second < 0), np.flatnonzero(second >= 0)):
        for block in mode_blocks(units.size, 2 * _memory(series, kernels)):
            unit = units[block]
            real = _centred(series, first[unit])
            square[0][:, unit] = _batch_sums(real**2, edges)
            if second[unit[0]] < 0:
                for window, wide in enumerate(_filtered(real, kernels)):
                    integral[window][:, unit] = _batch_sums(wide * real, edges)
                continue
            imag = _centred(series, second[unit])
            square[1][:, unit] = _batch_sums(imag**2, edges)
            both = zip(_filtered(real, kernels), _filtered(imag, kernels), strict=True)
            for window, (wide, wide_imag) in enumerate(both):
                same = _batch_sums(wide * real + wide_imag * imag, edges)
                turned = _batch_sums(wide_imag * real - wide * imag, edges)
                integral[window][:, unit] = same + 1j * turned
    return Means(
        square=left_out(square, np.diff(edges), 1),
        integral=left_out(integral, np.diff(edges), 1),
    )


def matrix_means(series: np.ndarray, kernels: np.ndarray, batches: int) -> Means:
    """Means of the products of all coordinates with all; arguments as above.

    Beside blocks of 64 MiB this takes one copy of the series and six matrices
    for each batch.
    """
    edges = _edges(series, batches)
    size = series.shape[2]
    flat = _centred(series, np.arange(size)).reshape(size, -1)
    square = np.empty((batches, size, size))
    integral = np.empty((len(kernels), batches, size, size))
    parts = [slice(*both) for both in pairwise(edges)]
    for batch, part in enumerate(parts):
        square[batch] = flat[:, part] @ flat[:, part].T
    for block in mode_blocks(size, _memory(series, kernels)):
        rows = flat[block].reshape(-1, *series.shape[:2])
        for window, wide in enumerate(_filtered(rows, kernels)):
            for batch, part in enumerate(parts):
                some = wide.reshape(len(rows), -1)[:, part]
                integral[window, batch, block] = some @ flat[:, part].T
    return Means(
        square=left_out(square, np.diff(edges), 0),
        integral=left_out(integral, np.diff(edges), 1),
    )


def _memory(series: np.ndarray, kernels: np.ndarray) -> int:
    """Bytes that one coordinate takes while filtered: eight padded copies."""
    return 64 * series.shape[0] * (series.shape[1] + kernels.shape[1])


def _filtered(part: np.ndarray, kernels: np.ndarray) -> Iterator[np.ndarray]:
    """Yield the filtered (unit, member, time) array for each kernel."""
    times = part.shape[-1]
    length = fft.next_fast_len(times + kernels.shape[1], real=True)
    spectrum = fft.rfft(part, length)
    for kernel in kernels:
        # The conjugate makes the filter look ahead in time.
        product = spectrum * fft.rfft(kernel, length).conj()
        yield fft.irfft(product, length, overwrite_x=True)[..., :times]


def _centred(series: np.ndarray, modes: np.ndarray) -> np.ndarray:
    """Coordinates less their means, shape (mode, member, time), contiguous."""
    part = np.ascontiguousarray(np.moveaxis(series[:, :, modes], 2, 0))
    return part - part.mean(axis=(1, 2), keepdims=True)


def _edges(series: np.ndarray, batches: int) -> np.ndarray:
    """Bounds of the batches in the record, all members in a row."""
    return np.arange(batches + 1) * (series.shape[0] * series.shape[1]) // batches


def _batch_sums(product: np.ndarray, edges: np.ndarray) -> np.ndarray:
    """Sum a (unit, member, time) array over each batch: (batch, unit)."""
    return np.add.reduceat(product.reshape(len(product), -1), edges[:-1], axis=1).T
