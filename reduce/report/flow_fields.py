"""Figure of the last state of the truth, whatever its fields."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from eddyshed.solver.quantities import format_quantity

from ..flow.parts import Field, Flow, Profile
from .evidence import Evidence
from .markup import Note, number, span, unit

CONTOURS = 12  # of the streamfunction, about
STREAMFUNCTION = "streamfunction"
NAMES = {"vorticity": "relative vorticity"}
SIGNS = {
    "vorticity": "orange, which prints light, turns anticlockwise (above zero), blue "
    "clockwise",
    "buoyancy": "orange, which prints light, is buoyant (above zero), blue dense",
}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Map:
    """A field over the box, with contours of the streamfunction.

    Attributes
    ----------
    name, units : str
        Of the field.
    title : str
        Which layer; empty if there is one only.
    field, streamfunction : ndarray, shape (ny, nx)
        [units] and [m2 s-1], on one grid.
    x, y : ndarray, shapes (nx,), (ny,)
        Grid coordinates [m].
    levels : ndarray, shape (level,)
        Contours of the streamfunction.
    interval : float
        Between contours [m2 s-1]; zero if there are none.
    stretched : bool
        Whether it is not drawn to scale: a long box would be a line.
    """

    name: str
    units: str
    title: str
    field: np.ndarray
    streamfunction: np.ndarray
    x: np.ndarray
    y: np.ndarray
    levels: np.ndarray
    interval: float
    stretched: bool


def last_state(note: Note, evidence: Evidence) -> str:
    """Maps of the last state, and beside them a mean of the record.

    Of one layer that repeats along x the mean is that of the velocity along x,
    of a slice that of the buoyancy, both averaged along x; in a basin it is the
    streamfunction. Of two layers both are shown, and no mean.
    """
    ocean, found = evidence.ocean, evidence.flow
    maps = _maps(evidence.flow, ocean.space.lengths)
    when = span((found.sampling.recorded - 1) * found.sampling.step)
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
    if len(maps) > 1:
        caption += " The imposed currents are left out."
    elif found.profile is None:
        mean, words = _mean_map(found, ocean.space.lengths)
        maps.append(mean)
        caption += words
        alt += " Right, the time-mean streamfunction."
    else:
        caption += _profile_words(ocean, found.profile, found.sampling.batches)
        alt += _profile_alt(ocean, found.profile)
    return note.figure(
        lambda figures: figures.flow(
            maps=maps,
            lengths=ocean.space.lengths,
            walls=(not ocean.space.x_is_periodic, not ocean.space.y_is_periodic),
            vertical=_vertical(ocean),
            profile=found.profile,
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
    if _is_stretched(ocean.space.lengths):
        words += f" The {_vertical(ocean)} axis is not to the scale of the x axis."
    return words


def _is_stretched(lengths):
    """Whether a map of a box is not drawn to scale."""
    return not 0.4 <= lengths[1] / lengths[0] <= 2.5


def _maps(flow: Flow, lengths):
    """A map of the last state for each streamfunction among the fields."""
    maps = []
    for name, psi in flow.field.items():
        if not name.endswith(STREAMFUNCTION):
            continue
        prefix = name.removesuffix(STREAMFUNCTION)
        shown = "buoyancy" if "buoyancy" in flow.field else "vorticity"
        title = f"{prefix.rstrip('_')} layer" if prefix else ""
        field = flow.field[prefix + shown]
        maps.append(
            _map(NAMES.get(shown, shown), title, field, "snapshot", psi, lengths)
        )
    return maps


def _map(name, title, field: Field, which, psi: Field, lengths):
    """A map of the snapshot or the mean of a field, with round contours."""
    contoured = getattr(psi, which)
    interval = round_number(float(np.ptp(contoured)) / CONTOURS)
    levels = np.empty(0)
    if interval:
        levels = interval * np.arange(
            np.ceil(contoured.min() / interval), contoured.max() / interval
        )
    return Map(
        name=name,
        units=field.units,
        title=title,
        field=getattr(field, which),
        streamfunction=contoured,
        x=psi.x,
        y=psi.y,
        levels=levels,
        interval=interval,
        stretched=_is_stretched(lengths),
    )


def _mean_map(flow: Flow, lengths):
    """Time mean of the streamfunction, and words on it."""
    psi = flow.field[STREAMFUNCTION]
    found = _map(STREAMFUNCTION, "", psi, "mean", psi, lengths)
    words = (
        " (b) Streamfunction, mean over the record, with contours every "
        f"{number(found.interval, 0.0)}&nbsp;{unit('m2 s-1')}; "
    )
    error = float(psi.mean_error.max())
    if np.isfinite(error):
        words += (
            f"its standard error, from {flow.sampling.batches} batch means, is "
            f"nowhere above {number(error, 0.0)}&nbsp;{unit('m2 s-1')}."
        )
    else:
        words += "the record is too short to tell its error."
    return found, words


def _profile_words(ocean, profile: Profile, count):
    """Caption of a profile."""
    what = "Eastward velocity" if profile.name == "u" else "Buoyancy, as in (a),"
    spread = "whose error is unknown"
    if np.isfinite(profile.mean_error).all():
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
    place = int(np.abs(profile.mean).argmax())
    value, error = profile.mean[place], profile.mean_error[place]
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
