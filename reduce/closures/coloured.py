"""Coloured closure: the unresolved modes live on as the fitted noise.

The unresolved coordinates are simulated as the fitted Ornstein-Uhlenbeck
process, driven and modulated by the resolved ones through the exact
coefficients of the equation (closed loop); what they do to one another is
what the process replaces:

    dx = [F + A x + B(x, x) + A12 y + 2 B112(x, y) + B122(y, y)] dt
    dy = [g(x) + 2 B212(x, y)] dt - rate y dt + Sigma dW.

The rate was fitted to the record of y, so it already holds the linear
operator of y about the mean state, and that operator is not added again. In
the quadratic terms alone the total energy of x and y is conserved, as it is in
the full equation.
"""

from __future__ import annotations

import numpy as np

from ..reduced import ReducedModel
from .data import ClosureData


def close(data: ClosureData) -> ReducedModel:
    """Make the coloured closure.

    Parameters
    ----------
    data : ClosureData

    Returns
    -------
    ReducedModel

    Notes
    -----
    Constants. In a stationary record the mean tendencies vanish,

        F1 + B111:Cx + 2 B112:Cxy + B122:Cy = 0,
        F2 + B211:Cx + 2 B212:Cxy + B222:Cy = 0,

    with the covariances along the truth. The noise has the fitted covariance,
    not Cy, so ``B122:(Cy - C)`` goes into the constant of x. With mean
    calibration the constant is set by the first identity itself, which takes
    in what is in no mode at all; the shift is reported. The constant of y is
    ``-(B211:Cx + 2 B212:Cxy)``, by the second identity, which stands for F2
    and for the mean of the self-interaction that the noise replaces.

    Where the forcing varies, its unresolved part drives y about that mean. The
    noise was fitted to y less what follows the clock of the forcing, so the
    covariance of that part counts beside that of the noise.
    """
    operators = data.operators
    covariance = data.noise.process.covariance
    covariance_x, covariance_xy = data.covariance_x, data.covariance_xy
    noise_mean = np.einsum("imn,mn->i", operators.B122, covariance)
    if data.forced_covariance is not None:
        noise_mean += np.einsum("imn,mn->i", operators.B122, data.forced_covariance)
    mixed_mean = 2 * np.einsum("ijm,jm->i", operators.B112, covariance_xy)
    own_mean = np.einsum("ijk,jk->i", operators.B111, covariance_x)
    balanced = -(own_mean + mixed_mean + noise_mean)
    derived = (
        operators.F1
        + np.einsum("imn,mn->i", operators.B122, data.covariance_y)
        - noise_mean
    )
    typical = np.sqrt(np.mean(data.split.tendency**2, axis=(0, 1)))
    shift = float(np.max(np.abs(balanced - derived) / typical))
    notes = list(data.noise.notes)
    if data.mean_calibration:
        notes.append(
            f"mean calibration shifts the constant by {shift:.2g} of the rms resolved "
            "tendency, in the mode where that is most"
        )
    return ReducedModel(
        name="coloured",
        x_forcing=balanced if data.mean_calibration else derived,
        x_from_x=operators.A11,
        x_from_xx=operators.B111,
        x_from_y=operators.A12,
        x_from_xy=operators.B112,
        x_from_yy=operators.B122,
        y_forcing=-np.einsum("mjk,jk->m", operators.B211, covariance_x)
        - 2 * np.einsum("mjn,jn->m", operators.B212, covariance_xy),
        y_from_x=operators.A21,
        y_from_xx=operators.B211,
        y_from_xy=operators.B212,
        rate=data.noise.process.rate,
        covariance=covariance,
        variation=operators.variation,
        notes=tuple(notes),
        facts={"mean calibration [share of rms tendency]": shift},
    )
