"""What a basis is, whoever makes it."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import linalg

from ..contract import Model, metric

DEPENDENT = 1e-6  # of its length, what a vector must have beside those before it


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Measured:
    """What is measured of the resolved modes, as linear functions of them.

    Attributes
    ----------
    matrix : ndarray, shape (n_measured, n_modes)
        The measured values are ``matrix @ x``, with the coordinates x not
        centred.
    labels : tuple of str
        Name of each.
    units : tuple of str
        SI unit of each.
    long_names : tuple of str
        What each is, for people.
    """

    matrix: np.ndarray
    labels: tuple[str, ...]
    units: tuple[str, ...]
    long_names: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Basis:
    """A subspace of the state space, by orthonormal vectors.

    Attributes
    ----------
    vectors : ndarray, shape (size, n_modes)
        Columns, orthonormal in the inner product of the model.
    labels : tuple of str
        Name of each mode.
    partners : ndarray of int, shape (n_modes,)
        Index, within this basis, of the mode that forms a rotating pair with
        this one (the two parts of a wave that varies in a direction in which
        the flow is statistically homogeneous); -1 if there is none.
    variance : ndarray, shape (n_modes,)
        Variance of the truth in each mode [state unit squared].
    measured : Measured, optional
        Measurements that the modes hold exactly, if the basis was made for
        some.
    """

    vectors: np.ndarray
    labels: tuple[str, ...]
    partners: np.ndarray
    variance: np.ndarray
    measured: Measured | None = None

    @property
    def n_modes(self) -> int:
        """Number of modes."""
        return self.vectors.shape[1]

    def take(self, chosen: np.ndarray) -> Basis:
        """Keep some modes; one whose other half is dropped is no pair any more.

        What is measured of all modes together is measured no more.
        """
        position = {int(old): new for new, old in enumerate(chosen)}
        return replace(
            self,
            vectors=self.vectors[:, chosen],
            labels=tuple(self.labels[i] for i in chosen),
            partners=np.array(
                [position.get(int(self.partners[i]), -1) for i in chosen], dtype=int
            ),
            variance=self.variance[chosen],
            measured=None,
        )


@dataclass(frozen=True, slots=True, eq=False)
class Flat:
    """Coordinates in which the model's inner product is the plain dot product.

    Attributes
    ----------
    root : ndarray, shape (size,) or (size, size)
        ``root * z`` or ``root @ z``; upper triangular.
    """

    root: np.ndarray

    @classmethod
    def of(cls, model: Model) -> Flat:
        """Those of a model."""
        weights = metric(model)
        return cls(np.sqrt(weights) if weights.ndim == 1 else linalg.cholesky(weights))

    def states(self, states: np.ndarray) -> np.ndarray:
        """States (..., size) in flat coordinates."""
        return states * self.root if self.root.ndim == 1 else states @ self.root.T

    def vectors(self, flat: np.ndarray) -> np.ndarray:
        """Flat columns (size, k) as vectors of the state space."""
        if self.root.ndim == 1:
            return flat / self.root[:, np.newaxis]
        return linalg.solve_triangular(self.root, flat)

    def representers(self, rows: np.ndarray) -> np.ndarray:
        """Flat Riesz representers of linear functions of the state.

        Parameters
        ----------
        rows : ndarray, shape (k, size)
            The functions are ``rows @ z``.

        Returns
        -------
        ndarray, shape (size, k)
            Columns r with ``rows @ z = r^T flat(z)``.
        """
        if self.root.ndim == 1:
            return (rows / self.root).T
        return linalg.solve_triangular(self.root, rows.T, trans=1)


def count_for_share(variance: np.ndarray, share: float, total: float) -> int:
    """How many leading modes hold a share of a variance.

    Parameters
    ----------
    variance : ndarray, shape (n,)
        By falling size.
    share : float
        Of `total`, above 0 and at most 1.
    total : float
        Variance of all that there is.

    Returns
    -------
    int
        n + 1 if they do not hold it.
    """
    if len(variance) == 0:
        return 0
    # A rounding error below the share must not cost another hundred modes.
    wanted = share * total * (1 - 1e-12)
    return int(np.searchsorted(np.cumsum(variance), wanted)) + 1


def dependent(vectors: np.ndarray) -> tuple[int, list[int]] | None:
    """Find a vector that is a combination of others before it.

    Parameters
    ----------
    vectors : ndarray, shape (size, k)
        Flat columns.

    Returns
    -------
    (int, list of int) or None
        Its column, and those that take part in the combination; None if all
        are independent.
    """
    length = np.linalg.norm(vectors, axis=0)
    for k in range(vectors.shape[1]):
        if length[k] == 0 or not np.isfinite(length[k]):
            return k, []
        before = vectors[:, :k] / length[:k]
        weights, *_ = np.linalg.lstsq(before, vectors[:, k] / length[k], rcond=None)
        left = vectors[:, k] / length[k] - before @ weights
        if np.linalg.norm(left) < DEPENDENT:
            return k, np.flatnonzero(np.abs(weights) > DEPENDENT).tolist()
    return None
