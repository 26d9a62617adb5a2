r"""Exact maximum likelihood of a sampled Ornstein-Uhlenbeck process.

Samples ``y_0, y_1, ...`` of a member have the likelihood of the first, which
is drawn from the stationary state, times that of each given the one before,

.. math:: y_0 \sim N(m, C), \qquad
          y_{t+1} - m \sim N(\phi (y_t - m), Q), \qquad C = \phi C \phi^T + Q,

with the mean m unknown (J. D. Hamilton (1994), Time Series Analysis, ch. 5
and 11).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import linalg, optimize

from eddyshed.solver.errors import DataError

from .lag_pairs import Pairs

HALVINGS = 60  # of (-1, 1): to the last bit
ROUNDS = 200  # of mean and correlation in turn; a few do unless phi is near one
GROWING = 0.999  # modulus that the search starts from where least squares grow


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MatrixLikelihood:
    """Where the likelihood is largest.

    Parameters
    ----------
    propagator, covariance, innovation : ndarray, shape (n, n)
        phi, C and Q.
    mean : ndarray, shape (n,)
    value : float
        Logarithm of the likelihood.
    """

    propagator: np.ndarray
    covariance: np.ndarray
    innovation: np.ndarray
    mean: np.ndarray
    value: float


def unit_likelihood(
    pairs: Pairs, start: np.ndarray, paired: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Maximise the likelihood of waves and of single coordinates.

    Parameters
    ----------
    pairs : Pairs
        Means over pairs of neighbouring samples, shapes (replicate, unit).
    start : ndarray of complex, shape (unit, member)
        First sample of each member.
    paired : ndarray of bool, shape (unit,)
        Whether a unit is a wave, whose noise is equal in both parts.

    Returns
    -------
    phi : ndarray of complex, shape (replicate, unit)
    variance : ndarray, shape (replicate, unit)
        ``Q / (1 - |phi|**2)``; of a wave that of both parts together.
    value : ndarray, shape (replicate, unit)
        Logarithm of the likelihood.

    Notes
    -----
    For a given mean the noise variance follows in closed form, and so does
    the angle of phi; its modulus is the one root in (-1, 1) of a cubic. Mean
    and phi are improved in turn until neither changes.
    """
    count = pairs.count[:, None]
    members = start.shape[1]
    total = count + members
    mean = pairs.early
    phi = np.zeros_like(pairs.product)
    for _ in range(ROUNDS):
        shift = np.abs(mean) ** 2
        early = pairs.early_square - 2 * (mean.conj() * pairs.early).real + shift
        late = pairs.late_square - 2 * (mean.conj() * pairs.late).real + shift
        product = (
            pairs.product - mean * pairs.early.conj() - mean.conj() * pairs.late + shift
        )
        first = (np.abs(start.T[:, None] - mean) ** 2).sum(axis=0)
        size = np.where(paired, np.abs(product), product.real)
        turn = np.where(paired, np.exp(1j * np.angle(product)), 1.0)
        inner, outer = count * early - first, first + count * late
        modulus = _root(inner, outer, count * size, total, members)
        before, phi = phi, modulus * turn
        gap = 1 - np.abs(phi) ** 2
        mean = (
            gap * start.sum(axis=1)
            + (1 - phi).conj() * count * (pairs.late - phi * pairs.early)
        ) / (members * gap + count * np.abs(1 - phi) ** 2)
        if np.abs(phi - before).max() < 1e-14:
            break
    rest = outer + modulus**2 * inner - 2 * modulus * count * size
    parts = np.where(paired, 2, 1)
    noise = rest / total
    value = np.log(2 * np.pi * noise / parts) + 1
    value = -parts / 2 * (total * value - members * np.log(gap))
    return phi, noise / gap, value


def _root(inner, outer, cross, total, members):
    """Modulus that makes ``total log(F) - members log(1 - r**2)`` smallest.

    F is ``outer + inner r**2 - 2 cross r``; the derivative changes its sign
    once, from minus to plus, between -1 and 1.
    """
    low, high = np.full(cross.shape, -1.0), np.full(cross.shape, 1.0)
    for _ in range(HALVINGS):
        r = (low + high) / 2
        rest = outer + inner * r**2 - 2 * cross * r
        slope = total * (inner * r - cross) * (1 - r**2) + members * r * rest
        low, high = np.where(slope < 0, r, low), np.where(slope < 0, high, r)
    return (low + high) / 2


def matrix_likelihood(part: np.ndarray) -> MatrixLikelihood:
    """Maximise the likelihood of coordinates that act on each other.

    Parameters
    ----------
    part : ndarray, shape (member, time, n)

    Returns
    -------
    MatrixLikelihood

    Raises
    ------
    DataError
        If the search does not come to an end.

    Notes
    -----
    Quasi-Newton steps from the least-squares solution, in coordinates in
    which the likelihood of all but the first samples is nearly a unit sphere.
    """
    sums = _Sums.of(part)
    size, pairs = sums.size, sums.pairs
    solution = optimize.minimize(
        sums.objective,
        np.zeros(size * size + size * (size + 1) // 2 + size),
        jac=True,
        method="L-BFGS-B",
        options={"maxiter": 500, "maxcor": 30, "ftol": 0.0, "gtol": 1e-6},
    )
    if not np.isfinite(solution.fun) or np.abs(solution.jac).max() > 1e-3:
        message = (
            "Ornstein-Uhlenbeck fit: the search for the largest likelihood of "
            f"{size} coordinates and {pairs} pairs of samples did not settle; use "
            'method = "regression" with a lag of one step, or fewer coordinates'
        )
        raise DataError(message)
    propagator, root, mean = sums.unpacked(solution.x)
    innovation = root @ root.T
    return MatrixLikelihood(
        propagator=propagator,
        covariance=linalg.solve_discrete_lyapunov(propagator, innovation),
        innovation=innovation,
        mean=mean,
        value=-float(solution.fun),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Sums:
    """Sums over a record that its likelihood is a function of, and scales."""

    size: int
    members: int
    pairs: int
    start: np.ndarray  # first samples (member, n)
    early: np.ndarray  # sums over pairs (n,)
    late: np.ndarray
    early_square: np.ndarray  # (n, n)
    late_square: np.ndarray
    product: np.ndarray
    guess: np.ndarray  # phi by least squares
    inverse: np.ndarray  # of the root of the early squares, for phi
    root: np.ndarray  # of the innovation by least squares

    @classmethod
    def of(cls, part):
        """Sum up a (member, time, n) array."""
        size = part.shape[2]
        early, late = part[:, :-1].reshape(-1, size), part[:, 1:].reshape(-1, size)
        pairs = len(early)
        one, two = early - early.mean(axis=0), late - late.mean(axis=0)
        guess = np.linalg.lstsq(one, two, rcond=None)[0].T
        rest = two - one @ guess.T
        growth = np.abs(np.linalg.eigvals(guess)).max()
        if growth >= GROWING:
            guess = guess * (GROWING / growth)
        return cls(
            size=size,
            members=part.shape[0],
            pairs=pairs,
            start=part[:, 0],
            early=early.sum(axis=0),
            late=late.sum(axis=0),
            early_square=early.T @ early,
            late_square=late.T @ late,
            product=late.T @ early,
            guess=guess,
            inverse=np.linalg.inv(np.linalg.cholesky(one.T @ one)),
            root=np.linalg.cholesky(rest.T @ rest / pairs),
        )

    def unpacked(self, vector):
        """Propagator, root of the innovation, and mean."""
        n = self.size
        below = np.tril_indices(n)
        change = np.zeros((n, n))
        change[below] = vector[n * n : n * n + len(below[0])]
        change = change / np.sqrt(self.pairs)
        diagonal = np.diag(np.exp(np.diag(change)))
        phi = self.guess + self.root @ vector[: n * n].reshape(n, n) @ self.inverse
        mean = self.root @ vector[n * n + len(below[0]) :]
        return phi, self.root @ (np.tril(change, -1) + diagonal), mean

    def objective(self, vector):
        """Minus the logarithm of the likelihood, and its slope."""
        n, members, pairs = self.size, self.members, self.pairs
        phi, root, mean = self.unpacked(vector)
        if np.abs(np.linalg.eigvals(phi)).max() >= 1:
            return np.inf, np.zeros_like(vector)
        noise = root @ root.T
        covariance = linalg.solve_discrete_lyapunov(phi, noise)
        early = self._about(self.early_square, self.early, self.early, mean)
        late = self._about(self.late_square, self.late, self.late, mean)
        product = self._about(self.product, self.late, self.early, mean)
        start = self.start - mean
        cross = phi @ product.T
        rest = late - cross - cross.T + phi @ early @ phi.T
        noise_inverse, inverse = np.linalg.inv(noise), np.linalg.inv(covariance)
        first = start.T @ start
        value = 0.5 * (
            (members + pairs) * n * np.log(2 * np.pi)
            + members * np.linalg.slogdet(covariance)[1]
            + np.sum(inverse * first)
            + pairs * np.linalg.slogdet(noise)[1]
            + np.sum(noise_inverse * rest)
        )
        by_covariance = 0.5 * (members * inverse - inverse @ first @ inverse)
        adjoint = linalg.solve_discrete_lyapunov(phi.T, by_covariance)
        by_noise = (
            0.5 * (pairs * noise_inverse - noise_inverse @ rest @ noise_inverse)
            + adjoint
        )
        by_phi = noise_inverse @ (phi @ early - product)
        by_phi += 2 * adjoint @ phi @ covariance
        left = self.late - phi @ self.early - pairs * (mean - phi @ mean)
        by_mean = -inverse @ start.sum(axis=0)
        by_mean -= (np.eye(n) - phi).T @ noise_inverse @ left
        by_root = self.root.T @ (2 * by_noise @ root)
        # The diagonal is an exponential, so that it stays positive.
        diagonal = np.diag(self.root_change(vector))
        by_root[np.diag_indices(n)] *= diagonal
        slope = np.concatenate(
            [
                (self.root.T @ by_phi @ self.inverse.T).ravel(),
                by_root[np.tril_indices(n)] / np.sqrt(pairs),
                self.root.T @ by_mean,
            ]
        )
        return float(value), slope

    def root_change(self, vector):
        """Root of the innovation in terms of that by least squares."""
        return np.linalg.solve(self.root, self.unpacked(vector)[1])

    def _about(self, square, one, other, mean):
        """Sum of products about a mean."""
        return (
            square
            - np.outer(mean, other)
            - np.outer(one, mean)
            + self.pairs * np.outer(mean, mean)
        )
