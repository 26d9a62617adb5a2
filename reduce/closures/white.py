r"""White closure: the limit of the coloured one as its noise becomes fast.

The unresolved modes are gone; what they did to the resolved ones is left as
damping, drift and white noise, all of it derived from the equation and the
fitted noise, none of it fitted to x::

    dx = [slow + quadratic_mean + linear_feedback + stratonovich_drift
          + levy_area_drift + quadratic_feedback] dt + white noise.

The terms are those of :mod:`eddyshed.reduce.homogenised`. Each can be left
out by the config, and how large each is along the truth is reported whether
it is left out or not.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from scipy import linalg

from ..contract import conserves_energy
from ..diffusion import DiffusionModel
from ..homogenised import NOISE_TERMS, WhiteLimit, white_limit
from ..polynomial import Polynomial
from ..reduced import ReducedModel
from ..statistics.correlation import integral_time
from . import coloured
from .data import ClosureData

# Relative size of eigenvalues that is round-off where the exact ones are zero.
ROUND_OFF = 1e-12


def close(data: ClosureData) -> DiffusionModel:
    """Make the white closure.

    Parameters
    ----------
    data : ClosureData

    Returns
    -------
    DiffusionModel

    Raises
    ------
    DataError
        If the noise has no limit, or `data.leave_out` names no term.
    """
    model, _ = limit_of(data, coloured.close(data), "white")
    return model


def limit_of(
    data: ClosureData, coupled: ReducedModel, name: str
) -> tuple[DiffusionModel, WhiteLimit]:
    """Take the limit of a coupled closure.

    Parameters
    ----------
    data : ClosureData
    coupled : ReducedModel
        Resolved modes coupled to the fitted noise.
    name : str
        Of the model that is made.

    Returns
    -------
    DiffusionModel, WhiteLimit
        The model, and its terms before anything was left out.

    Notes
    -----
    Constants. The mean of the quadratic terms takes the covariance of y along
    the truth, which costs no fit. In the limit y follows x at once, so its
    mean, which is zero, is that of ``Gamma^-1 g(x)``: the constant of g is
    ``-y_from_xx:Cx``. With mean calibration the constant of x is then shifted
    so that the mean of the (Ito) drift over the states of the truth vanishes,
    as it does in a stationary record.
    """
    x = data.split.x.reshape(-1, coupled.nx)
    limit = white_limit(
        replace(
            coupled,
            x_forcing=data.operators.F1,
            y_forcing=-np.einsum(
                "mjk,jk->m", coupled.y_from_xx, data.covariance_x, optimize=True
            ),
        ),
        data.covariance_y,
    )
    model = limit.equation(
        name, leave_out=data.leave_out, labels=data.split.resolved.labels
    )
    typical = np.sqrt(np.mean(data.split.tendency.reshape(x.shape) ** 2, axis=0))
    facts = _sizes(data, limit, x, typical)
    notes = list(data.noise.notes)
    if data.leave_out:
        notes.append(f"left out, as the config asks: {', '.join(data.leave_out)}")
    mean = model.drift(x).mean(axis=0)
    shift = float(np.max(np.abs(mean) / typical))
    facts["mean calibration [share of rms tendency]"] = shift
    drift = model.drift
    if data.mean_calibration:
        drift = drift + Polynomial(constant=-mean)
        notes.append(
            f"mean calibration shifts the constant by {shift:.2g} of the rms resolved "
            "tendency, in the mode where that is most"
        )
    conserving = conserves_energy(data.model)
    notes += stability_notes(drift, coupled.rate, conserving=conserving)
    return replace(model, drift=drift, notes=tuple(notes), facts=facts), limit


def _sizes(data, limit, x, typical):
    """Size of each term along the truth, in the mode where that is most.

    White noise has no rms. With the spectrum of a coupling of variance v and
    integral time t at low frequencies, its covariance is 2 v t per second: it
    stands for the tendency sqrt(v) of that coupling.
    """
    unit = "[share of rms tendency]"
    facts = {}
    for term, drift in limit.drifts.items():
        rms = np.sqrt(np.mean(drift(x) ** 2, axis=0))
        facts[f"{term} {unit}"] = float(np.max(rms / typical))
    extended = np.column_stack([np.ones(len(x)), x])
    moments = extended.T @ extended / len(x)
    time = np.ones(len(typical))
    if any(np.any(limit.noises[term]) for term in NOISE_TERMS):
        time = integral_time(data.coupling, data.split.step).value
    for term in NOISE_TERMS:
        variance = np.einsum("piqi,pq->i", limit.noises[term], moments)
        rms = np.sqrt(np.maximum(variance, 0) / (2 * time))
        facts[f"{term} {unit}"] = float(np.max(rms / typical))
    return facts


def stability_notes(
    drift: Polynomial, rate: np.ndarray, *, conserving: bool
) -> list[str]:
    """What can be said beforehand of whether a limit equation is stable.

    Parameters
    ----------
    drift : Polynomial
        Of the limit equation.
    rate : ndarray, shape (ny, ny)
        Of the noise, in coordinates whose sum of squares is twice the energy.
    conserving : bool
        Whether the quadratic terms of the full equation conserve energy.

    Returns
    -------
    list of str

    Notes
    -----
    With energy conserved, ``x . cubic(x, x, x) = -q . Gamma^-1 q`` with
    ``q = B211(x, x)``, which is negative for every q if and only if the
    symmetric part of Gamma is positive. That is more than a positive real
    part of its eigenvalues.
    """
    if np.any(drift.cubic):
        if not conserving:
            return [
                "the model does not declare that it conserves energy, so the cubic "
                "term may feed large departures instead of damping them"
            ]
        lowest = float(linalg.eigvalsh((rate + rate.T) / 2).min())
        if lowest < -ROUND_OFF * np.abs(rate).max():
            return [
                "the cubic term may feed large departures instead of damping them: the "
                "symmetric part of the noise's rate has a negative eigenvalue, "
                f"{lowest:.3g} s-1"
            ]
        return []
    growth = float(np.linalg.eigvals(drift.linear).real.max())
    if growth < 0:
        return []
    return [
        f"the linear drift has a mode that grows at {growth:.3g} s-1, and no cubic "
        "term holds it: the closure is linearly unstable"
    ]
