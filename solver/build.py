"""From a config to its ocean: which class stands for which kind."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from .driven import driven_ocean
from .forcing import vorticity_source
from .hooks import Hook
from .oceans.barotropic import Barotropic, BarotropicSettings
from .oceans.barotropic_current import BarotropicCurrent
from .oceans.boussinesq import Boussinesq
from .oceans.boussinesq_waves import BoussinesqSettings
from .oceans.hooked import HookedModel
from .oceans.two_layer import TwoLayer, TwoLayerSettings
from .settings import GridSettings, TruthConfig
from .spaces.basin import Basin
from .spaces.channel import Channel
from .spaces.periodic import Periodic
from .surface_buoyancy import SurfaceBuoyancy, buoyancy_source
from .topography import heights

SPACES: dict[str, Callable[..., Any]] = {
    "periodic": Periodic,
    "channel": Channel,
    "basin": Basin,
}


def build_space(grid: GridSettings) -> Any:
    """Build the space of a grid."""
    return SPACES[grid.space](grid.points, grid.lengths)


def _barotropic(settings, space, patterns):
    """Barotropic ocean over its topography."""
    bottom = None
    if settings.topography:
        bottom = heights(space, settings.topography)
        bottom *= settings.coriolis / settings.depth
    kind = BarotropicCurrent if settings.mean_current_evolves else Barotropic
    return kind(settings, space, vorticity_source(space, patterns), bottom)


def _two_layer(settings, space, patterns):
    """Two-layer ocean, its patterns in the upper layer."""
    return TwoLayer(settings, space, vorticity_source(space, patterns))


def _boussinesq(settings, space, patterns):
    """Boussinesq slice, with sources of vorticity and of buoyancy."""
    heating = {
        name: pattern
        for name, pattern in patterns.items()
        if isinstance(pattern, SurfaceBuoyancy)
    }
    rest = {name: patterns[name] for name in patterns if name not in heating}
    return Boussinesq(
        settings,
        space,
        vorticity_source(space, rest),
        buoyancy_source(space, heating),
    )


# For each class of settings ``build(settings, space, patterns)``.
OCEANS: dict[type, Callable[..., Any]] = {
    BarotropicSettings: _barotropic,
    TwoLayerSettings: _two_layer,
    BoussinesqSettings: _boussinesq,
}


def build_with(config: TruthConfig, patterns: Mapping[str, Any]) -> Any:
    """Build the ocean of a config with some of its forcing.

    Parameters
    ----------
    config : TruthConfig
    patterns : mapping of str to section
        Forcing by name, all taken as steady.

    Raises
    ------
    DataError
        If a pattern does not fit the space, or the space the ocean.
    ContractError
        If a model of the user's own is none.
    """
    if isinstance(config.ocean, Hook):
        return HookedModel(config.ocean)
    build = OCEANS[type(config.ocean)]
    return build(config.ocean, build_space(config.grid), patterns)


def build_ocean(config: TruthConfig) -> Any:
    """Build the ocean that a config describes, with its forcing but the gusts.

    Raises
    ------
    DataError
        If a pattern does not fit the space, or the space the ocean.
    """
    return driven_ocean(config.forcing, lambda patterns: build_with(config, patterns))
