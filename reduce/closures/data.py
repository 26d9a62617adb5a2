"""What every closure is made from."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..contract import Model
from ..coupling import coupling, covariance
from ..noise.fit import NoiseFit
from ..operators import Operators
from ..split import Split
from ..variation import Variation


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ClosureData:
    """A divided truth, its operators and the noise fitted to it.

    Attributes
    ----------
    model : Model
        The equation that made the truth.
    split : Split
        The divided truth.
    operators : Operators
        Its Galerkin tensors, about the mean state.
    noise : NoiseFit
        The process fitted to the unresolved coordinates.
    covariance_y : ndarray, shape (ny, ny)
        Covariance of the unresolved coordinates along the truth.
    covariance_xy : ndarray, shape (nx, ny)
        Covariance of resolved with unresolved coordinates.
    mean_calibration : bool
        Whether constants are shifted so that mean tendencies vanish over the
        truth.
    forced_covariance : ndarray, shape (ny, ny), optional
        Part of `covariance_y` that follows the clock of a varying forcing. The
        noise is fitted to the rest, and what drives y brings this part back.
    leave_out : tuple of str
        Terms of the white closure that are left out, of
        :data:`eddyshed.reduce.homogenised.TERMS`.
    """

    model: Model
    split: Split
    operators: Operators
    noise: NoiseFit
    covariance_y: np.ndarray
    covariance_xy: np.ndarray
    mean_calibration: bool
    forced_covariance: np.ndarray | None = None
    leave_out: tuple[str, ...] = ()

    @property
    def covariance_x(self) -> np.ndarray:
        """Covariance of the resolved coordinates, shape (nx, nx)."""
        return covariance(self.split.x, self.split.x)

    def resolved_variation(self, ny: int = 0) -> Variation | None:
        """Variation of the forcing for a closure that does not force its y."""
        variation = self.operators.variation
        return None if variation is None else variation.without_unresolved(ny)

    @property
    def coupling(self) -> np.ndarray:
        """What unresolved modes do to resolved ones, shape (member, time, nx)."""
        return coupling(self.split, self.operators)
