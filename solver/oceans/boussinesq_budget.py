"""What makes and what takes the energy and the enstrophy of the Boussinesq slice."""

from __future__ import annotations

from typing import Any

import numpy as np

from .boussinesq_waves import BoussinesqSettings

UNITS = {
    "energy": ("m2 s-2", "domain-mean energy"),
    "kinetic_energy": ("m2 s-2", "kinetic part of the energy"),
    "enstrophy": ("s-2", "domain-mean enstrophy"),
    "work": ("m2 s-3", "energy fed by the forcing"),
    "lifting": ("m2 s-3", "kinetic energy made by rising buoyancy"),
    "stratification": (
        "m2 s-3",
        "buoyancy part of the energy made by moving the background",
    ),
    "viscous_dissipation": ("m2 s-3", "energy lost to viscosity (negative)"),
    "diffusive_dissipation": ("m2 s-3", "energy lost to diffusion (negative)"),
    "enstrophy_work": ("s-3", "enstrophy fed by the forcing"),
    "enstrophy_exchange": ("s-3", "enstrophy made by buoyancy and rotation"),
    "enstrophy_dissipation": ("s-3", "enstrophy lost to viscosity (negative)"),
}
NUSSELT = {"nusselt_number": ("1", "Nusselt number")}


def has_nusselt_number(settings: BoussinesqSettings) -> bool:
    """Whether diffusion carries buoyancy at rest, to compare a flux with."""
    return settings.diffusivity > 0 and settings.buoyancy_gradient != 0


def units_of_budget(settings: BoussinesqSettings) -> dict[str, tuple[str, str]]:
    """Units and long name of each number of the budget."""
    return UNITS | (NUSSELT if has_nusselt_number(settings) else {})


def budget_of_state(ocean: Any, t: float, z: np.ndarray) -> dict[str, float]:
    """Energy and enstrophy of a state, with all their sources and sinks.

    Parameters
    ----------
    ocean : Boussinesq
    t : float
        Model time [s].
    z : ndarray, shape (size,)

    Returns
    -------
    dict
        As :func:`units_of_budget` says. Those in m2 s-3 sum to the rate of
        change of the energy, those in s-3 to that of the enstrophy.
    """
    settings, k_squared = ocean.settings, ocean.space.k_squared
    n = len(k_squared)
    forcing, damping = ocean.forcing(t), ocean.damping
    power = z * z
    energies = power.reshape(-1, n).sum(axis=-1) / 2
    losses = (damping * power).reshape(-1, n).sum(axis=-1)
    flow, spin = z[:n], k_squared * z[:n]
    exchange = ocean.linear(z)[:n] + damping[:n] * flow
    flux = ocean.heat_flux(z)
    found = {
        "energy": energies.sum(),
        "kinetic_energy": energies.sum() - energies[1],
        "enstrophy": spin @ flow / 2,
        "work": forcing @ z,
        "lifting": flux,
        "stratification": -settings.buoyancy_gradient / settings.weight**2 * flux,
        "viscous_dissipation": losses[1] - losses.sum(),
        "diffusive_dissipation": -losses[1],
        "enstrophy_work": spin @ forcing[:n],
        "enstrophy_exchange": spin @ exchange,
        "enstrophy_dissipation": -spin @ (damping[:n] * flow),
    }
    if has_nusselt_number(settings):
        found["nusselt_number"] = ocean.nusselt_number(z)
    return {name: float(value) for name, value in found.items()}
