"""Figures of the scales of the flow: spectra and fluxes; needs matplotlib.

Each function returns a data URI for the page; see `eddyshed.reduce.report.canvas`.
"""

from __future__ import annotations

import numpy as np
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

from ..flow.parts import Flux, Spectrum, ZonalSpectrum
from .canvas import (
    BAND,
    HUES,
    TRUTH,
    closure_style,
    drawn,
    in_math,
    length_unit,
    letter,
    logarithmic,
    power_of_ten,
    scaled_unit,
)


def spectra(
    found: Spectrum, zonal: ZonalSpectrum | None, last: int, length: float
) -> str:
    """Energy by wavenumber, on logarithmic axes.

    Parameters
    ----------
    found : Spectrum
    zonal : ZonalSpectrum or None
    last : int
        Rings that are drawn.
    length : float
        Longer side of the box [m].
    """
    scale, name = length_unit(length)
    curves = [("all", found.wavenumber, found.energy, found.energy_error, found.width)]
    if len(found.names) > 1:
        curves += [
            (part, found.wavenumber, value, error, found.width)
            for part, value, error in zip(
                found.names, found.part, found.part_error, strict=True
            )
        ]
    if zonal is not None:
        curves.append(
            (
                "does not vary in x",
                zonal.wavenumber,
                zonal.energy,
                zonal.energy_error,
                zonal.width,
            )
        )

    def draw(figure):
        axes = figure.subplots()
        for index, (label, wavenumber, energy, error, width) in enumerate(curves):
            shown = (energy > 0) & (wavenumber < (last - 0.5) * found.width)
            x, y = wavenumber[shown] * scale, energy[shown] / width
            spread = 2 * np.where(np.isfinite(error[shown]), error[shown], 0.0) / width
            style = closure_style(index - 1) if index else {"color": TRUTH}
            style |= {"markevery": 1, "marker": style.get("marker", "o")}
            # Down to a hundredth where the band would reach below zero.
            axes.fill_between(
                x, np.maximum(y - spread, y / 100), y + spread, color=BAND, linewidth=0
            )
            axes.plot(x, y, label=label, linewidth=1.0, **style)
        if found.slope_from > 0:
            part = slice(found.slope_from, found.slope_to + 1)
            x = found.wavenumber[part]
            y = found.energy[part] / found.width
            level = np.exp(np.mean(np.log(y) - found.slope * np.log(x)))
            axes.plot(
                x * scale,
                3 * level * x**found.slope,
                color=TRUTH,
                linewidth=0.7,
                dashes=(1, 1.5),
                label=f"power law, {found.slope:.2f}",
            )
        _mark_whole(axes, found.width * scale, last, found.complete)
        # Said here, for a flow at rest has no point on logarithmic axes.
        edge = found.width * scale
        axes.set_xlim(0.9 * edge, 1.05 * max(last - 1, 2) * edge)
        _wavenumber_axes(axes, scale, name)
        if np.any(found.energy > 0):
            axes.set_yscale("log")
        axes.set_ylabel(f"energy density [{in_math('m3 s-2')}]")
        if len(curves) > 1 or found.slope_from > 0:
            axes.legend()

    return drawn(3.4, draw)


def fluxes(found: dict[str, Flux], last: int, complete: int, length: float) -> str:
    """What advection carries across each wavenumber, a panel for each quantity.

    Parameters
    ----------
    found : dict of Flux
        By name.
    last, complete : int
        Rings that are drawn, and those that the truncation leaves whole.
    length : float
        Longer side of the box [m].
    """
    scale, name = length_unit(length)

    def draw(figure):
        panels = figure.subplots(len(found), 1, sharex=True, squeeze=False)[:, 0]
        for index, (axes, (label, shown)) in enumerate(
            zip(panels, found.items(), strict=True)
        ):
            x, y = shown.wavenumber[:last] * scale, shown.flux[:last]
            error = shown.flux_error[:last]
            spread = 2 * np.where(np.isfinite(error), error, 0.0)
            exponent = power_of_ten(y)
            factor = 10.0**-exponent
            axes.axhline(0, color=TRUTH, linewidth=0.6)
            axes.fill_between(
                x, (y - spread) * factor, (y + spread) * factor, color=BAND, linewidth=0
            )
            axes.plot(x, y * factor, color=HUES[index], marker="os"[index])
            axes.set_ylabel(f"{label} flux\n[{scaled_unit(exponent, shown.units)}]")
            axes.set_title(letter(index))
            _mark_whole(axes, 2 * x[0], last, complete)
            _wavenumber_axes(axes, scale, name, top=index == 0)
            if index < len(found) - 1:
                axes.set_xlabel("")
        figure.align_ylabels()

    return drawn(0.9 + 1.7 * len(found), draw)


def _mark_whole(axes, width, last, complete):
    """A line where the truncation begins to cut the rings, if that is in sight."""
    if last > complete:
        axes.axvline((complete - 0.5) * width, color=TRUTH, linewidth=0.7, ls=":")


def _wavenumber_axes(axes, scale, name, *, top=True):
    """Wavenumbers below, wavelengths above, both logarithmic."""
    logarithmic(axes.xaxis)
    axes.set_xlabel(f"total wavenumber [rad {in_math(f'{name}-1')}]")
    if top:

        def turned(x):
            # Matplotlib also asks for zero, which is not on a logarithmic axis.
            return 2 * np.pi / np.maximum(x, 1e-30)

        above = axes.secondary_xaxis("top", functions=(turned, turned))
        above.set_xlabel(f"wavelength [{name}]")
        above.xaxis.set_major_locator(LogLocator(subs=(1, 2, 5)))
        above.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
        above.xaxis.set_minor_formatter(NullFormatter())
