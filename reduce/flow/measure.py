"""Measure a flow along its record, a stretch at a time."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np

from eddyshed.solver.diagnostics import FED, LEVELS, gyres, rates_of
from eddyshed.solver.record import TruthRecord
from eddyshed.solver.spectra import (
    shells,
    spectra_by_part,
    spectral_fluxes,
    zonal_spectrum,
)

from .fields import MAP_POINTS, Finer, fields_of, profile_of
from .means import batch_edges, block_ranges, mean_of
from .parts import (
    Flow,
    Flux,
    MeanBudget,
    Measure,
    Sampling,
    Spectrum,
    ZonalSpectrum,
)

# States that spectra, fluxes and gyres are evaluated on. What eddies forget between
# two of them counts in full, and what remembers longer is not told better by more.
SAMPLES = 1000
BLOCKS = 400  # of a series: as many as a column of print can show
SPAN = 4.0  # a power law is drawn if it holds over such a range of wavenumbers
RINGS = 8  # and as many rings at least: any curve is straight over a few,
STRAIGHT = 0.1  # with none further from it than this, relative
PARTS = {"psi": "flow", "b": "buoyancy", "v": "cross velocity"}
GYRES = {
    "clockwise_gyre": ("m2 s-1", "transport of the clockwise gyre, per depth"),
    "anticlockwise_gyre": (
        "m2 s-1",
        "transport of the anticlockwise gyre, per depth (negative)",
    ),
    "clockwise_boundary_current": (
        "m",
        "width of the western boundary current, clockwise gyre",
    ),
    "anticlockwise_boundary_current": (
        "m",
        "width of the western boundary current, anticlockwise gyre",
    ),
}


def measure_flow(
    ocean: Any,
    records: Sequence[TruthRecord],
    *,
    progress: Callable[[float], None] = lambda done: None,
) -> Flow:
    """Measure what a flow did.

    Parameters
    ----------
    ocean : ocean
        Made the records.
    records : sequence of TruthRecord
        One for each member, of equal times.
    progress : callable, optional
        Called with the share that is done.

    Returns
    -------
    Flow

    Notes
    -----
    Errors of spectra, fluxes, budgets and measures are those of `mean_of`; those of
    fields come from the scatter of the means of 20 stretches of each record.
    """
    first = records[0]
    count = len(first.times)
    every = max(1, -(-count * len(records) // SAMPLES))
    interval = every * first.step
    walks = []
    for record in records:
        walks.append(_walk(ocean, record, every))
        progress(len(walks) / len(records))
    batches = np.concatenate([walk["batches"] for walk in walks])
    last, mean = walks[0]["last"], np.mean([walk["mean"] for walk in walks], axis=0)
    sampled = {
        name: np.array([walk["sampled"][name] for walk in walks])
        for name in walks[0]["sampled"]
    }
    finer = Finer(ocean.space, MAP_POINTS)
    rings = shells(ocean)
    edges = rings.wavenumbers + rings.width / 2
    shown = [record.read_budget() for record in records]
    return Flow(
        sampling=Sampling(
            members=len(records),
            recorded=count,
            sampled=sampled["parts"].shape[1],
            step=first.step,
            interval=interval,
            batches=len(batches),
        ),
        spectrum=_spectrum(ocean, sampled["parts"], interval),
        zonal=_zonal(ocean, sampled.get("zonal"), interval),
        profile=profile_of(ocean, finer, last, batches, mean),
        flux={
            quantity: _flux(LEVELS[quantity][1], edges, sampled[quantity], interval)
            for quantity in LEVELS
        },
        field=fields_of(ocean, finer, last, batches, mean),
        budget={
            quantity: budget_of_records(
                first.times, shown, first.budget_units(), ocean.budget_units, quantity
            )
            for quantity in LEVELS
            if quantity in shown[0]
        },
        measure=_measures(ocean, first, shown),
        gyre={
            name: measure_of(sampled["gyres"][..., k], interval, *GYRES[name])
            for k, name in enumerate(GYRES)
            if "gyres" in sampled
        },
    )


def _walk(ocean, record, every):
    """Mean and last state of a record, batch means, and what was sampled of it."""
    edges = batch_edges(len(record.times))
    batches = np.zeros((len(edges) - 1, record.size))
    sampled: dict[str, list] = {}
    for where, states in record.chunks():
        place = np.searchsorted(edges, np.arange(where.start, where.stop), "right") - 1
        first = np.flatnonzero(np.diff(place, prepend=-1))
        batches[place[first]] += np.add.reduceat(states, first, axis=0)
        chosen = states[-where.start % every :: every]
        if len(chosen):
            for name, values in _evaluated(ocean, chosen).items():
                sampled.setdefault(name, []).append(values)
        last = states[-1].copy()
    return {
        "mean": batches.sum(axis=0) / len(record.times),
        "batches": batches / np.diff(edges)[:, np.newaxis],
        "last": last,
        "sampled": {name: np.concatenate(rows) for name, rows in sampled.items()},
    }


def _evaluated(ocean, states):
    """What is sampled of some states, each with the axis of time first."""
    found = {"parts": spectra_by_part(ocean, states), **spectral_fluxes(ocean, states)}
    if ocean.space.x_is_periodic:
        found["zonal"] = zonal_spectrum(ocean, states)
    elif not ocean.space.y_is_periodic:
        found["gyres"] = _gyres(ocean, states)
    return found


def _gyres(ocean, states):
    """Of each state what `GYRES` names, shape (time, 4)."""
    x, y = ocean.space.grid_axes
    found = [
        gyres(x, y, ocean.space.to_grid(psi)) for psi in ocean.streamfunction(states)
    ]
    return np.array(
        [(g.greatest, g.least, g.greatest_at[0], g.least_at[0]) for g in found]
    )


def _spectrum(ocean, parts, interval):
    """Spectrum of series of shape (member, time, part, ring)."""
    rings = shells(ocean)
    total = mean_of(parts.sum(axis=2), interval)
    flat = mean_of(parts.reshape(*parts.shape[:2], -1), interval)
    labels = [ocean.labels[k * ocean.space.n_real] for k in range(parts.shape[2])]
    words = [label.split()[0] for label in labels]
    names = [PARTS.get(word, word) for word in words]
    slope = power_law(rings.wavenumbers, total.value, rings.complete)
    return Spectrum(
        names=tuple(names) if len(names) > 1 else ("all",),
        wavenumber=rings.wavenumbers,
        energy=total.value,
        energy_error=total.error,
        part=flat.value.reshape(parts.shape[2:]),
        part_error=flat.error.reshape(parts.shape[2:]),
        width=rings.width,
        complete=rings.complete,
        slope=slope[0],
        slope_error=slope[1],
        slope_from=slope[2],
        slope_to=slope[3],
    )


def power_law(
    wavenumbers: np.ndarray, energy: np.ndarray, complete: int
) -> tuple[float, float, int, int]:
    """Exponent of the longest straight stretch of a spectrum beyond its peak.

    Parameters
    ----------
    wavenumbers, energy : ndarray, shape (n,)
    complete : int
        Rings, from 0, that are whole; the others are left alone.

    Returns
    -------
    slope, error : float
        By least squares in the logarithms; NaN if no stretch of eight rings and a
        factor of four in wavenumber lies within a tenth of a power law.
    start, stop : int
        First and last ring of the stretch; -1 if there is none.
    """
    peak = 1 + int(np.argmax(energy[1:complete])) if complete > 1 else complete
    stretches = [
        (wavenumbers[stop] / wavenumbers[start], start, stop)
        for start in range(peak, complete)
        for stop in range(start + RINGS - 1, complete)
        if wavenumbers[stop] >= SPAN * wavenumbers[start]
    ]
    for _, start, stop in sorted(stretches, reverse=True):
        part = slice(start, stop + 1)
        if not np.all(energy[part] > 0):
            continue
        x, y = np.log(wavenumbers[part]), np.log(energy[part])
        x = x - x.mean()
        slope = x @ y / (x @ x)
        left = y - y.mean() - slope * x
        if np.abs(left).max() < STRAIGHT:
            error = np.sqrt(left @ left / (len(x) - 2) / (x @ x))
            return float(slope), float(error), start, stop
    return np.nan, np.nan, -1, -1


def _zonal(ocean, series, interval):
    """Zonal spectrum of a series of shape (member, time, wavenumber)."""
    if series is None:
        return None
    found = mean_of(series, interval)
    waves = 2 if ocean.space.y_is_periodic else 1
    width = waves * np.pi / ocean.space.lengths[1]
    return ZonalSpectrum(
        wavenumber=width * np.arange(len(found.value)),
        energy=found.value,
        energy_error=found.error,
        width=width,
    )


def _flux(units, edges, series, interval):
    """Flux of a series of shape (member, time, ring)."""
    found = mean_of(series, interval)
    return Flux(units=units, wavenumber=edges, flux=found.value, flux_error=found.error)


def budget_of_records(
    times: np.ndarray,
    series: Sequence[Mapping[str, np.ndarray]],
    units: Mapping[str, str],
    meanings: Mapping[str, tuple[str, str]],
    quantity: str,
) -> MeanBudget:
    """Mean budget of a quantity over the records of all members.

    Parameters
    ----------
    times : ndarray, shape (n_time,)
        Equal for all [s].
    series : sequence of mapping of str to ndarray, each (n_time,)
        What each member recorded.
    units : mapping of str to str
        Of each.
    meanings : mapping of str to (str, str)
        Unit and long name of what the ocean itself records.
    quantity : {"energy", "enstrophy"}

    Returns
    -------
    MeanBudget
    """
    step = float(times[1] - times[0])
    found = [rates_of(times, one, units, quantity) for one in series]
    names = list(found[0][2])
    gains = np.array([[gains[name] for name in names] for _, _, gains in found])
    gains = gains.reshape(len(found), len(names), len(times) - 1)
    change = np.array([change for _, change, _ in found])
    left = change - gains.sum(axis=1)
    middle = np.array([level for level, _, _ in found])
    columns = np.concatenate([np.stack([middle, left], axis=1), gains], axis=1)
    means = mean_of(np.moveaxis(columns, 1, 2), step)
    since = times - times[0]
    level = np.array([one[quantity] for one in series])
    blocks = block_ranges(level, BLOCKS)
    level_units, rate_units = LEVELS[quantity]
    return MeanBudget(
        units=level_units,
        rate_units=rate_units,
        meaning=meanings.get(quantity, ("", quantity))[1],
        names=tuple(names),
        meanings=tuple(
            meanings.get(name, ("", f"{quantity} fed by {name}"))[1] for name in names
        ),
        level=float(means.value[0]),
        level_error=float(means.error[0]),
        change=float(change.mean()),
        # Two values that know nothing of each other, over the length.
        change_error=float(level.std() * np.sqrt(2 / len(level)) / since[-1]),
        residual=float(means.value[1]),
        residual_error=float(means.error[1]),
        term=means.value[2:],
        term_error=means.error[2:],
        time=block_ranges(since, BLOCKS)[0],
        level_block=blocks[0],
        level_least=blocks[1],
        level_greatest=blocks[2],
        rate_time=block_ranges((since[1:] + since[:-1]) / 2, BLOCKS)[0],
        rate_block=block_ranges(gains, BLOCKS)[0],
    )


def _measures(ocean, record, shown):
    """Every recorded number that is in no budget."""
    units = record.budget_units()
    rates = {rate for _, rate in LEVELS.values()}
    result = {}
    if "potential_energy" in units:
        series = np.array([one["energy"] - one["potential_energy"] for one in shown])
        units["kinetic_energy"] = units["energy"]
        result["kinetic_energy"] = measure_of(
            series, record.step, units["energy"], "kinetic part of the energy"
        )
    for name in shown[0]:
        if name in LEVELS or units[name] in rates or FED in name:
            continue
        series = np.array([one[name] for one in shown])
        meaning = ocean.budget_units.get(name, ("", name.replace("_", " ")))[1]
        result[name] = measure_of(series, record.step, units[name], meaning)
    return result


def measure_of(series: np.ndarray, step: float, units: str, meaning: str) -> Measure:
    """Mean of a series with its error, and the series in blocks.

    Parameters
    ----------
    series : ndarray, shape (member, time)
    step : float
        Time between samples [s].
    units, meaning : str
        What it is.

    Returns
    -------
    Measure
    """
    mean = mean_of(series[:, :, np.newaxis], step)
    block, low, high = block_ranges(series, BLOCKS)
    return Measure(
        units=units,
        meaning=meaning,
        mean=float(mean.value[0]),
        mean_error=float(mean.error[0]),
        least=float(series.min()),
        greatest=float(series.max()),
        time=block_ranges(step * np.arange(series.shape[1]), BLOCKS)[0],
        block=block,
        block_least=low,
        block_greatest=high,
    )
