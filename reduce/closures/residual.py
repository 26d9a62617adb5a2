r"""Residual closure: damping and red noise fitted to the unresolved tendency.

It needs no theory of the unresolved modes, only their effect on the resolved
ones along the truth, so it is the baseline that a derived closure must beat:

    dx/dt = F + A x + B(x, x) + c + L x + xi,    xi an Ornstein-Uhlenbeck process.

Regressing the tendency on the state at the same instant would be degenerate:
in a stationary record ``<x dx/dt> = 0``, so it returns minus the damping that
is already there. L is therefore estimated with the state a while earlier as
the instrument (instrumental variables: Reiersol 1945; Durbin 1954, Rev. Int.
Stat. Inst. 22:23), by when the noise that drove it has been forgotten:

    L = Cov(r(t + s), x(t)) Cov(x(t + s), x(t))^-1.
"""

from __future__ import annotations

import numpy as np

from eddyshed.solver.errors import DataError

from ..coupling import covariance
from ..noise.fit import fit_ornstein_uhlenbeck, window_rule
from ..reduced import ReducedModel
from ..statistics.correlation import integral_time
from .data import ClosureData

LAG_TIMES = 3  # lag of the instrument, in correlation times of the coupling
CONDITION = 1e3  # of the lagged covariance beyond which L means nothing


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
        If the lagged covariance is too ill-conditioned at any lag.
    """
    x, step = data.split.x, data.split.step
    r = data.coupling
    r = r - r.mean(axis=(0, 1))
    time = float(np.median(integral_time(r, step).value))
    lag, condition, damping = _instrumental_fit(
        x, r, max(1, round(LAG_TIMES * time / step))
    )
    noise = r - x @ damping.T
    noise -= noise.mean(axis=(0, 1))
    spread = noise.var(axis=(0, 1))
    fit = fit_ornstein_uhlenbeck(
        noise,
        step,
        window=window_rule(integral_time(noise, step).value, spread, step),
        structure="full",
    )
    operators = data.operators
    covariance_x = data.covariance_x
    linear = operators.A11 + damping
    # The constant that makes the mean tendency vanish over the truth.
    constant = -np.einsum("ijk,jk->i", operators.B111, covariance_x)
    notes = list(fit.notes)
    growth = float(np.linalg.eigvals(linear).real.max())
    if growth >= 0:
        notes.append(
            f"the fitted damping leaves a mode that grows at {growth:.3g} s-1: the "
            "closure is linearly unstable"
        )
    return ReducedModel(
        name="residual",
        x_forcing=constant,
        x_from_x=linear,
        x_from_xx=operators.B111,
        x_from_y=np.eye(len(constant)),
        rate=fit.process.rate,
        covariance=fit.process.covariance,
        notes=tuple(notes),
        facts={
            "lag of the instrument [s]": lag * step,
            "condition of the lagged covariance": condition,
            "noise window [s]": fit.window,
        },
    )


def _instrumental_fit(x, r, lag):
    """Lag, condition number and L; the lag is halved while ill-conditioned."""
    while True:
        early = x[:, : x.shape[1] - lag]
        lagged = covariance(x[:, lag:], early)
        condition = float(np.linalg.cond(lagged))
        if condition < CONDITION:
            cross = covariance(r[:, lag:], early)
            return lag, condition, cross @ np.linalg.inv(lagged)
        if lag == 1:
            message = (
                "residual closure: the covariance of the resolved modes with "
                f"themselves one record earlier has condition {condition:.2g}, above "
                f"{CONDITION:g}; keep fewer modes, or leave out this closure"
            )
            raise DataError(message)
        lag //= 2
