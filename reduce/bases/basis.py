"""What a basis is, whoever makes it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


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
    """

    vectors: np.ndarray
    labels: tuple[str, ...]
    partners: np.ndarray
    variance: np.ndarray

    @property
    def n_modes(self) -> int:
        """Number of modes."""
        return self.vectors.shape[1]

    def take(self, chosen: np.ndarray) -> Basis:
        """Keep some modes; one whose other half is dropped is no pair any more."""
        position = {int(old): new for new, old in enumerate(chosen)}
        return Basis(
            vectors=self.vectors[:, chosen],
            labels=tuple(self.labels[i] for i in chosen),
            partners=np.array(
                [position.get(int(self.partners[i]), -1) for i in chosen], dtype=int
            ),
            variance=self.variance[chosen],
        )
