"""Reduced models without memory: polynomial drift and noise that is white."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from scipy import linalg

from eddyshed.solver.errors import DataError

from .polynomial import Polynomial

ABSENT: Any = None  # a field that is left out; it is an array once constructed

# Relative size of negative variances that is the round-off of sums over many
# unresolved coordinates.
ROUND_OFF = 1e-10
# Variance, relative to the largest, below which a direction of noise is none.
NEGLIGIBLE = 1e-14
NODES = 10  # of Gauss's rule: its error for exp(2 s), s < 1, is below 1e-20


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DiffusionModel:
    r"""A stochastic differential equation driven by white noise.

    In the sense of Ito::

        dx_i = drift_i(x) dt + sum_p X_p dM_pi,    X = (1, x_1, ..., x_nx),
        <dM_pi dM_qj> = noise[p, i, q, j] dt,

    so that noise of index p = 0 is additive, the rest multiplicative, and the
    increments of x have the covariance ``a(x) dt`` with
    ``a_ij(x) = sum_pq X_p X_q noise[p, i, q, j]``.

    Attributes
    ----------
    name : str
        The closure that made it.
    drift : Polynomial
        Ito drift, of degree three at most [state unit s-1].
    noise : ndarray, shape (1 + nx, nx, 1 + nx, nx)
        [state unit squared s-1, less one state unit for each p, q > 0]
    labels : tuple of str
        Names of the resolved modes; ``x1``, ``x2``, ... if left out.
    notes : tuple of str
        What a reader of results must know about this model.
    facts : dict of str to float
        Numbers found on the way, by name.

    Raises
    ------
    DataError
        If shapes do not fit, a number is not finite, or `noise` is not a
        covariance.
    """

    name: str
    drift: Polynomial
    noise: np.ndarray = ABSENT
    labels: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    facts: dict[str, float] = field(default_factory=dict)

    def __post_init__(self):
        nx = self.nx
        shape = (1 + nx, nx, 1 + nx, nx)
        noise = np.zeros(shape) if self.noise is None else np.array(self.noise, float)
        if noise.shape != shape:
            self._refuse(f"noise of shape {noise.shape}, must be {shape}")
        if not np.all(np.isfinite(noise)):
            self._refuse("noise has values that are not finite")
        turned = noise.transpose(2, 3, 0, 1)
        # Relative to the variances, which may be of different units.
        size = np.sqrt(np.einsum("pipi->pi", np.abs(noise)))
        allowed = ROUND_OFF * np.einsum("pi,qj->piqj", size, size)
        if np.any(np.abs(noise - turned) > allowed):
            self._refuse("noise is not symmetric in its two pairs of axes")
        object.__setattr__(self, "noise", (noise + turned) / 2)
        labels = tuple(self.labels) or tuple(f"x{i + 1}" for i in range(nx))
        if len(labels) != nx:
            self._refuse(f"{len(labels)} labels for {nx} coordinates")
        object.__setattr__(self, "labels", labels)
        noise_factor(self)

    def _refuse(self, problem):
        message = f'reduced model "{self.name}": {problem}; check what the closure made'
        raise DataError(message)

    @property
    def nx(self) -> int:
        """Number of resolved coordinates."""
        return self.drift.nx

    @property
    def ny(self) -> int:
        """Number of coordinates beside the resolved ones: none."""
        return 0

    @property
    def is_additive(self) -> bool:
        """Whether the noise does not depend on the state."""
        return not np.any(self.noise[1:]) and not np.any(self.noise[:, :, 1:])

    @property
    def stratonovich_part(self) -> Polynomial:
        """Ito drift less Stratonovich drift [state unit s-1].

        ``sum_pj noise[1 + j, i, p, j] X_p / 2``, the derivative of each
        coefficient of the noise along the noise itself (Gardiner, Handbook of
        Stochastic Methods, section 4.3.6).
        """
        both = np.einsum("jipj->ip", self.noise[1:]) / 2
        return Polynomial(constant=both[:, 0], linear=both[:, 1:])

    @property
    def stratonovich_drift(self) -> Polynomial:
        """Drift of the same process in the sense of Stratonovich."""
        part = self.stratonovich_part
        return self.drift + Polynomial(constant=-part.constant, linear=-part.linear)

    def diffusion(self, x: np.ndarray) -> np.ndarray:
        """Covariance of the increments per second at states.

        Parameters
        ----------
        x : ndarray, shape (..., nx)

        Returns
        -------
        ndarray, shape (..., nx, nx)
        """
        one = np.ones((*np.shape(x)[:-1], 1))
        extended = np.concatenate([one, x], axis=-1)
        return np.einsum(
            "...p,...q,piqj->...ij", extended, extended, self.noise, optimize=True
        )


def noise_factor(
    model: DiffusionModel, linear: np.ndarray | None = None, step: float = 1.0
) -> np.ndarray:
    r"""Factor of the noise of a step, by as few normals as there can be.

    Parameters
    ----------
    model : DiffusionModel
    linear : ndarray, shape (nx, nx), optional
        Linear drift A that carries the noise on within the step.
    step : float
        Length h [s].

    Returns
    -------
    ndarray, shape (1 + nx, nx, r)
        L with ``sum_k L[p, i, k] L[q, j, k]`` equal to ``noise h``, or with A
        to the integral of ``exp(A s) noise[p, :, q, :] exp(A^T s)`` over the
        step.

    Raises
    ------
    DataError
        If a variance is negative.

    Notes
    -----
    r is at most nx (1 + nx), however many unresolved coordinates the noise
    came from.
    """
    nx, noise = model.nx, model.noise
    if linear is not None and np.any(linear):
        noise = _carried(noise, linear, step)
    else:
        noise = noise * step
    size = nx * (1 + nx)
    matrix = noise.reshape(size, size)
    # Additive and multiplicative noise have different units: scale them away.
    scale = np.sqrt(np.abs(np.diag(matrix)))
    unit = np.where(scale > 0, scale, 1.0)
    variances, directions = linalg.eigh(matrix / np.outer(unit, unit))
    if variances[0] < -ROUND_OFF * max(1.0, variances[-1]):
        model._refuse(
            f"noise asks for a negative variance, {variances[0]:.3g} of that of its "
            "largest coefficient"
        )
    kept = variances > NEGLIGIBLE * variances[-1]
    factor = directions[:, kept] * np.sqrt(variances[kept]) * scale[:, np.newaxis]
    return factor.reshape(1 + nx, nx, -1)


def _carried(noise, linear, step):
    """Integral of ``exp(A s) noise[p, :, q, :] exp(A^T s)`` over a step.

    By Gauss's rule over a length so short that it is exact to round-off, then
    by doubling: the integral over the second half is that over the first,
    carried on by ``exp(A s)``. Only positive terms are added.
    """
    halvings = max(0, math.ceil(math.log2(max(np.linalg.norm(linear, 1) * step, 1.0))))
    length = step / 2**halvings
    nodes, weights = np.polynomial.legendre.leggauss(NODES)

    def moved(by, what):
        return np.einsum("ik,pkql,jl->piqj", by, what, by, optimize=True)

    total = sum(
        weight
        * length
        / 2
        * moved(linalg.expm(linear * length * (1 + node) / 2), noise)
        for node, weight in zip(nodes, weights, strict=True)
    )
    for doubling in range(halvings):
        total = total + moved(linalg.expm(linear * length * 2**doubling), total)
    return (total + total.transpose(2, 3, 0, 1)) / 2


def phi(matrix: np.ndarray, order: int) -> np.ndarray:
    """Entire function ``phi_k(A)``: ``phi_0 = exp``, ``phi_k(0) = 1 / k!``.

    ``phi_k(z) = (phi_{k-1}(z) - 1 / (k - 1)!) / z``, read off the exponential
    of a block matrix (Al-Mohy & Higham 2011, SIAM J. Sci. Comput. 33:488,
    theorem 2.1), so nothing cancels where A is small or singular.
    """
    n = len(matrix)
    block = np.zeros((n * (order + 1), n * (order + 1)))
    block[:n, :n] = matrix
    for k in range(order):
        block[n * k : n * (k + 1), n * (k + 1) : n * (k + 2)] = np.eye(n)
    return linalg.expm(block)[:n, n * order :]
