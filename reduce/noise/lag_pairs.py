"""Means over pairs of samples a lag apart, and what regression makes of them."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from ..statistics.jackknife import left_out


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Pairs:
    """Means over pairs of samples, of all and of all but each batch.

    Parameters
    ----------
    count : ndarray, shape (batch + 1,)
        Number of pairs.
    early, late : ndarray, shape (batch + 1, unit)
        Mean of the earlier and the later sample of a pair.
    early_square, late_square, product : ndarray
        Shape ``(batch + 1, unit)``: means of ``|early|**2``, ``|late|**2`` and
        ``late conj(early)``; or ``(batch + 1, unit, unit)``, of all with all.
    """

    count: np.ndarray
    early: np.ndarray
    late: np.ndarray
    early_square: np.ndarray
    late_square: np.ndarray
    product: np.ndarray


def unit_pairs(parts, lag, batches):
    """Means over pairs of samples of a complex (unit, member, time) array."""
    units, _, times = parts.shape
    early = parts[:, :, : times - lag].reshape(units, -1)
    late = parts[:, :, lag:].reshape(units, -1)
    edges = np.arange(batches + 1) * early.shape[1] // batches
    counts = np.diff(edges)

    def means(product):
        return left_out(np.add.reduceat(product, edges[:-1], axis=1).T, counts, 0)

    return Pairs(
        count=np.concatenate([[counts.sum()], counts.sum() - counts]),
        early=means(early),
        late=means(late),
        early_square=means(np.abs(early) ** 2),
        late_square=means(np.abs(late) ** 2),
        product=means(late * early.conj()),
    )


def matrix_pairs(part: np.ndarray, lag: int, batches: int) -> Pairs:
    """Means over pairs of samples of a (member, time, n) array, with matrices."""
    _, times, size = part.shape
    early = part[:, : times - lag].reshape(-1, size)
    late = part[:, lag:].reshape(-1, size)
    edges = np.arange(batches + 1) * len(early) // batches
    counts = np.diff(edges)
    cuts = [slice(*both) for both in pairwise(edges)]

    def means(one, other):
        sums = np.stack([one[cut].T @ other[cut] for cut in cuts])
        return left_out(sums, counts, 0)

    ones = np.ones((len(early), 1))
    return Pairs(
        count=np.concatenate([[counts.sum()], counts.sum() - counts]),
        early=means(early, ones)[..., 0],
        late=means(late, ones)[..., 0],
        early_square=means(early, early),
        late_square=means(late, late),
        product=means(late, early),
    )


def lag_correlations(part: np.ndarray, lag: int, batches: int) -> np.ndarray:
    """Correlation of a coordinate, or modulus of that of a wave, at a lag.

    Parameters
    ----------
    part : ndarray, shape (member, time, 1 or 2)
    lag : int
        Lag in samples.
    batches : int
        Number of parts of the record.

    Returns
    -------
    ndarray, shape (batch + 1,)
        From all pairs of samples, and from all but those of each batch.
    """
    wave = part.shape[2] == 2
    parts = complex_units(part, np.array([0]), np.array([1 if wave else -1]))
    psi, _ = regressed_units(unit_pairs(parts, lag, batches))
    return np.abs(psi[:, 0]) if wave else psi[:, 0].real


def complex_units(series, first, second):
    """Complex series of units, shape (unit, member, time), less their means."""
    parts = np.moveaxis(series[:, :, first], 2, 0).astype(complex)
    paired = second >= 0
    parts.imag[paired] = np.moveaxis(series[:, :, second[paired]], 2, 0)
    return parts - parts.mean(axis=(1, 2), keepdims=True)


def mean_squares(parts, batches):
    """Mean squares of the real and the imaginary part, (2, batch + 1, unit)."""
    flat = parts.reshape(len(parts), -1)
    edges = np.arange(batches + 1) * flat.shape[1] // batches
    sums = [
        np.add.reduceat(part**2, edges[:-1], axis=1).T
        for part in (flat.real, flat.imag)
    ]
    return left_out(np.stack(sums), np.diff(edges), 1)


def regressed_units(pairs):
    """Lag correlations by least squares with an intercept, and variances."""
    cross = pairs.product - pairs.late * pairs.early.conj()
    square = pairs.early_square - np.abs(pairs.early) ** 2
    whole = (pairs.early_square + pairs.late_square) / 2
    return cross / square, whole - np.abs((pairs.early + pairs.late) / 2) ** 2


def regressed_matrices(pairs: Pairs) -> np.ndarray:
    """Lag matrices by least squares with an intercept, shape (batch + 1, n, n)."""
    cross = pairs.product - pairs.late[:, :, None] * pairs.early[:, None, :]
    square = pairs.early_square - pairs.early[:, :, None] * pairs.early[:, None, :]
    return np.linalg.solve(square, cross.swapaxes(1, 2)).swapaxes(1, 2)


def covariance_matrices(pairs):
    """Covariance matrices of all samples, shape (batch + 1, n, n)."""
    mean = (pairs.early + pairs.late) / 2
    whole = (pairs.early_square + pairs.late_square) / 2
    return whole - mean[:, :, None] * mean[:, None, :]
