r"""Residual closure: damping and red noise fitted to the unresolved tendency.

It needs no theory of the unresolved modes, only their effect on the resolved
ones along the truth, so it is the baseline that a derived closure must beat:

    dx/dt = F(t) + A x + B(x, x) + c + L x + xi,    xi Ornstein-Uhlenbeck noise.

L is estimated by instrumental variables, see :mod:`.instrumental`; xi is fitted
to what remains of the tendency.
"""

from __future__ import annotations

import numpy as np

from eddyshed.solver.errors import DataError

from ..noise.fit import fit_ornstein_uhlenbeck, window_rule
from ..reduced import ReducedModel
from ..statistics.correlation import integral_time
from .data import ClosureData
from .instrumental import damped_equation, instrumental_fit


def close(data: ClosureData) -> ReducedModel:
    """Fit the residual closure.

    Parameters
    ----------
    data : ClosureData

    Returns
    -------
    ReducedModel
        Its y is the red noise xi, one for each resolved mode.

    Raises
    ------
    DataError
        If the lagged covariance is too ill-conditioned at any lag, or what
        remains of the tendency cannot be fitted by noise.
    """
    found = instrumental_fit(data.split.x, data.coupling, data.split.step, "residual")
    noise, step = found.remainder, data.split.step
    try:
        fit = fit_ornstein_uhlenbeck(
            noise,
            step,
            window=window_rule(
                integral_time(noise, step).value, noise.var(axis=(0, 1)), step
            ),
            structure="full",
        )
    except DataError as error:
        message = (
            f"residual closure: what remains of the unresolved tendency gives no "
            f"noise: {error}; or leave it out of [closures] use"
        )
        raise DataError(message) from error
    equation = damped_equation(data, found)
    equation["notes"] += fit.notes
    equation["facts"]["noise window [s]"] = fit.window
    return ReducedModel(
        name="residual",
        **equation,
        x_from_y=np.eye(data.operators.nx),
        rate=fit.process.rate,
        covariance=fit.process.covariance,
        variation=data.resolved_variation(data.operators.nx),
    )
