r"""The white-noise limit of slow modes coupled to fast Ornstein-Uhlenbeck noise.

For a :class:`~eddyshed.reduce.reduced.ReducedModel`, write::

    dx = [f(x) + H(x) y + M(y, y)] dt
    dy = [g(x) + K(x) y - Gamma y] dt + Sigma dW,
    Gamma C + C Gamma^T = Sigma Sigma^T,

with f of degree two, ``H(x) = x_from_y + 2 x_from_xy(x, .)`` and
``K(x) = 2 y_from_xy(x, .)``. If y is made faster and its effect stronger,

    y -> y / eps, Gamma -> Gamma / eps^2, Sigma -> Sigma / eps, g, K -> / eps,

only the mean of M staying as it is, then x tends in law, as eps -> 0, to the
solution of an equation without memory. Solving the cell problem
``-L0 Phi = H y + M(y, y) - M:C`` of the generator L0 of the noise by
``Phi_i = (H Gamma^-1 y)_i + y . Q_i y - tr(Q_i C)`` with
``Gamma^T Q_i + Q_i Gamma = M_i`` gives it in the sense of Ito, term by term:

==================== ==========================================================
slow                 f(x)
quadratic_mean       M:C
linear_feedback      H Gamma^-1 g
stratonovich_drift   2 x_from_xy : S H^T, the derivative of the noise along itself
levy_area_drift      2 x_from_xy : R H^T, what rotating noise does besides
quadratic_feedback   2 tr(Q_i K C)
linear_noise         covariance H (P + P^T) H^T; multiplicative if H depends on x
quadratic_noise      covariance 2 tr(Q_i C M_j C) + 2 tr(Q_j C M_i C); additive
==================== ==========================================================

Here ``P = Gamma^-1 C`` is the integral of the lag covariance, S and R its
symmetric and antisymmetric part, and the fourth moments of y are those of a
normal. In the sense of Stratonovich the drift is the same but for
``stratonovich_drift``. The feedbacks vanish in an open loop (g = K = 0); they
are the partners of the noise, as damping is of fluctuation.

G. A. Pavliotis & A. M. Stuart, Multiscale Methods (Springer 2008), chapters 11
and 18; A. J. Majda, I. Timofeyev & E. Vanden-Eijnden (2001), Comm. Pure Appl.
Math. 54:891.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

import numpy as np
from scipy import linalg
from scipy.sparse import block_diag, csgraph, csr_array

from eddyshed.solver.errors import DataError

from .diffusion import DiffusionModel
from .polynomial import Polynomial
from .reduced import ReducedModel

# Terms that can be left out of the equation; the slow one is the model itself.
DRIFT_TERMS = (
    "quadratic_mean",
    "linear_feedback",
    "stratonovich_drift",
    "levy_area_drift",
    "quadratic_feedback",
)
NOISE_TERMS = ("linear_noise", "quadratic_noise")
TERMS = DRIFT_TERMS + NOISE_TERMS

LARGEST = 48  # resolved modes: their cubic terms then take 42 MB
ROUND_OFF = 1e-13  # of a matrix's norm: entries that unitary transforms leave


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WhiteLimit:
    """Every term of the limit equation by itself.

    Attributes
    ----------
    drifts : dict of str to Polynomial
        ``slow`` and :data:`DRIFT_TERMS` [state unit s-1].
    noises : dict of str to ndarray, shape (1 + nx, nx, 1 + nx, nx)
        :data:`NOISE_TERMS`, as in
        :class:`~eddyshed.reduce.diffusion.DiffusionModel`.
    """

    drifts: dict[str, Polynomial]
    noises: dict[str, np.ndarray]

    def equation(
        self, name: str = "white", *, leave_out: Collection[str] = (), **fields
    ) -> DiffusionModel:
        """Add up the terms.

        Parameters
        ----------
        name : str
            Of the model.
        leave_out : collection of str
            Terms that do not go in, of :data:`TERMS`.
        **fields
            Labels, notes and facts of the model.

        Returns
        -------
        DiffusionModel

        Raises
        ------
        DataError
            If there is no term of that name to leave out.
        """
        unknown = [term for term in leave_out if term not in TERMS]
        if unknown:
            message = (
                f"white-noise limit: there is no term {unknown[0]!r} to leave out; "
                f"choose from {', '.join(TERMS)}"
            )
            raise DataError(message)
        drift = self.drifts["slow"]
        for term in DRIFT_TERMS:
            if term not in leave_out:
                drift = drift + self.drifts[term]
        noise = sum(
            (self.noises[term] for term in NOISE_TERMS if term not in leave_out),
            np.zeros_like(self.noises["linear_noise"]),
        )
        return DiffusionModel(name=name, drift=drift, noise=noise, **fields)


def white_limit(
    model: ReducedModel, mean_covariance: np.ndarray | None = None
) -> WhiteLimit:
    """Derive the limit equation.

    Parameters
    ----------
    model : ReducedModel
        Slow modes and their fast noise; what holds `y_forcing` must be so
        centred that y without x has zero mean.
    mean_covariance : ndarray, shape (ny, ny), optional
        Covariance of y that the mean of its quadratic terms is taken with;
        that of the noise by default.

    Returns
    -------
    WhiteLimit

    Raises
    ------
    DataError
        If the noise does not decay.
    """
    nx, ny = model.nx, model.ny
    if mean_covariance is None:
        mean_covariance = model.covariance
    mixed = 2 * model.x_from_xy
    # H(x)[i, m] = sum_p X_p coupling[p, i, m] with X = (1, x).
    coupling = np.concatenate([model.x_from_y[np.newaxis], mixed.transpose(1, 0, 2)])
    forced = np.column_stack(
        [model.y_forcing, model.y_from_x, model.y_from_xx.reshape(ny, nx * nx)]
    )
    solved = _solved(model.rate, np.hstack([model.covariance, forced]))
    lagged, response = solved[:, :ny], solved[:, ny:]
    by_noise = mixed.reshape(nx * nx, ny) @ np.stack(
        [(lagged + lagged.T) / 2, (lagged - lagged.T) / 2]
    )
    stratonovich, levy_area = (
        _along_itself(part.reshape(nx, nx, ny), coupling) for part in by_noise
    )
    by_products, additive = _quadratic(model)
    flat = coupling.reshape((1 + nx) * nx, ny)
    multiplicative = flat @ (lagged + lagged.T) @ flat.T
    shape = (1 + nx, nx, 1 + nx, nx)
    quadratic_noise = np.zeros(shape)
    quadratic_noise[0, :, 0] = additive
    return WhiteLimit(
        drifts={
            "slow": Polynomial(
                constant=model.x_forcing,
                linear=model.x_from_x,
                quadratic=model.x_from_xx,
            ),
            "quadratic_mean": Polynomial(
                constant=np.einsum("imn,mn->i", model.x_from_yy, mean_covariance)
            ),
            "linear_feedback": _feedback(coupling, response),
            "stratonovich_drift": stratonovich,
            "levy_area_drift": levy_area,
            "quadratic_feedback": Polynomial(constant=np.zeros(nx), linear=by_products),
        },
        noises={
            "linear_noise": multiplicative.reshape(shape),
            "quadratic_noise": quadratic_noise,
        },
    )


def _solved(rate, columns):
    """``rate^-1`` times columns, once it is known that the noise decays."""
    if len(rate) == 0:
        return np.zeros_like(columns)
    slowest = float(np.linalg.eigvals(rate).real.min())
    if not slowest > 0:
        message = (
            "white-noise limit: the noise does not decay (the smallest real part of "
            f"an eigenvalue of its rate is {slowest:.3g} s-1); it must, for the "
            "integral of its lag covariance to exist: fit it again"
        )
        raise DataError(message)
    return linalg.solve(rate, columns)


def _feedback(coupling, response):
    """``H(x) Gamma^-1 g(x)``, of degree three."""
    nx = coupling.shape[1]
    made = coupling @ response  # (1 + nx, nx, powers of x in g)
    by_none, by_one = made[0], made[1:].transpose(1, 0, 2)
    one, two = slice(1, 1 + nx), slice(1 + nx, None)
    return Polynomial(
        constant=by_none[:, 0],
        linear=by_none[:, one] + by_one[:, :, 0],
        quadratic=by_none[:, two].reshape(nx, nx, nx) + by_one[:, :, one],
        cubic=by_one[:, :, two].reshape(nx, nx, nx, nx),
    )


def _along_itself(mixed, coupling):
    """``sum_jm mixed[i, j, m] H(x)[j, m]``, of degree one."""
    made = np.einsum("ijm,pjm->ip", mixed, coupling, optimize=True)
    return Polynomial(constant=made[:, 0], linear=made[:, 1:])


def _quadratic(model):
    """Drift and noise by the products of two y: linear coefficients, covariance."""
    nx, ny = model.nx, model.ny
    linear, noise = np.zeros((nx, nx)), np.zeros((nx, nx))
    pairs, c = model.x_from_yy, model.covariance
    modulation = 2 * model.y_from_xy.transpose(1, 0, 2).reshape(nx, ny * ny)
    flat = pairs.reshape(nx, ny * ny)
    # One at a time: nothing larger than the tensors themselves is held.
    for i, solution in enumerate(_cell_solutions(model.rate, pairs)):
        acted = solution @ c
        linear[i] = 2 * modulation @ acted.ravel()
        noise[i] = 2 * flat @ (c @ acted).ravel()
    return linear, noise + noise.T


def _cell_solutions(rate, right):
    """Solve ``rate^T Q + Q rate = M`` for one symmetric M after the other.

    By the Schur form of each group of coordinates that the rate connects,
    computed once. The transforms are unitary, so nothing is lost where the
    rate is far from normal; where it is normal, as for waves that turn and
    decay, the Schur form is diagonal and each solution takes a division
    (Bartels & Stewart 1972, Comm. ACM 15:820).
    """
    if len(rate) == 0:
        yield from np.zeros_like(right)
        return
    order, triangle, vectors = _schur(rate)
    upper = triangle.toarray()
    values = np.diag(upper)
    is_diagonal = not np.any(upper - np.diag(values))
    back = vectors.conj()
    for matrix in right:
        turned = matrix[np.ix_(order, order)]
        # U^T M U: the transpose, not the adjoint, as rate^T = conj(U) T^T U^T.
        made = (vectors.T @ (vectors.T @ turned).T).T
        if is_diagonal:
            made = made / np.add.outer(values, values)
        else:
            # rate^T Q + Q rate = M, turned: T^T X + X T = U^T M U.
            made, scale, _ = linalg.lapack.ztrsyl(upper.conj(), upper, made, trana="C")
            made = made / scale
        made = back @ (back @ made).T
        found = np.empty_like(matrix)
        found[np.ix_(order, order)] = ((made + made.T) / 2).real
        yield found


def _schur(rate):
    """Complex Schur form, group by group: order of coordinates, T and U."""
    count, group = csgraph.connected_components(csr_array(rate != 0), directed=False)
    order = np.argsort(group, kind="stable")
    triangles, vectors = [], []
    for label in range(count):
        members = np.flatnonzero(group == label)
        block = rate[np.ix_(members, members)]
        triangle, unitary = linalg.schur(block, output="complex")
        above = np.triu(triangle, 1)
        above[np.abs(above) < ROUND_OFF * np.linalg.norm(block)] = 0.0
        triangle = np.diag(np.diag(triangle)) + above
        triangles.append(triangle)
        vectors.append(unitary)
    return (
        order,
        block_diag(triangles, format="csr"),
        block_diag(vectors, format="csr"),
    )
