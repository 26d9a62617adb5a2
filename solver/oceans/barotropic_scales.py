"""Lengths and times of a barotropic ocean, known before a run, and of its flow."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np

Scale = tuple[str, float, str]


def scales_of_settings(ocean: Any) -> Iterator[Scale]:
    """Scales of the ocean itself as (name, value, SI unit).

    Parameters
    ----------
    ocean : Barotropic

    Notes
    -----
    At a western wall drag gives a boundary layer of the width ``drag / beta``
    (Stommel 1948, Trans. AGU 29:202), viscosity one of the width
    ``(viscosity / beta)^(1/3)`` (Munk 1950, J. Meteorol. 7:79).
    """
    settings, space = ocean.settings, ocean.space
    pairs = zip(space.lengths, space.points, strict=True)
    yield "grid spacing", max(length / n for length, n in pairs), "m"
    yield "shortest wavelength kept", 2 * np.pi / math.sqrt(space.k_squared.max()), "m"
    yield "deformation radius", settings.deformation_radius, "m"
    if not space.x_is_periodic and settings.beta > 0:
        if settings.drag > 0:
            yield "Stommel layer width", settings.drag / settings.beta, "m"
        if settings.viscosity > 0:
            width = (settings.viscosity / settings.beta) ** (1 / 3)
            yield "Munk layer width", width, "m"
    if ocean.damping.max() > 0:
        yield "shortest damping time", 1 / float(ocean.damping.max()), "s"
    if ocean.damping.min() > 0:
        yield "longest damping time", 1 / float(ocean.damping.min()), "s"
    if ocean.fastest_frequency > 0:
        yield "shortest wave period", 2 * np.pi / ocean.fastest_frequency, "s"


def scales_of_flow(ocean: Any, z: np.ndarray) -> Iterator[Scale]:
    """Scales of a flow as (name, value, SI unit).

    Parameters
    ----------
    ocean : Barotropic
    z : ndarray, shape (size,)

    Notes
    -----
    The Rhines wavelength is ``2 pi sqrt(U / beta)`` with the rms speed U (Rhines
    1975, J. Fluid Mech. 69:417); the inertial layer at a western wall has the
    width ``sqrt(U / beta)`` (Charney 1955, Proc. Natl. Acad. Sci. 41:731). The
    Reynolds number is that of the rms speed and the larger side of the box.
    """
    settings, space = ocean.settings, ocean.space
    kinetic = space.k_squared * space.norm * ocean.streamfunction(z) ** 2
    speed = math.sqrt(kinetic.sum())
    yield "rms speed", speed, "m s-1"
    if settings.beta > 0 and speed > 0:
        yield "Rhines wavelength", 2 * np.pi * math.sqrt(speed / settings.beta), "m"
        if not space.x_is_periodic:
            yield "inertial layer width", math.sqrt(speed / settings.beta), "m"
    if settings.viscosity > 0:
        yield "Reynolds number", speed * max(space.lengths) / settings.viscosity, "1"
    spin = math.sqrt((space.k_squared * kinetic).sum())
    if spin > 0:
        yield "eddy turnover time", 2 * np.pi / spin, "s"
