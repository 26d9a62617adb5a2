"""Heating and cooling at the surface of a slice, absorbed over a depth.

Between walls the buoyancy is a sine series in z: it equals the background's at
both ends, so a pattern cannot be imposed at the surface itself. It is imposed
as sunlight is, a flux that enters from above and is absorbed over a depth:

    Q(x, z) = flux / depth cos(k x + phase) exp(-(H - z) / depth)

where H is the height of the surface (exponential absorption: Paulson & Simpson
1977, J. Phys. Oceanogr. 7:952). What diffusion carries out through the surface
is then part of the answer. Its sine series is known in closed form, so that
the source is exact in every mode kept.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from .config import setting
from .errors import DataError
from .time_functions import TimeBehaviour, in_time


@dataclass(frozen=True, slots=True, kw_only=True)
class SurfaceBuoyancy:
    """A buoyancy flux through the surface, ``flux cos(k x + phase)``."""

    flux: float = setting(
        unit="m2 s-3",
        doc="largest downward buoyancy flux: where the cosine is positive buoyancy "
        "is gained, as by heating",
    )
    waves: int = setting(minimum=1, doc="waves per box along the surface")
    depth: float = setting(
        unit="m", above=0, doc="e-folding depth over which the flux is absorbed"
    )
    phase: float = setting(
        default=0.0, doc="phase of the cosine at the origin, in radians"
    )
    time: TimeBehaviour = in_time()


def surface_source(space, pattern: SurfaceBuoyancy) -> np.ndarray:
    """Coefficients of the buoyancy source of a surface pattern.

    Parameters
    ----------
    space : Channel
        Periodic in x, with walls above and below.
    pattern : SurfaceBuoyancy
        The pattern.

    Returns
    -------
    ndarray, shape (n_real,)
        Source [m s-3].

    Raises
    ------
    DataError
        If there are no walls above and below, or the wave or the depth of
        absorption is beyond what the grid keeps.

    Notes
    -----
    With ``q = m pi / H`` and d the depth of absorption, the coefficient of
    ``sin(q z)`` in ``exp(-(H - z) / d)`` is
    ``(2 / H) q ((-1)^(m+1) + exp(-H / d)) / (q^2 + 1 / d^2)``.
    """
    if not space.x_is_periodic or space.y_is_periodic:
        message = 'a surface needs walls above and below; give [grid] space = "channel"'
        raise DataError(message)
    height = space.lengths[1]
    across, up = space.cutoff
    if pattern.waves > across:
        message = (
            f"waves = {pattern.waves} lies beyond the {across} in x that the grid "
            "keeps; choose fewer waves or more points in x"
        )
        raise DataError(message)
    thinnest = height / (math.pi * up)
    if pattern.depth < thinnest:
        message = (
            f"depth = {pattern.depth:.6g} m is {thinnest / pattern.depth:.3g} times "
            f"thinner than the grid keeps in z ({thinnest:.4g} m, the shortest sine's "
            "radian); take that many times more points in z, or a greater depth"
        )
        raise DataError(message)
    m = np.arange(1, up + 1)
    q = m * np.pi / height
    sides = (-1.0) ** (m + 1) + math.exp(-height / pattern.depth)
    series = 2 / height * q * sides / (q**2 + pattern.depth**-2)
    x, z = space.grid_axes
    profile = series @ np.sin(np.outer(q, z))
    along = np.cos(
        2 * np.pi * pattern.waves / space.lengths[0] * x[np.newaxis, :] + pattern.phase
    )
    return space.to_modes(pattern.flux / pattern.depth * profile[:, np.newaxis] * along)


def buoyancy_source(space, patterns: Mapping[str, SurfaceBuoyancy]) -> np.ndarray:
    """Buoyancy source of all surface patterns together.

    Parameters
    ----------
    space : Channel
        Any space, if there are no patterns.
    patterns : mapping of str to SurfaceBuoyancy
        By name.

    Returns
    -------
    ndarray, shape (n_real,)
        Source [m s-3].

    Raises
    ------
    DataError
        If a pattern does not fit the space.
    """
    source = np.zeros(space.n_real)
    for name, pattern in patterns.items():
        try:
            source += surface_source(space, pattern)
        except DataError as error:
            message = f"[forcing.{name}] {error}"
            raise DataError(message) from error
    return source
