"""Time stepping of a reduced model with coloured noise, by splitting."""

from __future__ import annotations

import numpy as np
from scipy import linalg, sparse
from scipy.sparse import csgraph

from eddyshed.solver.errors import DataError

from .reduced import ReducedModel, as_operator, column_product, compiled_drift

INSET = 2.0**-28  # costs about 1e-9 (h/T)^2 for a forcing of time T
# Relative size of negative variances and growth rates that is the round-off
# of eigenvalues and of differences of covariances.
ROUND_OFF = 1e-10


def ornstein_uhlenbeck_step(
    rate: np.ndarray, covariance: np.ndarray, step: float
) -> tuple[np.ndarray, np.ndarray]:
    r"""Exact step of ``dy = -rate y dt + Sigma dW``, of any length.

    Parameters
    ----------
    rate : ndarray, shape (n, n)
        Gamma [s-1]; need not be diagonal, nor normal.
    covariance : ndarray, shape (n, n)
        Stationary covariance C, which fixes the noise:
        ``Sigma Sigma^T = Gamma C + C Gamma^T``.
    step : float
        Length h [s].

    Returns
    -------
    propagator, factor : ndarray, shape (n, n)
        ``y(t + h) = propagator y(t) + factor N(0, 1)``, with propagator
        ``exp(-Gamma h)`` and ``factor factor^T = C - propagator C propagator^T``.

    Raises
    ------
    DataError
        If Gamma lets y grow or the noise would have a negative variance.

    Notes
    -----
    C. W. Gardiner, Handbook of Stochastic Methods (1985), section 4.4. Groups
    of coordinates that neither matrix connects are treated one by one, so the
    results are as sparse as they can be.
    """
    propagator, factor = np.zeros(rate.shape), np.zeros(rate.shape)
    for block in _groups((rate != 0) | (covariance != 0)):
        gamma, c = rate[block], covariance[block]
        first = block[0].min()
        growth = np.linalg.eigvals(-gamma).real.max()
        if growth > ROUND_OFF * np.abs(gamma).max():
            message = (
                f"noise: the rate matrix lets its coordinates grow, by {growth:.3g} "
                f"per second in the group of coordinate {first}; no eigenvalue may "
                "have a negative real part: fit it again"
            )
            raise DataError(message)
        propagator[block] = linalg.expm(-gamma * step)
        gained = c - propagator[block] @ c @ propagator[block].T
        variance, factor[block] = _root(gained)
        if variance < -ROUND_OFF * np.abs(c).max():
            message = (
                "noise: rate and covariance together ask for noise of a negative "
                f"variance, {variance:.3g} after a step in the group of coordinate "
                f"{first}; rate @ covariance plus its transpose may have no negative "
                "eigenvalue: fit them again"
            )
            raise DataError(message)
    return propagator, factor


def _groups(connected):
    """Index of each diagonal block that a permutation would bring about."""
    count, group = csgraph.connected_components(
        sparse.csr_array(connected), directed=False
    )
    for label in range(count):
        members = np.flatnonzero(group == label)
        yield np.ix_(members, members)


def _root(covariance):
    """Smallest variance, and a matrix L with ``L L^T = covariance``."""
    variances, directions = linalg.eigh((covariance + covariance.T) / 2)
    return variances.min(), directions * np.sqrt(np.maximum(variances, 0.0))


def _stationary_factor(covariance):
    factor = np.zeros(covariance.shape)
    for block in _groups(covariance != 0):
        variance, factor[block] = _root(covariance[block])
        if variance < -ROUND_OFF * np.abs(covariance[block]).max():
            message = (
                f"noise: the covariance has the negative variance {variance:.3g}; "
                "no eigenvalue may be negative: estimate it again"
            )
            raise DataError(message)
    return factor


# Weight, place in the step and reach to the next stage of the classical method. As
# in the truth, the ends lie just inside, so that a forcing that jumps between two
# steps has one value in each.
STAGES = (
    (1, INSET, 0.5),
    (2, 0.5, 0.5),
    (2, 0.5, 1.0),
    (1, 1 - INSET, 0.0),
)


class StrangScheme:
    """Exact noise, Runge-Kutta coupling, composed symmetrically.

    Parameters
    ----------
    model : ReducedModel
    step : float
        Time step h [s].

    Attributes
    ----------
    n_observed : int
        Leading rows of the state that are the resolved coordinates.
    n_starting, n_normals : int
        Standard normals that a member needs before its first step, and in
        each step.
    n_work : int
        Numbers for each member in the largest array that a step works on.

    Notes
    -----
    A step is half a step of the Ornstein-Uhlenbeck process, exact in law,
    one step of everything else, and again half a step of the process
    (Strang 1968, SIAM J. Numer. Anal. 5:506): order two. The two halves that
    meet between steps are one exact step, and x does not change in either, so
    the scheme runs as half, coupling, whole, coupling, whole, ... and x is
    that of the symmetric composition after each coupling.

    The coupling is stepped by the classical Runge-Kutta method although order
    two would do. If the coupling conserves energy and volume, the exact
    splitting leaves a Gibbs measure as it is at any step; what remains is
    what the inner method does to the energy. At frequency w it changes the
    amplitude by the factor ``1 - (w h)^6 / 144`` in a step, where the
    midpoint method has ``1 + (w h)^4 / 8``: growth, and three hundred times
    more at ``w h = 0.25``.
    """

    def __init__(self, model: ReducedModel, step: float):
        self.n_observed = model.nx
        self.n_starting = 2 * model.ny
        self.n_normals = model.ny
        self.n_work = (model.nx + 1) * (model.nx + model.ny + 1)
        self._step = step
        self._drift = compiled_drift(model)
        self._forcing = None if model.variation is None else model.variation.driver()
        self._stationary = as_operator(_stationary_factor(model.covariance))
        self._half, self._whole = (
            tuple(
                as_operator(matrix)
                for matrix in ornstein_uhlenbeck_step(
                    model.rate, model.covariance, length
                )
            )
            for length in (step / 2, step)
        )

    def begin(
        self, x: np.ndarray, y: np.ndarray | None, normals: np.ndarray
    ) -> np.ndarray:
        """State before the first step.

        Parameters
        ----------
        x : ndarray, shape (nx, member)
        y : ndarray, shape (ny, member), or None
            None draws it from its stationary distribution.
        normals : ndarray, shape (n_starting, member)

        Returns
        -------
        ndarray, shape (nx + ny, member)
        """
        first, second = np.split(normals, 2)
        if y is None:
            y = column_product(self._stationary, first)
        propagator, factor = self._half
        y = column_product(propagator, y) + column_product(factor, second)
        return np.vstack([x, y])

    def colour(self, normals: np.ndarray) -> np.ndarray:
        """Turn normals of many steps into increments.

        Parameters
        ----------
        normals : ndarray, shape (n_normals, steps, member)

        Returns
        -------
        ndarray, the same shape
        """
        count, steps, members = normals.shape
        flat = normals.reshape(count, steps * members)
        return column_product(self._whole[1], flat).reshape(normals.shape)

    def advance(
        self, state: np.ndarray, increment: np.ndarray, time: float = 0.0
    ) -> None:
        """Step all members, in place.

        Parameters
        ----------
        state : ndarray, shape (nx + ny, member)
        increment : ndarray, shape (ny, member)
            One step of what :meth:`colour` returned.
        time : float
            Before the step, on the clock of the forcing [s].
        """
        h, nx = self._step, self.n_observed
        stage, total = state, np.zeros_like(state)
        for weight, at, reach in STAGES:
            slope = np.concatenate(self._drift(stage[:nx], stage[nx:]))
            if self._forcing is not None:
                slope += self._forcing(time + at * h)[:, np.newaxis]
            total += weight * slope
            if reach:
                stage = state + (reach * h) * slope
        state += (h / 6) * total
        y = state[nx:]
        y[...] = column_product(self._whole[0], y)
        y += increment
