"""Derived scales of the Boussinesq slice and of a flow in it."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping

import numpy as np

from .boussinesq_waves import (
    BoussinesqSettings,
    critical_rayleigh_number,
    linear_blocks,
    rates,
    rayleigh_number,
)

Scale = tuple[str, float, str]
ROUND_OFF = 1e-9  # of the largest rate: what is smaller is no growth


def scales_of_settings(
    settings: BoussinesqSettings, space, k: np.ndarray, m: np.ndarray
) -> Iterator[Scale]:
    """Scales that need no flow.

    Parameters
    ----------
    settings : BoussinesqSettings
        Physical parameters.
    space : Periodic or Channel
        The slice.
    k, m : ndarray, shape (n_real,)
        Wavenumbers in x and z [m-1].

    Yields
    ------
    (str, float, str)
        Name, value and SI unit.

    Notes
    -----
    The viscous-buoyancy length ``(viscosity diffusivity / |N2|)^(1/4)`` is the
    depth over the fourth root of the Rayleigh number: a layer this thick has
    the Rayleigh number 1, and a wave this short is damped within its period.
    The thermal boundary layer is an estimate: the Nusselt number grows with the
    cube root of the Rayleigh number and is 1 at the critical one, which keeps
    the layer marginally stable (Malkus 1954, Proc. R. Soc. A 225:196), and
    half the temperature drop falls across each layer.
    """
    depth, gradient = space.lengths[1], settings.buoyancy_gradient
    spacing = max(
        length / n for length, n in zip(space.lengths, space.points, strict=True)
    )
    shortest = 2 * math.pi / math.sqrt(space.k_squared.max())
    yield "grid spacing", spacing, "m"
    yield "shortest wavelength kept", shortest, "m"
    dissipative = settings.viscosity > 0 and settings.diffusivity > 0
    if settings.diffusivity > 0:
        yield "Prandtl number", settings.viscosity / settings.diffusivity, "1"
    if dissipative and gradient != 0:
        rayleigh = rayleigh_number(settings, depth)
        yield "Rayleigh number", rayleigh, "1"
        both = settings.viscosity * settings.diffusivity
        yield "viscous-buoyancy length", (both / abs(gradient)) ** 0.25, "m"
        if settings.coriolis == 0:
            critical = critical_rayleigh_number(k, m, depth)
            yield "critical Rayleigh number of the waves kept", critical, "1"
            if rayleigh > critical:
                nusselt = (rayleigh / critical) ** (1 / 3)
                yield "thermal boundary layer, estimated", depth / (2 * nusselt), "m"
    waves = np.unique(np.abs(np.stack([k, m], axis=1)), axis=0)
    growth = rates(settings, *waves.T)
    fastest = np.abs(growth.imag).max()
    if fastest > 0:
        yield "shortest internal wave period", 2 * math.pi / float(fastest), "s"
    best = int(np.argmax(growth[:, 0].real))
    if growth[best, 0].real > ROUND_OFF * np.abs(growth).max():
        wavelength = 2 * math.pi / float(np.hypot(*waves[best]))
        yield "most unstable wavelength", wavelength, "m"
        e_folding = 1 / float(growth[best, 0].real)
        yield "e-folding time of the fastest growing wave kept", e_folding, "s"
    damping = -linear_blocks(settings, *waves.T).diagonal(axis1=1, axis2=2)
    if damping.max() > 0:
        yield "shortest damping time", 1 / float(damping.max()), "s"
    if damping.min() > 0:
        yield "longest damping time", 1 / float(damping.min()), "s"


def scales_of_flow(
    settings: BoussinesqSettings, space, budget: Mapping[str, float]
) -> Iterator[Scale]:
    """Scales of a flow.

    Parameters
    ----------
    settings : BoussinesqSettings
        Physical parameters.
    space : Periodic or Channel
        The slice.
    budget : mapping of str to float
        Its budget, as the ocean gives it.

    Yields
    ------
    (str, float, str)
        Name, value and SI unit.
    """
    depth = space.lengths[1]
    speed = math.sqrt(2 * budget["kinetic_energy"])
    yield "rms speed", speed, "m s-1"
    if settings.viscosity > 0:
        yield "Reynolds number", speed * depth / settings.viscosity, "1"
    if settings.diffusivity > 0:
        yield "Peclet number", speed * depth / settings.diffusivity, "1"
    if settings.buoyancy_gradient > 0:
        frequency = math.sqrt(settings.buoyancy_gradient)
        yield "internal Froude number", speed / (frequency * depth), "1"
    if budget["enstrophy"] > 0:
        turnover = 2 * math.pi / math.sqrt(2 * budget["enstrophy"])
        yield "eddy turnover time", turnover, "s"
    nusselt = budget.get("nusselt_number", 0.0)
    if settings.buoyancy_gradient < 0 and nusselt > 0:
        yield "Nusselt number", nusselt, "1"
        yield "thermal boundary layer", depth / (2 * nusselt), "m"
