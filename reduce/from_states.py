"""What closures are made from, of states in memory: the reduction without files."""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy import linalg

from eddyshed.solver.errors import DataError

from .bases.basis import Basis
from .closures.data import ClosureData
from .contract import Model, dual_vectors, tendency
from .coupling import covariance
from .noise.fit import fit_ornstein_uhlenbeck
from .operators import galerkin
from .split import Split

ORTHONORMAL = 1e-8  # how far products of the vectors may be off


def closure_data(
    model: Model,
    states: np.ndarray,
    step: float,
    resolved: np.ndarray,
    *,
    start: float = 0.0,
    mean_calibration: bool = True,
    **fit: Any,
) -> ClosureData:
    """Divide states of a model, project its equation and fit the noise.

    All that is not resolved is unresolved, by falling variance. It takes a matrix
    of the size of the state, so it is for models of hundreds of coordinates; a
    study does the same for large ones, out of files.

    Parameters
    ----------
    model : Model
    states : ndarray, shape (member, time, size)
        Of a stationary run, at equal steps.
    step : float
        Between states [s].
    resolved : ndarray, shape (size, nx)
        Modes that are kept: columns, orthonormal in the model's inner product.
    start : float
        Time of the first state, for a forcing that varies [s].
    mean_calibration : bool
        Whether closures shift their constants so that mean tendencies vanish.
    **fit
        Options of :func:`eddyshed.reduce.fit_ornstein_uhlenbeck`, such as `window`.

    Returns
    -------
    ClosureData

    Raises
    ------
    DataError
        If shapes do not fit, or the modes are not orthonormal.
    """
    states, resolved = np.asarray(states, float), np.asarray(resolved, float)
    size = model.size
    if states.ndim != 3 or states.shape[2] != size:
        message = (
            f"closure_data: states of shape {states.shape}, must be (member, time, "
            f"{size}); for one member write states[np.newaxis]"
        )
        raise DataError(message)
    nx = resolved.shape[-1]
    if resolved.shape != (size, nx) or not 0 < nx < size:
        message = (
            f"closure_data: resolved of shape {resolved.shape}, must be ({size}, n), n "
            f"from 1 to {size - 1}"
        )
        raise DataError(message)
    off = np.abs(resolved.T @ dual_vectors(model, resolved) - np.eye(nx)).max()
    if not off < ORTHONORMAL:
        message = (
            f"closure_data: resolved modes are off from orthonormal by {off:.3g} in "
            "the model's inner product; divide by their norms, or orthogonalise them"
        )
        raise DataError(message)
    mean = states.mean(axis=(0, 1))
    centred = states - mean
    # In coordinates z root the inner product is the plain one.
    root = linalg.cholesky(dual_vectors(model, np.eye(size)), lower=True)
    rest = linalg.null_space((root.T @ resolved).T)
    found = (centred @ root @ rest).reshape(-1, size - nx)
    _, turned = linalg.eigh(found.T @ found)
    unresolved = linalg.solve(root.T, rest @ turned[:, ::-1])
    dual = dual_vectors(model, resolved)
    x, y = centred @ dual, centred @ dual_vectors(model, unresolved)
    times = start + step * np.arange(states.shape[1])
    rates = [
        tendency(model, t, states[:, k]) @ dual for k, t in enumerate(times.tolist())
    ]
    split = Split(
        mean=mean,
        resolved=_basis(resolved, x, "resolved"),
        unresolved=_basis(unresolved, y, "unresolved"),
        resolved_mean=mean @ dual,
        x=x,
        tendency=np.stack(rates, axis=1),
        step=step,
        fine_x=x,
        fine_step=step,
        total_variance=float(np.mean(np.sum((centred @ root) ** 2, axis=2))),
        left_out_variance=0.0,
        start=start,
    )
    operators = galerkin(model, resolved, unresolved, mean, times=times)
    forced = np.zeros(y.shape[1:])
    if operators.variation is not None:
        forced = operators.variation.cycle(y, times)
    return ClosureData(
        model=model,
        split=split,
        operators=operators,
        noise=fit_ornstein_uhlenbeck(y - forced, step, **fit),
        covariance_y=covariance(y, y),
        covariance_xy=covariance(x, y),
        mean_calibration=mean_calibration,
        forced_covariance=covariance(forced[np.newaxis], forced[np.newaxis]),
    )


def _basis(vectors, series, name):
    count = vectors.shape[1]
    return Basis(
        vectors=vectors,
        labels=tuple(f"{name} {k + 1}" for k in range(count)),
        partners=np.full(count, -1),
        variance=series.var(axis=(0, 1)),
    )
