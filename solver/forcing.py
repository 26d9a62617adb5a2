"""Steady sources of vorticity: what drives an ocean at a given time."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from .config import setting
from .errors import DataError
from .time_functions import TimeBehaviour, in_time


@dataclass(frozen=True, slots=True, kw_only=True)
class Wave:
    """A wave of vorticity source, ``amplitude cos(k.x + phase)``.

    Between walls the cosine is a sine of whole half waves: in a channel the
    pattern is ``amplitude cos(k x + phase) sin(l y)``, in a basin
    ``amplitude sin(k x) sin(l y)``.
    """

    amplitude: float = setting(unit="s-2", doc="largest vorticity source")
    waves: tuple[int, int] = setting(
        doc="waves per box in x and y, half waves between walls; not both zero"
    )
    phase: float = setting(
        default=0.0,
        doc="phase of the cosine at the origin, in radians; none between walls in x",
    )
    time: TimeBehaviour = in_time()

    def problems(self):
        """Rules that go across keys."""
        if self.waves == (0, 0):
            yield "waves = [0, 0] is a source without curl; give at least one wave"


@dataclass(frozen=True, slots=True, kw_only=True)
class Wind:
    """An eastward wind stress that varies with y alone, ``-stress cos(l y)``.

    One half wave between walls drives one gyre, two a subtropical gyre in the
    south and a subpolar one in the north.
    """

    stress: float = setting(unit="kg m-1 s-2", doc="largest wind stress")
    waves: int = setting(minimum=1, doc="waves per box in y, half waves between walls")
    depth: float = setting(
        unit="m", above=0, doc="depth of the layer that the wind drives"
    )
    density: float = setting(
        unit="kg m-3", default=1025.0, above=0, doc="density of the water"
    )
    time: TimeBehaviour = in_time()


def vorticity_source(space: Any, patterns: Mapping[str, Wave | Wind]) -> np.ndarray:
    """Vorticity source of all patterns together.

    Parameters
    ----------
    space : Periodic, Channel or Basin
    patterns : mapping of str to Wave or Wind
        By name.

    Returns
    -------
    ndarray, shape (n_real,)
        Exact Galerkin coefficients of the source [s-2].

    Raises
    ------
    DataError
        If a pattern does not fit the space.
    """
    source = np.zeros(space.n_real)
    for name, pattern in patterns.items():
        try:
            if isinstance(pattern, Wind):
                source += _curl(space, pattern) * space.sine_in_y(pattern.waves)
            else:
                source += pattern.amplitude * space.wave(pattern.waves, pattern.phase)
        except DataError as error:
            message = f"[forcing.{name}] {error}"
            raise DataError(message) from error
    return source


def _curl(space, wind):
    """Amplitude of the curl of the stress per unit depth and density [s-2]."""
    waves = wind.waves * (2 if space.y_is_periodic else 1)
    wavenumber = math.pi * waves / space.lengths[1]
    return -wind.stress * wavenumber / (wind.density * wind.depth)
