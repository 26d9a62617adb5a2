"""Damped closure: linear damping and rotation fitted to the unresolved tendency.

What the unresolved modes do on average to a state of the resolved ones, and
nothing of their fluctuations:

    dx/dt = F(t) + A x + B(x, x) + c + L x.

L is estimated by instrumental variables, see :mod:`.instrumental`. Without noise
the model has no variance unless the resolved modes are chaotic by themselves;
what it is good for is the mean, and the response to a change of the forcing.
"""

from __future__ import annotations

import numpy as np

from ..reduced import ReducedModel
from .data import ClosureData
from .instrumental import damped_equation, instrumental_fit


def close(data: ClosureData) -> ReducedModel:
    """Fit the damped closure.

    Parameters
    ----------
    data : ClosureData

    Returns
    -------
    ReducedModel
        Without noise.

    Raises
    ------
    DataError
        If the lagged covariance is too ill-conditioned at any lag.
    """
    fit = instrumental_fit(data.split.x, data.coupling, data.split.step, "damped")
    equation = damped_equation(data, fit)
    decay = -np.linalg.eigvals(equation["x_from_x"]).real.max()
    if decay > 0:
        equation["facts"]["slowest decay time [s]"] = float(1 / decay)
    return ReducedModel(name="damped", **equation, variation=data.resolved_variation())
