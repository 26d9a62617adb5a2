"""Random stirring, white in time, on a ring of wavenumbers.

It has no value at an instant and so is no part of F: it is added to the state
between steps.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from .config import setting
from .errors import DataError


class Coordinates(Protocol):
    """What is needed of an ocean whose coordinates are orthonormal in energy."""

    waves: np.ndarray
    damping: np.ndarray


@dataclass(frozen=True, slots=True, kw_only=True)
class Stirring:
    """Random source, white in time, on a ring of wavenumbers."""

    energy_rate: float = setting(
        unit="m2 s-3", above=0, doc="mean rate at which stirring feeds energy"
    )
    band: tuple[float, float] = setting(
        minimum=0,
        doc="smallest and largest total wavenumber stirred, in waves per box (half "
        "waves between walls)",
    )

    def problems(self):
        """Rules that go across keys."""
        if self.band[0] > self.band[1]:
            yield f"band = {list(self.band)} runs downwards; give the smaller first"


def band_coordinates(waves: np.ndarray, band: tuple[float, float]) -> np.ndarray:
    """Coordinates whose total wavenumber lies in a closed band.

    Parameters
    ----------
    waves : ndarray of int, shape (size, 2)
        Waves per box of each coordinate, half waves between walls.
    band : tuple of float
        Smallest and largest total wavenumber.

    Returns
    -------
    ndarray of int
        Their indices.

    Raises
    ------
    DataError
        If there is none.
    """
    total = np.hypot(*waves.T)
    # A bound such as 5 must hold sqrt(3^2 + 4^2), whatever its last bit.
    inside = np.flatnonzero((total >= band[0] - 1e-9) & (total <= band[1] + 1e-9))
    if not len(inside):
        message = (
            f"band = {list(band)} holds no wave of this grid ({total.min():.4g} to "
            f"{total.max():.4g} waves per box); widen it"
        )
        raise DataError(message)
    return inside


class StirringNoise:
    """Increments of the stirring over one step, as exact as the linear part.

    Parameters
    ----------
    ocean : Coordinates
        Its wavenumbers and linear damping rates [s-1].
    stirring : Stirring
        Energy rate and band.
    step : float
        Time step [s].

    Raises
    ------
    DataError
        If no coordinate lies in the band.

    Notes
    -----
    Energy is fed at equal mean rate to every coordinate of the band. Each
    increment has the variance that a damped oscillator driven by white noise
    gathers over a step, ``s^2 (1 - exp(-2 g h)) / (2 g)``. Where the linear
    operator does no more than damp and turn single waves, a linear run is
    thereby an exact sample of the continuous process (Gardiner, Handbook of
    Stochastic Methods, chapter 4); where it couples coordinates, and with
    advection, the scheme is of weak order one in the step.
    """

    def __init__(self, ocean: Coordinates, stirring: Stirring, step: float):
        self._where = band_coordinates(ocean.waves, stirring.band)
        # Energy is z.z/2, so each coordinate gets the rate s^2 / 2.
        intensity = 2 * stirring.energy_rate / len(self._where)
        growth = -2 * ocean.damping[self._where] * step
        gathered = step * np.where(
            growth == 0, 1.0, np.expm1(growth) / np.where(growth == 0, 1.0, growth)
        )
        self._deviation = np.sqrt(intensity * gathered)

    def add(self, z: np.ndarray, rng: np.random.Generator) -> float:
        """Add one step's increment to a state, in place.

        Parameters
        ----------
        z : ndarray, shape (size,)
        rng : numpy.random.Generator

        Returns
        -------
        float
            The energy that it fed [m2 s-2].
        """
        kick = self._deviation * rng.standard_normal(len(self._where))
        before = z[self._where]
        z[self._where] += kick
        return math.fsum((kick @ before, (kick @ kick) / 2))
