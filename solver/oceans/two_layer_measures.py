"""What is measured of a two-layer flow: budgets, fields and derived scales.

The functions take the ocean, :class:`eddyshed.solver.oceans.two_layer.TwoLayer`,
whose methods of the same names call them.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from .linear_fields import LinearField, flow_fields
from .two_layer_waves import most_unstable, stiffness

if TYPE_CHECKING:
    from .two_layer import TwoLayer

LAYERS = ("upper", "lower")

BUDGET_UNITS = {
    "energy": ("m2 s-2", "domain-mean energy of the eddies"),
    "potential_energy": ("m2 s-2", "available potential part of the energy"),
    "work": ("m2 s-3", "energy fed by the forcing"),
    "shear_production": ("m2 s-3", "energy drawn from the imposed shear"),
    "bottom_drag": ("m2 s-3", "energy lost to bottom drag (negative)"),
    "dissipation": ("m2 s-3", "energy lost to viscosity (negative)"),
    "enstrophy": ("s-2", "domain-mean potential enstrophy of both layers"),
    "enstrophy_work": ("s-3", "enstrophy fed by the forcing"),
    "enstrophy_production": ("s-3", "enstrophy drawn from the background gradients"),
    "enstrophy_bottom_drag": ("s-3", "enstrophy lost to bottom drag"),
    "enstrophy_dissipation": ("s-3", "enstrophy lost to viscosity (negative)"),
    "upper_enstrophy": ("s-2", "potential enstrophy of the upper layer"),
    "lower_enstrophy": ("s-2", "potential enstrophy of the lower layer"),
}

FIELD_UNITS = {
    f"{layer}_{name}": unit
    for layer in LAYERS
    for name, unit in (("streamfunction", "m2 s-1"), ("vorticity", "s-1"))
}


def budget(ocean: TwoLayer, t: float, z: np.ndarray) -> dict[str, float]:
    """Energy, enstrophies, and every source and sink of both.

    Parameters
    ----------
    ocean : TwoLayer
        The ocean.
    t : float
        Model time [s].
    z : ndarray, shape (size,)

    Returns
    -------
    dict
        Units and meaning as in `BUDGET_UNITS`. The rates in m2 s-3 sum to that
        of the energy, those in s-3 to that of the enstrophy, the mean of the
        layers' weighted by depth. What the shear gives is ``F1 h1 (U1 - U2)
        <psi1 dpsi2/dx>``, a flux of buoyancy across the current; what the
        gradients give, the fluxes of potential vorticity down them (Pedlosky
        1987, chapter 7).
    """
    settings, space = ocean.settings, ocean.space
    psi, forcing = ocean.layers(z), ocean.forcing(t)
    q = ocean.potential_vorticity(psi)
    (h1, h2), (f1, _) = settings.fractions, settings.coupling

    def mean(a, b):
        return np.sum(space.norm * a * b, axis=-1)

    northward = np.stack([space.ddx(layer) for layer in psi])
    weights = np.array([h1, h2])
    step = psi[0] - psi[1]
    spread = space.k_squared * psi[1]
    losses = ocean.dissipation * np.square(z.reshape(2, -1))
    stiff = stiffness(settings, space.k_squared)
    enstrophies = mean(q, q) / 2
    flux_down = -mean(q, northward) * settings.gradients
    return {
        "energy": float(z @ z / 2),
        "potential_energy": float(f1 * h1 * mean(step, step) / 2),
        "work": float(forcing @ z),
        "shear_production": float(
            f1 * h1 * settings.shear * mean(psi[0], northward[1])
        ),
        "bottom_drag": float(-settings.drag * h2 * mean(psi[1], spread)),
        "dissipation": float(-losses.sum()),
        "enstrophy": float(weights @ enstrophies),
        "enstrophy_work": float((stiff.ravel() * forcing) @ z),
        "enstrophy_production": float(weights @ flux_down),
        "enstrophy_bottom_drag": float(settings.drag * h2 * mean(q[1], spread)),
        "enstrophy_dissipation": float(-(stiff * losses).sum()),
        "upper_enstrophy": float(enstrophies[0]),
        "lower_enstrophy": float(enstrophies[1]),
    }


def fields(ocean: TwoLayer, z: np.ndarray) -> dict[str, np.ndarray]:
    """Streamfunction and relative vorticity on the grid, each of shape (ny, nx)."""
    space = ocean.space
    return {
        f"{layer}_{name}": space.to_grid(field)
        for layer, psi in zip(LAYERS, ocean.layers(z), strict=True)
        for name, field in (
            ("streamfunction", psi),
            ("vorticity", -space.k_squared * psi),
        )
    }


def largest_speed(ocean: TwoLayer, z: np.ndarray) -> float:
    """Largest of |u|/dx + |v|/dy in either layer [s-1], without the currents."""
    (nx, ny), (lx, ly) = ocean.space.points, ocean.space.lengths
    flows = (ocean.space.velocity(psi) for psi in ocean.layers(z))
    return max(float(np.max(abs(u) * (nx / lx) + abs(v) * (ny / ly))) for u, v in flows)


def scales(ocean: TwoLayer) -> Iterator[tuple[str, float, str]]:
    """Scales of the settings and the grid as (name, value, unit)."""
    settings, space = ocean.settings, ocean.space
    sizes = zip(space.lengths, space.points, strict=True)
    upper, lower = settings.coupling
    yield "grid spacing", max(length / n for length, n in sizes), "m"
    shortest = 2 * np.pi / math.sqrt(space.k_squared.max())
    yield "shortest wavelength kept", shortest, "m"
    yield "baroclinic deformation radius", settings.deformation_radius, "m"
    yield "deformation radius of the upper layer", upper**-0.5, "m"
    yield "deformation radius of the lower layer", lower**-0.5, "m"
    across = np.maximum(space.k_squared - space.wavenumber_x**2, 0)
    wavelength, rate = most_unstable(settings, math.sqrt(across.min()), ocean.edge)
    if rate > 0:
        yield "most unstable wavelength", wavelength, "m"
        yield "e-folding time of the most unstable wave", 1 / rate, "s"
    omega = ocean.frequencies()
    growth = float(omega.imag.max())
    # The round-off of a real frequency is no growth.
    if growth > 1e-9 * np.abs(omega).max():
        yield "e-folding time of the fastest growing wave kept", 1 / growth, "s"
    damping = ocean.damping
    if damping.max() > 0:
        yield "shortest damping time", 1 / float(damping.max()), "s"
    if ocean.fastest_frequency > 0:
        yield "shortest wave period", 2 * np.pi / ocean.fastest_frequency, "s"


def scales_of_flow(ocean: TwoLayer, z: np.ndarray) -> Iterator[tuple[str, float, str]]:
    """Scales of the eddies in a state z, shape (size,), as (name, value, unit)."""
    settings, space = ocean.settings, ocean.space
    psi = ocean.layers(z)
    speeds = np.sqrt(np.sum(space.norm * space.k_squared * psi**2, axis=-1))
    vorticities = np.sqrt(np.sum(space.norm * (space.k_squared * psi) ** 2, axis=-1))
    for layer, speed, vorticity in zip(LAYERS, speeds, vorticities, strict=True):
        yield f"rms eddy speed in the {layer} layer", float(speed), "m s-1"
        if vorticity > 0:
            turnover = float(2 * np.pi / vorticity)
            yield f"eddy turnover time in the {layer} layer", turnover, "s"
    barotropic = float(np.linalg.norm(z[: space.n_real]))
    if settings.beta > 0 and barotropic > 0:
        rhines = 2 * np.pi * math.sqrt(barotropic / settings.beta)
        yield "Rhines wavelength of the barotropic flow", rhines, "m"


def linear_fields(ocean: TwoLayer, layers: np.ndarray) -> dict[str, LinearField]:
    """Fields of the eddies in each layer that are linear in the state.

    Parameters
    ----------
    ocean : TwoLayer
        The ocean.
    layers : ndarray, shape (2, 2, n_real)
        What multiplies the state on the way to the layers' streamfunctions.

    Returns
    -------
    dict of str to LinearField
    """
    # The second axis, of the modes, takes the place of several states.
    vorticities = ocean.potential_vorticity(layers.swapaxes(0, 1)).swapaxes(0, 1)
    found = {}
    for layer, psi, vorticity in zip(LAYERS, layers, vorticities, strict=True):
        of_layer = flow_fields(psi, ocean.space.k_squared)
        of_layer["potential_vorticity"] = LinearField(
            unit="s-1", long_name="potential vorticity", weights=vorticity
        )
        for name, field in of_layer.items():
            found[f"{layer}_{name}"] = replace(
                field, long_name=f"{field.long_name} of the {layer} layer"
            )
    return found
