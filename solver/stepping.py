"""Time stepping with the diagonal linear part treated exactly."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np


class IntegratingFactorRK4:
    r"""Classical Runge-Kutta of order four for ``exp(-L t) c``.

    Parameters
    ----------
    exponents : ndarray of complex, shape (n_modes,)
        The diagonal linear operator L [s-1].
    explicit : callable
        ``explicit(t, modes)`` returns the rest of the tendency.
    step : float
        Time step h [s].

    Notes
    -----
    For ``dc/dt = L c + N(t, c)`` the variable ``exp(-L t) c`` has no linear
    part left; the classical method applied to it, written back for c (for
    example Canuto, Hussaini, Quarteroni & Zang, Spectral Methods in Fluid
    Dynamics, 1988), is exact when N = 0 and of order four in h. On the
    advection alone it has the stability of the classical method, 2.83 / h on
    the imaginary axis.
    """

    order = 4

    def __init__(
        self,
        exponents: np.ndarray,
        explicit: Callable[[float, np.ndarray], np.ndarray],
        step: float,
    ):
        self.step = step
        self._explicit = explicit
        self._half = np.exp(exponents * (step / 2))
        self._full = np.exp(exponents * step)

    def advance(self, t: float, modes: np.ndarray) -> None:
        """Advance a state by one step, in place.

        Parameters
        ----------
        t : float
            Time at the start of the step [s].
        modes : ndarray of complex, shape (n_modes,)
        """
        h, half, full = self.step, self._half, self._full
        k1 = self._explicit(t, modes)
        rotated = half * modes
        k1 *= half
        k2 = self._explicit(t + h / 2, rotated + (h / 2) * k1)
        k3 = self._explicit(t + h / 2, rotated + (h / 2) * k2)
        k2 += k3
        k3 *= h
        k3 += rotated
        k3 *= half
        k4 = self._explicit(t + h, k3)
        k2 *= 2
        k2 += k1
        k2 *= half
        k2 += k4
        modes *= full
        k2 *= h / 6
        modes += k2
