"""Figure of the last state of the truth, whatever its fields."""

from __future__ import annotations

import numpy as np

from eddyshed.solver.quantities import format_quantity

from .evidence import Evidence
from .markup import Note, number, span, unit
from .measures import (
    Finer,
    Map,
    Profile,
    batch_states,
    eastward_profile,
    is_stretched,
    of_batches,
)

MAP_POINTS = 192  # of a map, from the modes that the space holds
CONTOURS = 12  # of the streamfunction, about
STREAMFUNCTION = "streamfunction"
NAMES = {"vorticity": "relative vorticity"}
SIGNS = {
    "vorticity": "orange, which prints light, turns anticlockwise (above zero), blue "
    "clockwise",
    "buoyancy": "orange, which prints light, is buoyant (above zero), blue dense",
}


def last_state(note: Note, evidence: Evidence) -> str:
    """Maps of the last state, and beside them a mean of the record.

    Of one layer that repeats along x the mean is that of the velocity along x,
    of a slice that of the buoyancy, both averaged along x; in a basin it is the
    streamfunction. Of two layers both are shown, and no mean.
    """
    ocean, record = evidence.ocean, evidence.record
    last = record.read(len(record.times) - 1, len(record.times))[0]
    finer = Finer(ocean.space, MAP_POINTS)
    maps = _maps(ocean, finer, last)
    when = span(float(record.times[-1] - record.times[0]))
    intervals = dict.fromkeys(m.interval for m in maps if m.interval)
    every = " and ".join(number(interval, 0.0) for interval in intervals)
    field = "buoyancy" if maps[0].name == "buoyancy" else "vorticity"
    what = f"{maps[0].name.capitalize()} of the last recorded state, {when} into the"
    if field == "buoyancy":
        what = f"Buoyancy, less that of the background, {what[len('buoyancy ') :]}"
    where = "(a)" if len(maps) == 1 else "(a) Upper and (b) lower layer:"
    first = f"{where} {what if len(maps) == 1 else what[0].lower() + what[1:]} record: "
    caption = (
        f"{first}{SIGNS[field]}. Contours: streamfunction, every "
        f"{every}&nbsp;{unit('m2 s-1')}, dashed below zero."
    )
    if not intervals:
        caption = f"{first}{SIGNS[field]}. There is no flow, and so no contour."
    alt = f"Map of {maps[0].name} with contours of the streamfunction"
    alt += ", of the upper layer left, of the lower right." if len(maps) > 1 else "."
    caption += _box_words(ocean)
    profile = None
    if len(maps) > 1:
        caption += " The imposed currents are left out."
    elif not ocean.space.x_is_periodic:
        mean, words, worded = _mean_map(evidence, finer)
        maps.append(mean)
        caption += words
        alt += worded
    else:
        profile, count = _profile(evidence, finer, last, field)
        caption += _profile_words(ocean, profile, count)
        alt += _profile_alt(ocean, profile)
    return note.figure(
        lambda figures: figures.flow(
            maps=maps,
            lengths=ocean.space.lengths,
            walls=(not ocean.space.x_is_periodic, not ocean.space.y_is_periodic),
            vertical=_vertical(ocean),
            profile=profile,
        ),
        alt=alt,
        caption=caption,
    )


def _vertical(ocean):
    """What the second direction of the box is called."""
    return getattr(ocean, "directions", ("x", "y"))[1]


def _box_words(ocean):
    """What is to be said of the frame."""
    words = ""
    if not (ocean.space.x_is_periodic and ocean.space.y_is_periodic):
        words = " Thick lines are walls."
    if is_stretched(ocean.space.lengths):
        words += f" The {_vertical(ocean)} axis is not to the scale of the x axis."
    return words


def _maps(ocean, finer, z):
    """A map for each streamfunction among the fields of a state."""
    fields = ocean.fields(z)
    maps = []
    for name in fields:
        if not name.endswith(STREAMFUNCTION):
            continue
        prefix = name.removesuffix(STREAMFUNCTION)
        shown = "buoyancy" if "buoyancy" in fields else "vorticity"
        maps.append(
            _map(
                finer,
                NAMES.get(shown, shown),
                ocean.field_units[prefix + shown],
                finer.field(fields[prefix + shown]),
                finer.field(fields[name]),
                f"{prefix.rstrip('_')} layer" if prefix else "",
            )
        )
    return maps


def _map(finer, name, units, field, psi, title=""):
    """A map with round contours."""
    interval = round_number(float(np.ptp(psi)) / CONTOURS)
    levels = np.empty(0)
    if interval:
        levels = interval * np.arange(
            np.ceil(psi.min() / interval), psi.max() / interval
        )
    x, y = finer.space.grid_axes
    return Map(
        name=name,
        units=units,
        title=title,
        field=field,
        streamfunction=psi,
        x=x,
        y=y,
        levels=levels,
        interval=interval,
    )


def _mean_map(evidence, finer):
    """Time mean of the streamfunction, and words on it."""
    ocean = evidence.ocean

    def psi_of(z):
        return finer.field(ocean.fields(z)[STREAMFUNCTION])

    parts = np.array([psi_of(z) for z in batch_states(evidence.record)])
    mean = of_batches(parts, psi_of(evidence.split.mean))
    found = _map(finer, STREAMFUNCTION, "m2 s-1", mean.value, mean.value)
    words = (
        " (b) Streamfunction, mean over the record, with contours every "
        f"{number(found.interval, 0.0)}&nbsp;{unit('m2 s-1')}; "
    )
    error = float(mean.error.max())
    if np.isfinite(error):
        words += (
            f"its standard error, from {len(parts)} batch means, is nowhere above "
            f"{number(error, 0.0)}&nbsp;{unit('m2 s-1')}."
        )
    else:
        words += "the record is too short to tell its error."
    return found, words, " Right, the time-mean streamfunction."


def _profile(evidence, finer, last, field):
    """Profile of the velocity along x or of the buoyancy, and the number of batches."""
    ocean = evidence.ocean

    def profile_of(z):
        if field == "buoyancy":
            return finer.field(ocean.fields(z)["buoyancy"]).mean(axis=1)
        return eastward_profile(finer.space, finer.modes(ocean.streamfunction(z)))

    parts = np.array([profile_of(z) for z in batch_states(evidence.record)])
    found = Profile(
        name="b" if field == "buoyancy" else "u",
        units=ocean.field_units["buoyancy"] if field == "buoyancy" else "m s-1",
        y=finer.space.grid_axes[1],
        mean=of_batches(parts, profile_of(evidence.split.mean)),
        last=profile_of(last),
    )
    return found, len(parts)


def _profile_words(ocean, profile, count):
    """Caption of a profile."""
    what = "Eastward velocity" if profile.name == "u" else "Buoyancy, as in (a),"
    spread = "whose error is unknown"
    if np.isfinite(profile.mean.error).all():
        spread = f"with two standard errors to either side from {count} batch means"
    carried = getattr(ocean.settings, "mean_current", 0.0) != 0
    evolves = getattr(ocean.settings, "mean_current_evolves", False)
    left_out = " The mean current is left out." if carried or evolves else ""
    return (
        f" (b) {what} averaged along x: time mean (black, {spread}) and that of the "
        f"state in (a) (dashed).{left_out}"
    )


def _profile_alt(ocean, profile):
    """Text for a profile: where it is largest."""
    place = int(np.abs(profile.mean.value).argmax())
    value, error = profile.mean.value[place], profile.mean.error[place]
    known = f"± {error:.1g}" if np.isfinite(error) else "(error unknown)"
    height = float(f"{profile.y[place]:.3g}")
    what = "the strongest time-mean jet" if profile.name == "u" else "the largest mean"
    quantity = "eastward velocity" if profile.name == "u" else "buoyancy"
    return (
        f" Right, {quantity} averaged along x against {_vertical(ocean)}; {what}, "
        f"{value:+.2g} {known} {profile.units}, lies at {_vertical(ocean)} = "
        f"{format_quantity(height, 'm')}."
    )


def round_number(value: float) -> float:
    """The largest of 1, 2 or 5 times a power of ten that is not above a value."""
    if value <= 0:
        return 0.0
    power = 10.0 ** np.floor(np.log10(value))
    return float(power * max(step for step in (1, 2, 5) if step * power <= value))
