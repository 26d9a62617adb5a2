"""Time stepping with the stiff linear part treated exactly."""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol

import numpy as np

# Stages at the ends of a step look just inside it, so that a forcing that jumps
# between two steps has one value in each. Both ends move alike, so what this
# costs in accuracy is of second order: about 1e-9 (h/T)^2 for a forcing of time T.
INSET = 2.0**-28


class Steppable(Protocol):
    """What a scheme needs of an ocean: ``dz/dt = L z + explicit(t, z)``."""

    def exact_flow(self, interval: float) -> Callable[[np.ndarray], np.ndarray]:
        """Return the function ``z -> exp(L interval) z``, a new array each time."""

    def explicit(self, t: float, z: np.ndarray) -> np.ndarray:
        """All of the tendency but L z, shape (size,), a new array each time."""


class Stepper(Protocol):
    """A scheme bound to an ocean and a step."""

    step: float

    def advance(self, t: float, z: np.ndarray, push: np.ndarray | None = None) -> None:
        """Advance a state by one step, in place."""


class IntegratingFactorRK4:
    r"""Classical Runge-Kutta of order four for ``exp(-L t) z``.

    Parameters
    ----------
    ocean : Steppable
        Gives the exact flow of L and the rest of the tendency.
    step : float
        Time step h [s].

    Notes
    -----
    For ``dz/dt = L z + N(t, z)`` the variable ``exp(-L t) z`` has no linear
    part left; the classical method applied to it, written back for z (for
    example Canuto, Hussaini, Quarteroni & Zang, Spectral Methods in Fluid
    Dynamics, 1988), is exact when N = 0 and of order four in h. On the
    advection alone it has the stability of the classical method, 2.83 / h on
    the imaginary axis.
    """

    order = 4

    def __init__(self, ocean: Steppable, step: float):
        self.step = step
        self._explicit = ocean.explicit
        self._half = ocean.exact_flow(step / 2)
        self._full = ocean.exact_flow(step)

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
        h, half, explicit = self.step, self._half, self._explicit
        if push is not None:
            explicit = with_push(explicit, push)
        carried = half(z)
        k1 = half(explicit(t + h * INSET, z))
        k2 = explicit(t + h / 2, carried + (h / 2) * k1)
        k3 = explicit(t + h / 2, carried + (h / 2) * k2)
        k2 += k3
        k3 *= h
        k3 += carried
        k4 = explicit(t + h * (1 - INSET), half(k3))
        k2 *= 2
        k2 += k1
        k4 += half(k2)
        k4 *= h / 6
        z[:] = self._full(z)
        z += k4


def with_push(
    explicit: Callable[[float, np.ndarray], np.ndarray], push: np.ndarray
) -> Callable[[float, np.ndarray], np.ndarray]:
    """Add a constant to a tendency, shape (size,)."""

    def pushed(t, z):
        result = explicit(t, z)
        result += push
        return result

    return pushed
