"""What every closure is made from."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..contract import Model
from ..coupling import coupling, covariance
from ..noise.fit import NoiseFit
from ..operators import Operators
from ..split import Split


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
    """

    model: Model
    split: Split
    operators: Operators
    noise: NoiseFit
    covariance_y: np.ndarray
    covariance_xy: np.ndarray
    mean_calibration: bool

    @property
    def covariance_x(self) -> np.ndarray:
        """Covariance of the resolved coordinates, shape (nx, nx)."""
        return covariance(self.split.x, self.split.x)

    @property
    def coupling(self) -> np.ndarray:
        """What unresolved modes do to resolved ones, shape (member, time, nx)."""
        return coupling(self.split, self.operators)
