"""Parameters of the barotropic ocean, and the friction that they make."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..config import setting
from ..topography import TOPOGRAPHY_KINDS, Topography


@dataclass(frozen=True, slots=True, kw_only=True)
class BarotropicSettings:
    """Parameters of the barotropic ocean, in SI units."""

    beta: float = setting(
        unit="m-1 s-1",
        default=0.0,
        doc="northward gradient of the Coriolis parameter",
    )
    deformation_radius: float = setting(
        unit="m",
        default=math.inf,
        above=0,
        infinite=True,
        doc='radius of deformation Ld; "inf" for a rigid lid',
    )
    drag: float = setting(
        unit="s-1", default=0.0, minimum=0, doc="linear drag on the vorticity"
    )
    viscosity: float = setting(
        unit="m2 s-1", default=0.0, minimum=0, doc="lateral viscosity"
    )
    hyperviscosity_time: float = setting(
        unit="s",
        default=math.inf,
        above=0,
        infinite=True,
        doc="e-folding time of hyperviscosity at the largest wavenumber that the "
        'grid keeps along x or y, whichever is smaller; "inf" for none',
    )
    hyperviscosity_order: int = setting(
        default=8,
        choices=(4, 6, 8, 10, 12, 16),
        doc="power of the wavenumber with which the rate of hyperviscosity grows",
    )
    mean_current: float = setting(
        unit="m s-1",
        default=0.0,
        doc="uniform current along x that is imposed and carries the rest; not in "
        "a basin. With mean_current_evolves that of the start",
    )
    mean_current_evolves: bool = setting(
        default=False,
        doc="the mean current is part of the flow: driven, damped, and slowed or "
        "sped up by the pressure on topography; periodic space and rigid lid only",
    )
    mean_current_drag: float = setting(
        unit="s-1",
        default=0.0,
        minimum=0,
        doc="linear drag on a mean current that evolves",
    )
    mean_current_drive: float = setting(
        unit="m s-2",
        default=0.0,
        doc="steady acceleration along x of a mean current that evolves",
    )
    coriolis: float | None = setting(
        unit="s-1",
        default=None,
        doc="Coriolis parameter; needed with topography only",
    )
    depth: float | None = setting(
        unit="m", default=None, above=0, doc="mean depth; needed with topography only"
    )
    topography: dict[str, Topography] = setting(
        default=dict,
        kinds=TOPOGRAPHY_KINDS,
        doc="shapes of the bottom, each under a name of its own; they add up",
    )

    def problems(self):
        """Rules that go across keys."""
        if self.mean_current_evolves and math.isfinite(self.deformation_radius):
            yield (
                "mean_current_evolves needs a rigid lid: under a free surface a "
                "change of the current moves water across the box, which does not "
                "repeat; leave out deformation_radius"
            )
        if not self.mean_current_evolves:
            for name in ("mean_current_drag", "mean_current_drive"):
                if getattr(self, name) != 0:
                    yield (
                        f"{name} has no meaning for a current that is imposed; set "
                        "mean_current_evolves = true or leave it out"
                    )
        if self.topography:
            examples = {"coriolis": "1e-4 s-1", "depth": "4 km"}
            for name, value in examples.items():
                if getattr(self, name) is None:
                    yield (
                        f"{name} is missing: with topography it is needed; e.g. "
                        f'{name} = "{value}"'
                    )


def friction(settings: BarotropicSettings, space) -> np.ndarray:
    """Damping rate of the relative vorticity [s-1], shape (n_real,).

    Parameters
    ----------
    settings : BarotropicSettings
    space : Periodic, Channel or Basin
    """
    k2 = space.k_squared
    edge = min(
        np.pi * (2 if periodic else 1) * cutoff / length
        for periodic, cutoff, length in zip(
            (space.x_is_periodic, space.y_is_periodic),
            space.cutoff,
            space.lengths,
            strict=True,
        )
    )
    steep = (k2 / edge**2) ** (settings.hyperviscosity_order // 2)
    return (
        settings.drag + settings.viscosity * k2 + steep / settings.hyperviscosity_time
    )
