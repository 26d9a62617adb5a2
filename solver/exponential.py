"""Exponential time differencing: the integral of the explicit part is exact too."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any, Protocol

import numpy as np

from .errors import DataError
from .stability import refuse_unstable_step
from .stepping import INSET, IntegratingFactorRK4, Stepper, with_push

NEAR_ZERO = 2.0  # below it the closed forms lose digits; the series has none to lose
TERMS = 32  # 2^32 / 32! is 2e-26: far below round-off where the series is used


class Differentiable(Protocol):
    """What the scheme needs of an ocean: functions of its exact linear part."""

    def linear_function(
        self, function: Callable[[np.ndarray], np.ndarray]
    ) -> Callable[[np.ndarray], np.ndarray]:
        """Return ``z -> function(L) z`` for a function of complex eigenvalues."""

    def explicit(self, t: float, z: np.ndarray) -> np.ndarray:
        """All of the tendency but L z, shape (size,), a new array each time."""


def phi_functions(x: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    r"""Functions ``phi_k(x) = sum_j x^j / (j + k)!`` for k = 1, 2, 3.

    Parameters
    ----------
    x : ndarray of float or complex, any shape

    Returns
    -------
    tuple of ndarray of complex
        To a few units of round-off everywhere.

    Notes
    -----
    By definition near zero; farther out by ``phi_1 = (exp(x) - 1) / x`` and the
    recurrence ``phi_(k+1) = (phi_k - 1/k!) / x``, whose cancellation is what
    ruins the closed forms near zero (Kassam & Trefethen 2005, SIAM J. Sci.
    Comput. 26:1214).
    """
    x = np.asarray(x, dtype=complex)
    near = np.abs(x) < NEAR_ZERO
    small, large = np.where(near, x, 0), np.where(near, NEAR_ZERO, x)
    results = []
    far = np.expm1(large) / large
    for k in (1, 2, 3):
        series = np.zeros_like(x)
        for j in range(TERMS, -1, -1):
            series = series * small + 1 / math.factorial(j + k)
        results.append(np.where(near, series, far))
        far = (far - 1 / math.factorial(k)) / large
    return results[0], results[1], results[2]


def weights(
    x: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Coefficients of the scheme at ``x = L h``, to be multiplied by h.

    Parameters
    ----------
    x : ndarray of float or complex, any shape

    Returns
    -------
    half : ndarray of complex
        Weight of the slope in each half step, ``(exp(x/2) - 1) / x``.
    first, middle, last : ndarray of complex
        Weights of the slope at the start, of each of the two at the middle,
        and of the one at the end: 1/6, 1/3 and 1/6 at zero (Cox & Matthews
        2002, J. Comput. Phys. 176:430, eq. 29).
    """
    half = phi_functions(np.asarray(x) / 2)[0] / 2
    one, two, three = phi_functions(x)
    return half, one - 3 * two + 4 * three, 2 * two - 4 * three, 4 * three - two


class ExponentialDifferencingRK4:
    r"""Exponential time differencing with a Runge-Kutta method of order four.

    Parameters
    ----------
    ocean : Differentiable
        Gives functions of its linear part L, and the rest of the tendency.
    step : float
        Time step h [s].

    Notes
    -----
    The scheme of Cox & Matthews (2002, J. Comput. Phys. 176:430). As with the
    integrating factor the linear part is exact; here a state that the linear
    part balances against a constant N is kept exactly as well, which pays
    where damping is much faster than the step. Where it is, the order may
    drop below four (Hochbruck & Ostermann 2005, SIAM J. Numer. Anal. 43:1069).
    """

    order = 4

    def __init__(self, ocean: Differentiable, step: float):
        self.step = step
        self._explicit = ocean.explicit

        def apply(function):
            return ocean.linear_function(lambda rate: function(rate * step))

        self._whole_flow = apply(np.exp)
        self._half_flow = apply(lambda x: np.exp(x / 2))
        self._half, self._first, self._middle, self._last = (
            apply(lambda x, i=i: step * weights(x)[i]) for i in range(4)
        )

    def advance(self, t: float, z: np.ndarray, push: np.ndarray | None = None) -> None:
        """Advance a state by one step, in place.

        Parameters
        ----------
        t : float
            Time at the start of the step [s].
        z : ndarray, shape (size,)
        push : ndarray, shape (size,), optional
            A further tendency, the same all through the step.
        """
        h, explicit = self.step, self._explicit
        if push is not None:
            explicit = with_push(explicit, push)
        start = explicit(t + h * INSET, z)
        carried = self._half_flow(z)
        a = carried + self._half(start)
        middle = explicit(t + h / 2, a)
        b = carried + self._half(middle)
        again = explicit(t + h / 2, b)
        c = self._half_flow(a) + self._half(2 * again - start)
        end = explicit(t + h * (1 - INSET), c)
        middle += again
        z[:] = self._whole_flow(z)
        z += self._first(start)
        z += self._middle(middle)
        z += self._last(end)


SCHEMES = ("integrating factor", "exponential differencing")


def stepper_of(scheme: str, ocean: Any, step: float) -> Stepper:
    """Build the stepper that a config names.

    Parameters
    ----------
    scheme : {"integrating factor", "exponential differencing"}
    ocean : ocean
    step : float
        Time step [s].

    Returns
    -------
    Stepper

    Raises
    ------
    DataError
        If exponential differencing is asked of an ocean that does not give
        functions of its linear part, or linear waves would grow at this step.
    """
    if scheme == SCHEMES[0]:
        refuse_unstable_step(IntegratingFactorRK4, ocean, step)
        return IntegratingFactorRK4(ocean, step)
    if getattr(ocean, "linear_function", None) is None:
        message = (
            f'[time] scheme = "{scheme}" needs functions of the linear part, which '
            f'this ocean does not give; use scheme = "{SCHEMES[0]}"'
        )
        raise DataError(message)
    refuse_unstable_step(ExponentialDifferencingRK4, ocean, step)
    return ExponentialDifferencingRK4(ocean, step)
