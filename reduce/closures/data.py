"""What every closure is made from."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..contract import Model
from ..coupling import coupling
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
    leave_out: tuple[str, ...] = ()

    @property
    def covariance_x(self) -> np.ndarray:
        """Covariance of the resolved coordinates, shape (nx, nx)."""
        x = self.split.x
        return x.T @ x / len(x)

    @property
    def coupling(self) -> np.ndarray:
        """What the unresolved modes do to the resolved ones, shape (n_time, nx)."""
        return coupling(self.split, self.operators)
