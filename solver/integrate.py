"""The loop: a generator that advances a state and stops when it goes wrong."""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np

from .errors import Blowup
from .stepping import Stepper

CHECK_EVERY = 50  # steps; costs under a percent of a step and loses little work


def integrate(
    stepper: Stepper,
    z: np.ndarray,
    *,
    first_step: int,
    last_step: int,
    energy_bound: float,
    push: Callable[[np.ndarray], np.ndarray | None] | None = None,
    stir: Callable[[np.ndarray], None] | None = None,
) -> Iterator[int]:
    """Advance a state step by step.

    Parameters
    ----------
    stepper : Stepper
        The scheme, its step included.
    z : ndarray, shape (size,)
        The state at `first_step`; changed in place.
    first_step, last_step : int
        Steps counted from the start of the run, whose time is zero.
    energy_bound : float
        Energy [m2 s-2] beyond which the run counts as blown up.
    push : callable, optional
        Called with the state before each step; what it returns is added to the
        tendency all through the step.
    stir : callable, optional
        Called with the state after each step to add a random increment.

    Yields
    ------
    int
        The number of the step that was just completed.

    Raises
    ------
    Blowup
        If the state is not finite or its energy exceeds the bound; looked at
        every 50 steps.
    """
    for step in range(first_step + 1, last_step + 1):
        # Time is a product, not a running sum: a resumed run sees the same bits.
        added = None if push is None else push(z)
        stepper.advance((step - 1) * stepper.step, z, added)
        if stir is not None:
            stir(z)
        if step % CHECK_EVERY == 0 or step == last_step:
            guard(z, step, stepper.step, energy_bound)
        yield step


def guard(z: np.ndarray, step: int, interval: float, energy_bound: float) -> None:
    """Stop a run whose state has left the finite numbers or its energy bound.

    Parameters
    ----------
    z : ndarray, shape (size,)
        The state, in energy-orthonormal coordinates.
    step : int
        Its step.
    interval : float
        Time step [s].
    energy_bound : float
        Largest energy allowed [m2 s-2].

    Raises
    ------
    Blowup
        If that is so.
    """
    energy = float(z @ z) / 2
    if energy <= energy_bound:  # false for NaN as well
        return
    what = f"truth run blew up: energy {energy:.4g} m2 s-2"
    if np.isfinite(energy):
        what += f", above the bound {energy_bound:.4g} m2 s-2,"
    raise Blowup(what, step, step * interval, "")
