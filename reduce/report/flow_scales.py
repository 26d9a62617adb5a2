"""Figures of the scales of the flow: spectra, and what passes between scales."""

from __future__ import annotations

import numpy as np

from ..flow.parts import Flow
from .evidence import Evidence
from .markup import Note, listed, number, numbers, span, unit

# Whose errors they are; see `eddyshed.reduce.flow.means.mean_of`.
ERRORS = ", by effective sample size or 20 batch means, whichever is larger"
SHOWN = 16  # rows of a table that stands in for a picture


def scales(note: Note, evidence: Evidence) -> str:
    """Spectra and fluxes."""
    flow, longest = evidence.flow, max(evidence.ocean.space.lengths)
    return "\n".join([_spectra(note, flow, longest), _fluxes(note, flow, longest)])


def _sampling(flow: Flow) -> str:
    """What the spectra and fluxes, and their errors, come from."""
    found = flow.sampling
    members = f" of each of {found.members} members" if found.members > 1 else ""
    if found.sampled == found.recorded:
        return f"Means over all {found.sampled} recorded states{members}"
    return (
        f"Means over {found.sampled} of the {found.recorded} recorded states{members}, "
        f"one every {span(found.interval)}"
    )


def _drawn(found):
    """How many rings are shown: the whole ones, and all but a thousandth of the energy.

    In a box much longer than high the truncation may cut rings that matter.
    """
    share = np.cumsum(found.energy)
    enough = int(np.searchsorted(share, 0.999 * share[-1])) + 1
    return min(max(found.complete, enough), len(share))


def _whole(found, last):
    """Words on how far the rings are whole."""
    if last > found.complete:
        return " Beyond the dotted line the truncation cuts the rings."
    return ""


def _spectra(note, flow, longest):
    """Spectra of the energy: of all, of each part, of what does not vary in x."""
    found, zonal = flow.spectrum, flow.zonal
    parts = ["all (black)"]
    if len(found.names) > 1:
        parts.append(
            f"its parts {listed([f'<em>{name}</em>' for name in found.names])}"
        )
    if zonal is not None:
        parts.append("what does not vary in x, by its wavenumber across")
    law = (
        "No power law is drawn: over no factor of four in wavenumber do eight rings "
        "or more lie within a tenth of one."
    )
    if found.slope_from > 0:
        low, high = (found.wavenumber[k] for k in (found.slope_from, found.slope_to))
        law = (
            f"Dotted, moved up: the power law {number(found.slope, found.slope_error)} "
            f"fitted from {number(low, 0.0)} to {number(high, 0.0)}&nbsp;"
            f"{unit('m-1')}, where all rings lie within a tenth of it."
        )
    last, whole = _drawn(found), float(found.energy.sum())
    cut = float(found.energy[last:].sum()) / whole if whole else 0.0
    peak = int(np.argmax(found.energy))
    long = _length(found.wavenumber[peak]) if peak else "the box"
    return note.figure(
        lambda figures: figures.spectra(found, zonal, last, longest),
        alt="Energy against total wavenumber on logarithmic axes; the largest part, "
        f"{_share(found.energy, peak)} % of the energy, lies at a wavelength of "
        f"{long}.",
        caption=f"Spectrum of the energy: {', '.join(parts)}. The area under a curve "
        f"is its energy. {_sampling(flow)}; grey: two standard errors to either side"
        f"{ERRORS}. Rings of total wavenumber, one spacing wide; beyond "
        f"those shown lie {100 * cut:.1g} % of the energy.{_whole(found, last)} {law}",
        numbers=_spectra_table(found, zonal, last),
    )


def _spectra_table(found, zonal, last):
    """The spectra in numbers."""
    energy = f"[{unit('m2 s-2')}]"
    parts = found.names if len(found.names) > 1 else ()
    heading = [f"wavenumber [{unit('m-1')}]", f"energy {energy}"]
    heading += [f"{name} {energy}" for name in parts]
    # Where both are counted in the same steps they share the rows.
    same = zonal is not None and np.isclose(zonal.width, found.width)
    heading += [f"does not vary in x {energy}"] if same else []
    rows = []
    for k in _chosen(last):
        row = [number(found.wavenumber[k], 0.0)]
        row.append(number(found.energy[k], found.energy_error[k]))
        row += [
            number(found.part[i, k], found.part_error[i, k]) for i in range(len(parts))
        ]
        if same:
            known = k < len(zonal.energy)
            row.append(number(zonal.energy[k], zonal.energy_error[k]) if known else "–")
        rows.append(row)
    table = numbers(heading, rows)
    if zonal is not None and not same:
        table += numbers(
            [f"wavenumber across [{unit('m-1')}]", f"does not vary in x {energy}"],
            [
                [
                    number(zonal.wavenumber[k], 0.0),
                    number(zonal.energy[k], zonal.energy_error[k]),
                ]
                for k in _chosen(len(zonal.energy))
            ],
        )
    return table


def _fluxes(note, flow, longest):
    """Fluxes of energy and enstrophy across each wavenumber."""
    last = _drawn(flow.spectrum)
    words = [_direction(name, found, last) for name, found in flow.flux.items()]
    panels = listed([f"({'ab'[k]}) {name}" for k, name in enumerate(flow.flux)])
    rows = [
        [
            number(flow.flux["energy"].wavenumber[k], 0.0),
            *(number(f.flux[k], f.flux_error[k]) for f in flow.flux.values()),
        ]
        for k in _chosen(last)
    ]
    return note.figure(
        lambda figures: figures.fluxes(
            dict(flow.flux), last, flow.spectrum.complete, longest
        ),
        alt="Flux against total wavenumber, with a line at zero. "
        + " ".join(plain for plain, _ in words),
        caption=f"What advection carries across each total wavenumber: {panels}. "
        "Above zero it goes to smaller scales, below to larger ones; where a curve "
        "falls, advection feeds the scales there. "
        f"{' '.join(html for _, html in words)} {_sampling(flow)}; grey: two standard "
        f"errors to either side{ERRORS}. What forcing, friction and linear terms do is "
        "not in it."
        f"{_whole(flow.spectrum, last)}",
        numbers=numbers(
            [
                f"wavenumber [{unit('m-1')}]",
                *(f"{name} flux [{unit(f.units)}]" for name, f in flow.flux.items()),
            ],
            rows,
        ),
    )


def _direction(name, found, last):
    """Sentence on the largest flux, as text and as HTML."""
    flux = found.flux[:last]
    k = int(np.argmax(np.abs(flux)))
    value, error = flux[k], found.flux_error[k]
    if not abs(value) > 2 * error:
        words = f"The {name} flux is nowhere far from zero, given its error."
        return words, words
    to = "smaller" if value > 0 else "larger"
    at = _length(found.wavenumber[k])
    known = number(value, error)
    return (
        f"The {name} flux is largest at {at}, towards {to} scales.",
        f"The largest flux of {name}, {known}&nbsp;{unit(found.units)}, is that to "
        f"{to} scales at a wavelength of {at}.",
    )


def _length(wavenumber):
    """Wavelength in words."""
    length = 2 * np.pi / wavenumber
    return f"{length / 1e3:.3g} km" if length >= 5e3 else f"{length:.3g} m"


def _share(energy, k):
    """Share of one ring in percent."""
    total = energy.sum()
    return f"{100 * energy[k] / total:.2g}" if total else "0"


def _chosen(count):
    """Rings of a table: all but the first, which holds no wave, or some of many."""
    every = max(1, -(-(count - 1) // SHOWN))
    return range(1, count, every)
