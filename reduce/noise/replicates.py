"""What a fit finds in a record and in the record without each of its parts.

Every method hands over its rates in this form, whatever their structure; the
scatter of the replicates is the error of the fit (a jackknife).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..statistics.jackknife import jackknife_error


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Replicates:
    """A fit to the record (first of each array) and without each batch (rest).

    Parameters
    ----------
    variance, decay, frequency, raw_decay, raw_frequency, double_window_decay : ndarray
        Shape (batch + 1, n); see `NoiseFit` for their meaning.
    eigenvalues : ndarray of complex, shape (batch + 1, n)
        Of the rate matrix.
    noise : ndarray, shape (batch + 1, n)
        Diagonal of the diffusion.
    imbalance : ndarray, shape (batch + 1, n)
        Difference of the mean squares of two parts over their sum; zero for
        an unpaired coordinate.
    unit : ndarray of int, shape (n,)
        Number of the pair or single coordinate that each belongs to.
    uncorrected : ndarray of bool, shape (n,)
        Where `decay` and `frequency` are the raw ones.
    rate, rate_error, covariance : ndarray, shape (n, n)
        Matrices of the fit to the record.
    repair : float
        Share of the noise variance that a repair has changed.
    """

    variance: np.ndarray
    decay: np.ndarray
    frequency: np.ndarray
    raw_decay: np.ndarray
    raw_frequency: np.ndarray
    double_window_decay: np.ndarray
    eigenvalues: np.ndarray
    noise: np.ndarray
    imbalance: np.ndarray
    unit: np.ndarray
    uncorrected: np.ndarray
    rate: np.ndarray
    rate_error: np.ndarray
    covariance: np.ndarray
    repair: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BlockRates:
    """Fits of one matrix to a group of coordinates, with and without each batch.

    Parameters
    ----------
    coordinates : ndarray of int, shape (n,)
    covariance, raw, rate, wide : ndarray, shape (batch + 1, n, n)
        Covariance, and rates as found, corrected, and from twice the window.
    uncorrected : bool
        Whether `rate` is the raw one.
    repair : float
        Share of the noise variance that a repair of ``rate[0]`` has changed.
    """

    coordinates: np.ndarray
    covariance: np.ndarray
    raw: np.ndarray
    rate: np.ndarray
    wide: np.ndarray
    uncorrected: bool
    repair: float


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
    eigenvalues = decay + 1j * frequency
    eigenvalues[:, imag] = eigenvalues[:, imag].conj()
    return Replicates(
        variance=variance,
        decay=decay,
        frequency=frequency,
        raw_decay=raw.real[:, owner],
        raw_frequency=raw.imag[:, owner],
        double_window_decay=wide.real[:, owner],
        eigenvalues=eigenvalues,
        noise=2 * decay * variance,
        imbalance=(difference / squares.sum(axis=0))[:, owner],
        unit=owner,
        uncorrected=uncorrected[owner],
        rate=matrix,
        rate_error=error,
        covariance=np.diag(variance[0]),
    )


def replicates_of_blocks(blocks: list[BlockRates]) -> Replicates:
    """Put the matrices of groups together.

    Parameters
    ----------
    blocks : list of BlockRates
        Their coordinates are all, each once.

    Returns
    -------
    Replicates
    """
    size = sum(len(block.coordinates) for block in blocks)
    shape = (len(blocks[0].rate), size)
    variance, decay, raw, wide, noise = (np.empty(shape) for _ in range(5))
    eigenvalues = np.empty(shape, dtype=complex)
    uncorrected = np.empty(size, dtype=bool)
    rate, error, covariance = (np.zeros((size, size)) for _ in range(3))
    changed = total = 0.0
    for block in blocks:
        at = block.coordinates
        variance[:, at] = _diagonals(block.covariance)
        decay[:, at] = _diagonals(block.rate)
        raw[:, at] = _diagonals(block.raw)
        wide[:, at] = _diagonals(block.wide)
        eigenvalues[:, at] = _followed_eigenvalues(block.rate)
        uncorrected[at] = block.uncorrected
        rate[np.ix_(at, at)] = block.rate[0]
        error[np.ix_(at, at)] = jackknife_error(block.rate)
        covariance[np.ix_(at, at)] = block.covariance[0]
        # rate C + C rate^T has twice the diagonal of its half.
        noise[:, at] = 2 * _diagonals(block.rate @ block.covariance)
        whole = float((noise[0, at] / variance[0, at]).sum())
        changed, total = changed + block.repair * whole, total + whole
    none = np.zeros(shape)
    return Replicates(
        variance=variance,
        decay=decay,
        frequency=none,
        raw_decay=raw,
        raw_frequency=none,
        double_window_decay=wide,
        eigenvalues=eigenvalues,
        noise=noise,
        imbalance=none,
        unit=np.arange(size),
        uncorrected=uncorrected,
        rate=rate,
        rate_error=error,
        covariance=covariance,
        repair=changed / total,
    )


def _followed_eigenvalues(rates):
    """Eigenvalues of the first matrix, and to first order those of its relatives.

    By the eigenvectors of the first (T. Kato, Perturbation Theory for Linear
    Operators, ch. 2): so each keeps its place, whatever the scatter.
    """
    values, vectors = np.linalg.eig(rates[0])
    order = np.lexsort((-values.imag, values.real))
    vectors = vectors[:, order]
    values = values[order]
    change = _diagonals(np.linalg.solve(vectors, (rates - rates[0]) @ vectors))
    # A real eigenvalue stays real; round-off is no error of its frequency.
    return values + np.where(values.imag == 0, change.real, change)


def _diagonals(matrices):
    """Diagonals of a stack of matrices."""
    return np.diagonal(matrices, axis1=-2, axis2=-1)
