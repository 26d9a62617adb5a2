"""What drives the ocean: steady patterns (part of F) and random stirring (not).

A pattern is a source of vorticity on the grid's own modes. Stirring is white
in time, so it has no value at an instant and cannot be part of F: it is added
to the state between steps, with a random stream of its own.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from .config import setting
from .errors import DataError
from .spaces.periodic import Periodic


@dataclass(frozen=True, slots=True, kw_only=True)
class Wave:
    """A steady plane wave of vorticity source, ``amplitude cos(k.x + phase)``."""

    amplitude: float = setting(unit="s-2", doc="largest vorticity source")
    waves: tuple[int, int] = setting(doc="waves per box in x and y; not both zero")
    phase: float = setting(
        default=0.0, doc="phase of the cosine at the origin, in radians"
    )

    def problems(self):
        """Rules that go across keys."""
        if self.waves == (0, 0):
            yield "waves = [0, 0] is a source without curl; give at least one wave"


@dataclass(frozen=True, slots=True, kw_only=True)
class Stirring:
    """Random vorticity source, white in time, on a ring of wavenumbers."""

    energy_rate: float = setting(
        unit="m2 s-3", above=0, doc="mean rate at which stirring feeds energy"
    )
    band: tuple[float, float] = setting(
        minimum=0,
        doc="smallest and largest total wavenumber stirred, in waves per box",
    )

    def problems(self):
        """Rules that go across keys."""
        if self.band[0] > self.band[1]:
            yield f"band = {list(self.band)} runs downwards; give the smaller first"


def pattern_source(space: Periodic, wave: Wave) -> np.ndarray:
    """Coefficients of a wave's vorticity source.

    Parameters
    ----------
    space : Periodic
        The box.
    wave : Wave
        The pattern.

    Returns
    -------
    ndarray of complex, shape (n_modes,)
        Source [s-2].

    Raises
    ------
    DataError
        If the wave lies beyond the modes that the grid keeps.
    """
    coefficient = wave.amplitude / 2 * np.exp(1j * wave.phase)
    source = np.zeros(space.n_modes, dtype=complex)
    for sign, value in ((1, coefficient), (-1, coefficient.conjugate())):
        source[np.all(space.waves == sign * np.array(wave.waves), axis=1)] = value
    if not source.any() and wave.amplitude != 0:
        message = (
            f"waves = {list(wave.waves)} lies beyond the modes that the grid keeps, "
            f"{space.cutoff[0]} in x and {space.cutoff[1]} in y; choose fewer waves "
            "or a finer grid"
        )
        raise DataError(message)
    return source


def band_members(space: Periodic, band: tuple[float, float]) -> np.ndarray:
    """Modes whose total wavenumber, in waves per box, lies in a closed band.

    Returns
    -------
    ndarray of bool, shape (n_modes,)

    Raises
    ------
    DataError
        If no mode lies in the band.
    """
    total = np.hypot(*space.waves.T)
    # A bound such as 5 must hold sqrt(3^2 + 4^2), whatever its last bit.
    inside = (total >= band[0] - 1e-9) & (total <= band[1] + 1e-9)
    if not inside.any():
        message = (
            f"band = {list(band)} holds no wave of this grid (1 to "
            f"{math.hypot(*space.cutoff):.4g} waves per box); widen it"
        )
        raise DataError(message)
    return inside


class StirringNoise:
    """Increments of the stirring over one step, as exact as the linear part.

    Parameters
    ----------
    space : Periodic
        The box.
    stirring : Stirring
        Energy rate and band.
    damping : ndarray, shape (n_modes,)
        Linear damping rate of each mode [s-1].
    step : float
        Time step [s].

    Notes
    -----
    Energy is fed at equal mean rate to every coordinate of the band. Each
    increment has the variance that a damped oscillator driven by white noise
    gathers over a step, ``s^2 (1 - exp(-2 g h)) / (2 g)``, so a linear run is
    an exact sample of the continuous process (Gardiner, Handbook of
    Stochastic Methods, chapter 4); with advection the scheme is of weak order
    one in the step.
    """

    def __init__(
        self,
        space: Periodic,
        stirring: Stirring,
        damping: np.ndarray,
        step: float,
    ):
        self._where = np.flatnonzero(band_members(space, stirring.band))
        # Energy z.z/2: each of the 2n real coordinates gets rate s^2 / 2.
        intensity = stirring.energy_rate / len(self._where)
        growth = -2 * damping[self._where] * step
        gathered = step * np.where(
            growth == 0, 1.0, np.expm1(growth) / np.where(growth == 0, 1.0, growth)
        )
        self._deviation = np.sqrt(intensity * gathered)

    def add(self, z: np.ndarray, rng: np.random.Generator) -> None:
        """Add one step's increment to a state, in place.

        Parameters
        ----------
        z : ndarray, shape (size,)
        rng : numpy.random.Generator
        """
        normals = rng.standard_normal(2 * len(self._where)).view(complex)
        z.view(complex)[self._where] += self._deviation * normals
