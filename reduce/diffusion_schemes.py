"""Time stepping of reduced models with white noise, many members at once."""

from __future__ import annotations

import math

import numpy as np

from .diffusion import DiffusionModel, noise_factor, phi
from .polynomial import Polynomial, compiled
from .reduced import as_operator, column_product

DRIFT_ACCURACY = 0.1  # of the fastest time of the drift, in a step: order two
NOISE_ACCURACY = 0.01  # of the fastest time of multiplicative noise: order one


class _WhiteNoiseScheme:
    """What schemes for white noise have in common: no state but x, and the noise."""

    def __init__(self, model, factor):
        nx = model.nx
        self.n_observed, self.n_starting = nx, 0
        self.n_normals = factor.shape[2]
        self.n_work = math.comb(nx + 3, 3)  # products of coordinates
        self._is_additive = model.is_additive
        used = factor[:1] if self._is_additive else factor
        self._rows = as_operator(used.reshape(len(used) * nx, self.n_normals))

    def begin(
        self, x: np.ndarray, y: np.ndarray | None, normals: np.ndarray
    ) -> np.ndarray:
        """State before the first step: the resolved coordinates alone.

        Parameters
        ----------
        x : ndarray, shape (nx, member)
        y, normals : ndarray, shape (0, member)
            There are none.

        Returns
        -------
        ndarray, shape (nx, member)
        """
        return x.copy()

    def colour(self, normals: np.ndarray) -> np.ndarray:
        """Turn normals of many steps into increments of each coefficient.

        Parameters
        ----------
        normals : ndarray, shape (n_normals, steps, member)

        Returns
        -------
        ndarray, shape (nx, steps, member)
            Or with nx (1 + nx) rows, if there is multiplicative noise.
        """
        count, steps, members = normals.shape
        made = column_product(self._rows, normals.reshape(count, steps * members))
        return made.reshape(self._rows.shape[0], steps, members)

    def _kick(self, x, increment):
        """Increment of x by the noise at states x, both (nx, member)."""
        if self._is_additive:
            return increment
        nx = self.n_observed
        made = increment.reshape(1 + nx, nx, -1)
        return made[0] + np.einsum("jm,jim->im", x, made[1:])


class ItoScheme(_WhiteNoiseScheme):
    r"""Heun's method for the drift, noise by its value at the start of a step.

    Parameters
    ----------
    model : DiffusionModel
    step : float
        Time step h [s].
    exact_linear : bool
        Whether the linear drift is solved exactly within the step, together
        with the noise that it carries on, so that it may be stiff, and so
        that a linear model with additive noise is exact at any step. If not,
        the scheme is the plain one.

    Attributes
    ----------
    n_observed, n_starting, n_normals, n_work : int
        As in :class:`eddyshed.reduce.simulation.Scheme`.

    Notes
    -----
    With the drift ``A x + N(x)``, the noise factor L and standard normals::

        z  = exp(A h) x + h phi_1(A h) N(x) + L(x) normals
        x' = z + h phi_2(A h) [N(z) - N(x)]

    For A = 0 that is Heun's method for the drift and Euler's for the noise.
    Weak order 2 with additive noise and 1 with multiplicative; strong order 1
    and 1/2 (Kloeden & Platen, Numerical Solution of Stochastic Differential
    Equations, 1992, sections 10.2, 15.1; exponential form: Cox & Matthews
    2002, J. Comput. Phys. 176:430).
    """

    def __init__(
        self, model: DiffusionModel, step: float, *, exact_linear: bool = True
    ):
        nx, drift = model.nx, model.drift
        linear = drift.linear if exact_linear else np.zeros((nx, nx))
        super().__init__(model, noise_factor(model, linear, step))
        self._flow = phi(linear * step, 0)
        self._first = step * phi(linear * step, 1)
        self._second = step * phi(linear * step, 2)
        rest = Polynomial(
            constant=drift.constant,
            linear=drift.linear - linear,
            quadratic=drift.quadratic,
            cubic=drift.cubic,
        )
        parts = (rest.linear, rest.quadratic, rest.cubic)
        self._is_solved = not any(np.any(part) for part in parts)
        self._rest = compiled(rest)

    def advance(self, state: np.ndarray, increment: np.ndarray, time: float) -> None:
        """Step all members, in place.

        Parameters
        ----------
        state : ndarray, shape (nx, member)
        increment : ndarray
            One step of what :meth:`colour` returned.
        """
        before = self._rest(state)
        end = column_product(self._flow, state)
        end += column_product(self._first, before)
        end += self._kick(state, increment)
        if not self._is_solved:
            end += column_product(self._second, self._rest(end) - before)
        state[...] = end


class StratonovichScheme(_WhiteNoiseScheme):
    r"""Heun's method for drift and noise alike: the Stratonovich equation.

    Parameters
    ----------
    model : DiffusionModel
    step : float
        Time step h [s].

    Attributes
    ----------
    n_observed, n_starting, n_normals, n_work : int
        As in :class:`eddyshed.reduce.simulation.Scheme`.

    Notes
    -----
    It takes the Stratonovich drift of the model. In a white-noise limit that
    still holds what the sense of rotation of the unresolved modes does (their
    Levy area), which the reading "smooth noise, so Stratonovich" forgets.
    Weak order 1 with multiplicative noise, 2 with additive; strong order 1
    where the noise commutes, 1/2 where not (Rumelin 1982, SIAM J. Numer. Anal.
    19:604).
    """

    def __init__(self, model: DiffusionModel, step: float):
        super().__init__(model, noise_factor(model, None, step))
        self._step = step
        self._drift = compiled(model.stratonovich_drift)

    def advance(self, state: np.ndarray, increment: np.ndarray, time: float) -> None:
        """Step all members, in place; see :meth:`ItoScheme.advance`."""
        first = self._step * self._drift(state) + self._kick(state, increment)
        guess = state + first
        first += self._step * self._drift(guess) + self._kick(guess, increment)
        state += first / 2


def fastest_rates(model: DiffusionModel, x_scale: np.ndarray) -> tuple[float, float]:
    """Rates that a step of :class:`ItoScheme` must resolve.

    Parameters
    ----------
    model : DiffusionModel
    x_scale : ndarray, shape (nx,)
        Typical size of each resolved coordinate.

    Returns
    -------
    drift, noise : float
        Norm of the derivative of the drift at coordinates of that size, in
        units of that size, and the rate at which multiplicative noise changes
        the squares of x [s-1]. The first is zero for a model that the scheme
        solves exactly.
    """
    drift, scale = model.drift, x_scale
    relative = scale / scale[:, np.newaxis]
    quadratic = 2 * drift.quadratic * relative[:, :, np.newaxis]
    cubic = 3 * drift.cubic * relative[:, :, np.newaxis, np.newaxis]
    noise = np.einsum("jiji->ij", model.noise[1:][:, :, 1:]) * relative**2
    by_noise = float(noise.sum(axis=1).max())
    if not (np.any(quadratic) or np.any(cubic) or by_noise):
        return 0.0, 0.0

    def norm(tensor, sizes):
        # For coordinates with independent signs, norms add in squares.
        norms = np.linalg.norm(tensor, ord=2, axis=(0, 1))
        return math.sqrt(np.sum(np.square(norms * sizes)))

    by_drift = max(
        float(np.linalg.norm(drift.linear * relative, ord=2)),
        norm(quadratic, scale),
        norm(cubic, np.outer(scale, scale)),
    )
    return by_drift, by_noise


def diffusion_step_rule(
    model: DiffusionModel, x_scale: np.ndarray, *, interval: float
) -> tuple[float, int]:
    """Time step of a model with white noise that fits the output.

    Parameters
    ----------
    model : DiffusionModel
    x_scale : ndarray, shape (nx,)
        Typical size of each resolved coordinate.
    interval : float
        Time between outputs [s].

    Returns
    -------
    step : float
        A tenth of the fastest time of the drift or a hundredth of that of
        multiplicative noise at most [s], for their orders are two and one; the
        whole interval if the scheme is exact.
    every : int
        Steps in an interval.
    """
    drift, noise = fastest_rates(model, x_scale)
    fastest = max(drift / DRIFT_ACCURACY, noise / NOISE_ACCURACY)
    # A limit that divides the interval exactly must not cost one more step.
    every = max(1, math.ceil(interval * fastest * (1 - 1e-12)))
    return interval / every, every
