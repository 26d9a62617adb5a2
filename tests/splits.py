"""Truths in memory, divided by hand: what tests of closures and scores start from.

Import as ``from splits import ...``; ``conftest.py`` makes it importable.
"""

from __future__ import annotations

import numpy as np

from eddyshed.reduce.bases.basis import Basis
from eddyshed.reduce.contract import tendency
from eddyshed.reduce.split import Split


def basis_of(vectors, series, name="mode"):
    """A basis of given vectors, with the variances of given coordinates."""
    count = vectors.shape[1]
    return Basis(
        vectors=vectors,
        labels=tuple(f"{name} {k}" for k in range(count)),
        partners=np.full(count, -1),
        variance=series.var(axis=0),
    )


def divided(model, states, vectors, nx, *, step=1.0, mean=None):
    """Divide states of a model; what no vector holds is left out.

    Parameters
    ----------
    model : Quadratic
    states : ndarray, shape (n_time, size)
    vectors : ndarray, shape (size, nx + ny)
        Orthonormal columns, the resolved ones first.
    nx : int
    step : float
    mean : ndarray, shape (size,), optional
        What to centre on; the mean of the states by default.

    Returns
    -------
    Split, ndarray of shape (1, n_time, ny)
        Of one member.
    """
    mean = states.mean(axis=0) if mean is None else mean
    dual = model.weights @ vectors
    series = (states - mean) @ dual
    members = series[np.newaxis]
    resolved = basis_of(vectors[:, :nx], series[:, :nx], "slow")
    unresolved = basis_of(vectors[:, nx:], series[:, nx:], "fast")
    total = float(model.inner(states - mean, states - mean).mean())
    return Split(
        mean=mean,
        resolved=resolved,
        unresolved=unresolved,
        resolved_mean=mean @ dual[:, :nx],
        x=members[..., :nx],
        tendency=(tendency(model, 0.0, states) @ dual[:, :nx])[np.newaxis],
        step=step,
        fine_x=members[..., :nx],
        fine_step=step,
        total_variance=total,
        left_out_variance=total - float(np.mean(series**2, axis=0).sum()),
    ), members[..., nx:]


def resolved_only(x, *, step=1.0, mean=None, rate=None):
    """A split of which only the resolved coordinates matter.

    Parameters
    ----------
    x : ndarray, shape (n_time, nx) or (member, n_time, nx)
        Departures from the mean; of one member if it has two axes.
    step : float
    mean, rate : ndarray, optional
        Mean of the coordinates and their tendency; zero by default.

    Returns
    -------
    Split
    """
    size = x.shape[-1]
    flat = x.reshape(-1, size)
    x = x if x.ndim == 3 else x[np.newaxis]
    mean = np.zeros(size) if mean is None else mean
    variance = float(flat.var(axis=0).sum())
    return Split(
        mean=mean,
        resolved=basis_of(np.eye(size), flat, "slow"),
        unresolved=basis_of(np.zeros((size, 0)), flat[:, :0], "fast"),
        resolved_mean=mean,
        x=x,
        tendency=np.zeros_like(x) if rate is None else rate.reshape(x.shape),
        step=step,
        fine_x=x,
        fine_step=step,
        total_variance=variance,
        left_out_variance=0.0,
    )
