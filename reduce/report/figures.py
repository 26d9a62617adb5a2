"""Everything that can be drawn; importing it needs matplotlib."""

from __future__ import annotations

from .figures_flow import energy, flow, spectrum
from .figures_models import correlations, distributions, noise, noise_correlations

__all__ = [
    "correlations",
    "distributions",
    "energy",
    "flow",
    "noise",
    "noise_correlations",
    "spectrum",
]
