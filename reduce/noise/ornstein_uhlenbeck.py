"""The Ornstein-Uhlenbeck process: what follows exactly from its two matrices.

Knows the mathematics of the process and nothing of data; fits of it to
series are in :mod:`eddyshed.reduce.noise.fit`.
"""

from __future__ import annotations

import math
import operator
from dataclasses import dataclass

import numpy as np
from scipy import linalg
from scipy.sparse import csr_array

from eddyshed.solver.errors import DataError

ROUND_OFF = 1e-9  # of the largest entry or eigenvalue: a thousand products' worth


@dataclass(frozen=True, slots=True, kw_only=True, eq=False, repr=False)
class OrnsteinUhlenbeck:
    r"""Stationary solution of a linear stochastic differential equation.

    .. math:: dy = -\Gamma y \, dt + \Sigma \, dW, \qquad
              \Gamma C + C \Gamma^T = \Sigma \Sigma^T = D

    for a real vector y of zero mean, with the rate matrix Gamma and the
    covariance C. A wave of complex amplitude z that turns and decays,
    ``dz = -(g + i w) z dt + noise``, is a pair of coordinates (real part,
    imaginary part) with the rate ``[[g, -w], [w, g]]``.

    Parameters
    ----------
    rate : array_like, shape (n, n)
        Gamma [s-1]; all eigenvalues have a positive real part.
    covariance : array_like, shape (n, n)
        C, symmetric and positive semi-definite. ``n = 0`` is allowed: there
        is no noise.

    Raises
    ------
    DataError
        If the shapes do not fit, an entry is not finite, C is not a
        covariance, Gamma does not decay, or D, which follows from both, is
        not positive semi-definite (no noise keeps C stationary then).

    References
    ----------
    C. W. Gardiner, Handbook of Stochastic Methods, ch. 4;
    H. Risken, The Fokker-Planck Equation, ch. 6.
    """

    rate: np.ndarray
    covariance: np.ndarray

    def __post_init__(self):
        where = "Ornstein-Uhlenbeck process"
        rate = np.array(self.rate, dtype=float)
        covariance = np.array(self.covariance, dtype=float)
        shape = rate.shape
        if len(shape) != 2 or shape[0] != shape[1] or covariance.shape != shape:
            message = (
                f"{where}: a rate of shape {shape} and a covariance of shape "
                f"{covariance.shape}, allowed are two square matrices of one size; "
                "give both on the same coordinates"
            )
            raise DataError(message)
        for name, matrix in (("rate", rate), ("covariance", covariance)):
            if not np.isfinite(matrix).all():
                row, column = np.argwhere(~np.isfinite(matrix))[0]
                message = (
                    f"{where}: {name}[{row}, {column}] is {matrix[row, column]}, "
                    "allowed are finite numbers; look at what it was computed from"
                )
                raise DataError(message)
        if rate.size:
            _check_covariance(covariance, where)
            covariance = (covariance + covariance.T) / 2
            _check_rate(rate, where)
            _check_diffusion(rate @ covariance, covariance, where)
        for name, matrix in (("rate", rate), ("covariance", covariance)):
            matrix.flags.writeable = False
            object.__setattr__(self, name, matrix)

    def __repr__(self):
        if not self.size:
            return "OrnsteinUhlenbeck(no coordinates)"
        times = 1 / np.linalg.eigvals(self.rate).real
        return (
            f"OrnsteinUhlenbeck({self.size} coordinates, e-folding times "
            f"{times.min():.3g} to {times.max():.3g} s)"
        )

    @property
    def size(self) -> int:
        """Number of coordinates n."""
        return self.rate.shape[0]

    @property
    def diffusion(self) -> np.ndarray:
        """``D = rate C + C rate^T``, shape (n, n); the increments have D dt."""
        half = self.rate @ self.covariance
        return half + half.T

    @property
    def integral_covariance(self) -> np.ndarray:
        """``P = rate^-1 C``, the integral of `lag_covariance` over lags >= 0."""
        return np.linalg.solve(self.rate, self.covariance)

    @property
    def zero_frequency(self) -> np.ndarray:
        """``W = P + P^T``, the spectrum at zero frequency, shape (n, n)."""
        half = self.integral_covariance
        return half + half.T

    def propagator(self, lag: float | np.ndarray) -> np.ndarray:
        """``expm(-rate lag)``, which takes the mean of y on by a lag.

        Parameters
        ----------
        lag : float or ndarray, shape (...)
            Lags [s], not negative.

        Returns
        -------
        ndarray, shape (..., n, n)

        Raises
        ------
        DataError
            If a lag is negative or not finite.
        """
        lag = np.asarray(lag, dtype=float)
        if not (np.isfinite(lag) & (lag >= 0)).all():
            message = (
                f"Ornstein-Uhlenbeck process: a lag of {lag.min():.6g} s, allowed is "
                "a finite lag of zero or more; transpose the covariance for "
                "negative lags"
            )
            raise DataError(message)
        return linalg.expm(-lag[..., None, None] * self.rate)

    def lag_covariance(self, lag: float | np.ndarray) -> np.ndarray:
        """Covariance ``E[y(t + lag) y(t)^T]``, shape (..., n, n), for lags >= 0."""
        return self.propagator(lag) @ self.covariance

    def innovation_covariance(self, lag: float | np.ndarray) -> np.ndarray:
        """Covariance of what is new after a lag, ``C - G C G^T``, G the propagator.

        Shape (..., n, n) for lags of shape (...), as in `propagator`.
        """
        propagator = self.propagator(lag)
        return self.covariance - propagator @ self.covariance @ _transposed(propagator)

    def spectrum(self, omega: float | np.ndarray) -> np.ndarray:
        """Cross-spectrum, two-sided, ``C = integral S(omega) d omega / (2 pi)``.

        Parameters
        ----------
        omega : float or ndarray, shape (...)
            Angular frequencies [s-1] of either sign.

        Returns
        -------
        ndarray of complex, shape (..., n, n)
            ``(rate + i omega)^-1 D (rate + i omega)^-H``, the Fourier
            transform of the lag covariance with ``exp(-i omega lag)``.
        """
        omega = np.asarray(omega, dtype=float)[..., None, None]
        matrix = self.rate + 1j * omega * np.eye(self.size)
        half = np.linalg.solve(matrix, self.diffusion.astype(complex))
        whole = np.linalg.solve(matrix, _transposed(half.conj()))
        return _transposed(whole.conj())

    def simulate(
        self,
        n_times: int,
        step: float,
        rng: np.random.Generator,
        members: int = 1,
    ) -> np.ndarray:
        """Draw series, exact in distribution whatever the step.

        Parameters
        ----------
        n_times : int
            Number of times, at least 1.
        step : float
            Time between samples [s].
        rng : numpy.random.Generator
            Source of the noise.
        members : int
            Number of independent series, each from the stationary state.

        Returns
        -------
        ndarray, shape (member, time, mode)

        Raises
        ------
        DataError
            If a number of times or members is below 1, or the step is not
            positive.

        Notes
        -----
        ``y(t + step) = G y(t) + e`` with the propagator G and the innovation e.
        The times are cut into pieces of about their square root. All pieces
        advance together from rest; then each is given what the one before it
        has left.
        """
        where = "simulation of an Ornstein-Uhlenbeck process"
        n_times, members = operator.index(n_times), operator.index(members)
        if n_times < 1 or members < 1 or not (math.isfinite(step) and step > 0):
            message = (
                f"{where}: {members} members of {n_times} times with a step of "
                f"{step} s, allowed are positive numbers"
            )
            raise DataError(message)
        piece = math.isqrt(n_times - 1) + 1
        pieces = -(-n_times // piece)
        onward = _lean(self.propagator(step).T)
        far = _lean(self.propagator(step * piece).T)
        noise = _lean(_factor(self.innovation_covariance(step), self.covariance))
        y = rng.standard_normal((piece, members * pieces, self.size))
        start = y[0, ::pieces] @ _factor(self.covariance, self.covariance)
        for time in range(piece):
            y[time] = y[time] @ noise
        y[0, ::pieces] = start
        for time in range(1, piece):
            y[time] += y[time - 1] @ onward
        last = y[-1].reshape(members, pieces, self.size).copy()
        for index in range(1, pieces):
            last[:, index] += last[:, index - 1] @ far
        last[:, 1:] = last[:, :-1]  # what the piece before has left
        last[:, 0] = 0.0
        carried = last.reshape(members * pieces, self.size)
        for time in range(piece):
            carried = carried @ onward
            y[time] += carried
        y = np.moveaxis(y.reshape(piece, members, pieces, self.size), 0, 2)
        return y.reshape(members, pieces * piece, self.size)[:, :n_times].copy()


def diffusion_defect(half: np.ndarray, covariance: np.ndarray) -> float:
    """Smallest over largest eigenvalue of ``half + half^T``, with unit variances.

    Parameters
    ----------
    half : ndarray, shape (n, n)
        The rate times the covariance.
    covariance : ndarray, shape (n, n)
        Its diagonal scales the coordinates, so that weak ones count as well.

    Returns
    -------
    float
        Below ``-ROUND_OFF`` if there is no such noise.
    """
    scale = _scale(covariance)
    values = np.linalg.eigvalsh((half + half.T) / np.outer(scale, scale))
    return float(values[0] / max(abs(values[0]), abs(values[-1]), np.finfo(float).tiny))


def _lean(matrix: np.ndarray) -> np.ndarray | csr_array:
    """The matrix, sparse if nine in ten entries are zero (pairs, for example)."""
    if np.count_nonzero(matrix) > matrix.size / 10:
        return matrix
    return csr_array(matrix)


def _transposed(matrices: np.ndarray) -> np.ndarray:
    """Swap the last two axes."""
    return np.swapaxes(matrices, -1, -2)


def _scale(covariance: np.ndarray) -> np.ndarray:
    """Standard deviations, with 1 for a coordinate that does not vary."""
    variance = np.diagonal(covariance)
    return np.sqrt(np.where(variance > 0, variance, 1.0))


def _factor(matrix: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """F with ``F^T F = matrix``; eigenvalues negative by round-off count as zero."""
    scale = _scale(covariance)
    values, vectors = np.linalg.eigh(matrix / np.outer(scale, scale))
    return np.sqrt(np.maximum(values, 0.0))[:, None] * vectors.T * scale


def _check_covariance(covariance: np.ndarray, where: str) -> None:
    """Raise DataError unless symmetric and positive semi-definite."""
    gap = np.abs(covariance - covariance.T)
    if gap.max() > ROUND_OFF * np.abs(covariance).max():
        row, column = np.unravel_index(gap.argmax(), gap.shape)
        message = (
            f"{where}: covariance[{row}, {column}] = {covariance[row, column]:.6g} but "
            f"covariance[{column}, {row}] = {covariance[column, row]:.6g}, allowed is "
            "a symmetric matrix; average it with its transpose"
        )
        raise DataError(message)
    variance = np.diagonal(covariance)
    defect = diffusion_defect(covariance, covariance)
    if variance.min() < 0 or defect < -ROUND_OFF:
        message = (
            f"{where}: the covariance has a negative eigenvalue ({defect:.2g} of the "
            "largest, for unit variances), allowed is zero or more; take it from one "
            "record without gaps"
        )
        raise DataError(message)


def _check_rate(rate: np.ndarray, where: str) -> None:
    """Raise DataError unless all solutions without noise decay."""
    values = np.linalg.eigvals(rate)
    slowest = values[values.real.argmin()]
    if not slowest.real > 0:
        message = (
            f"{where}: the rate has an eigenvalue {slowest:.6g} s-1, allowed is a "
            "positive real part (decay); check its sign, or fit a longer record"
        )
        raise DataError(message)


def _check_diffusion(half: np.ndarray, covariance: np.ndarray, where: str) -> None:
    """Raise DataError unless there is a noise that keeps the covariance."""
    defect = diffusion_defect(half, covariance)
    if defect < -ROUND_OFF:
        message = (
            f"{where}: rate and covariance ask for noise of negative variance "
            f"({defect:.2g} of the largest eigenvalue of the diffusion, for unit "
            "variances), allowed is zero or more; fit both to the same series"
        )
        raise DataError(message)
