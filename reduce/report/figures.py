"""Everything that can be drawn; importing it needs matplotlib."""

from __future__ import annotations

from .figures_audit import abscissa, quantiles, terms
from .figures_flow import energy, flow, over_time, spectrum
from .figures_models import correlations, distributions, noise, noise_correlations
from .figures_scales import fluxes, spectra

__all__ = [
    "abscissa",
    "correlations",
    "distributions",
    "energy",
    "flow",
    "fluxes",
    "noise",
    "noise_correlations",
    "over_time",
    "quantiles",
    "spectra",
    "spectrum",
    "terms",
]
