"""The largest step at which the linear waves of an ocean do not grow by themselves.

Oceans treat friction exactly in time, and of their waves those that belong to one
wavenumber. What is left of the linear part, beta in a basin and topography
everywhere, couples all modes and is stepped by Runge-Kutta. It does no work, so
what grows under linear steps is the scheme's own making, and is known before a run.

Where nothing else turns or damps the waves the limit is that of the classical
method on the imaginary axis: a turn of ``2 sqrt(2)`` in a step (Hairer & Wanner,
Solving Ordinary Differential Equations II, section IV.2). With waves that are
turned exactly in between it lies lower, with friction higher; so the step itself
is tried, without forcing and advection.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any, Protocol

import numpy as np

from .errors import DataError

# Radians that the fastest wave may turn by in a step before a trial is worth its
# time. The schemes differ from exact steps by the sixth power of it over a hundred.
ACCURATE = 1.0
# Growth in a step that is refused. What grows more slowly would take a thousand
# steps to show, and is too slow for the iteration as well.
GROWTH = 1e-3
STEPS = 200  # of a trial; its last third is looked at
CERTAIN = 20.0  # logarithm of a growth after which a trial need not go on
SHORTER = 0.7  # factor by which the step is shortened in search of one that would do
HALVINGS = 5  # of the last interval, 0.3 of the step: to a percent


class Stepping(Protocol):
    """A scheme bound to an ocean and a step."""

    def advance(self, t: float, z: np.ndarray) -> None:
        """Advance a state by one step, in place."""


Scheme = Callable[[Any, float], Stepping]


class LinearWaves:
    """An ocean without forcing and advection, stepped as the ocean is.

    Parameters
    ----------
    ocean : ocean
        With a part `explicit_linear` of its linear operator.
    """

    def __init__(self, ocean: Any):
        self.exact_flow = ocean.exact_flow
        self.linear_function = ocean.linear_function
        self._part = ocean.explicit_linear

    def explicit(self, t: float, z: np.ndarray) -> np.ndarray:
        """The linear part that is stepped explicitly, shape (size,)."""
        return self._part(z)


def growth_in_a_step(scheme: Scheme, ocean: Any, step: float) -> float:
    """Logarithm of the factor by which the fastest growing linear wave grows.

    Parameters
    ----------
    scheme : callable
        ``scheme(ocean, step)`` makes the stepper.
    ocean : ocean
    step : float
        Time step [s].

    Returns
    -------
    float
        Of a power iteration with the scheme's own linear step, a mean over the last
        third of 200 steps, or of fewer where it grows fast: what is left of other
        waves makes it too small, if anything. Negative if all waves decay.
    """
    stepper = scheme(LinearWaves(ocean), step)
    # No symmetry of the ocean that could hide a direction from the iteration.
    z = np.cos(np.sqrt(2.0) * np.arange(1, ocean.size + 1))
    gained = []
    for _ in range(STEPS):
        stepper.advance(0.0, z)
        norm = float(np.linalg.norm(z))
        if norm == 0:
            return -math.inf
        gained.append(math.log(norm))
        z /= norm
        if sum(gained) > CERTAIN:
            break
    return float(np.mean(gained[-max(1, len(gained) // 3) :]))


def refuse_unstable_step(scheme: Scheme, ocean: Any, step: float) -> None:
    """Refuse a step at which linear waves would grow by themselves.

    Parameters
    ----------
    scheme : callable
        ``scheme(ocean, step)`` makes the stepper.
    ocean : ocean
    step : float
        Time step [s].

    Raises
    ------
    DataError
        With the largest step that would do.

    Notes
    -----
    How far the flow itself is carried in a step is not known before a run, and no
    part of this.
    """
    explicit = getattr(ocean, "explicit_linear", None)
    if explicit is None or explicit(np.zeros(ocean.size)) is None:
        return
    if ocean.fastest_frequency * step <= ACCURATE:
        return
    growth = growth_in_a_step(scheme, ocean, step)
    if growth <= GROWTH:
        return
    longest = _largest_stable(scheme, ocean, step)
    message = (
        f"[time] step = {step:.6g} s is beyond the limit of stability: linear waves, "
        "which beta in a basin or topography couples, would grow by "
        f"{100 * math.expm1(growth):.2g} % in each step; take at most {longest:.6g} s"
    )
    raise DataError(message)


def _largest_stable(scheme, ocean, step):
    """A step just below the limit, to three digits [s]."""

    def grows(length):
        accurate = ocean.fastest_frequency * length <= ACCURATE
        return not accurate and growth_in_a_step(scheme, ocean, length) > GROWTH

    above = below = step
    while grows(below):
        above, below = below, SHORTER * below
    for _ in range(HALVINGS):
        middle = (above + below) / 2
        above, below = (middle, below) if grows(middle) else (above, middle)
    unit = 10.0 ** (math.floor(math.log10(below)) - 2)
    return math.floor(below / unit) * unit
