"""Averages of a field over rectangles, as linear functions of the state.

An average is exact: it is made of the averages of the waves and sines
themselves, not of values on a grid. That of a velocity is the difference of
two averages of the streamfunction along lines: along the northern and southern
sides of the rectangle for the eastward velocity, by ``u = -psi_y``.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from .config import setting
from .errors import DataError
from .quantities import format_quantity, nearest, quoted
from .spaces.averages import Interval


@dataclass(frozen=True, slots=True, kw_only=True)
class BoxSettings:
    """A rectangle and the field whose average over it is meant."""

    field: str = setting(
        doc="the field that is averaged: streamfunction, vorticity, "
        "potential_vorticity, eastward_velocity and northward_velocity, in two "
        "layers each with upper_ or lower_ before it; in a slice streamfunction, "
        "vorticity, buoyancy, eastward_velocity, upward_velocity and, with rotation, "
        "cross_velocity. Imposed currents, the topography's part of the potential "
        "vorticity and the background's of the buoyancy are left out"
    )
    x: tuple[float, float] | None = setting(
        default=None,
        unit="m",
        minimum=0,
        doc="western and eastern side; from the greater to the smaller wraps around "
        "where x repeats; absent: the whole length",
    )
    y: tuple[float, float] | None = setting(
        default=None,
        unit="m",
        minimum=0,
        doc="southern and northern side, likewise; absent: the whole width",
    )
    z: tuple[float, float] | None = setting(
        default=None,
        unit="m",
        minimum=0,
        doc="lower and upper side in a vertical slice, in the place of y; absent: "
        "the whole depth",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class BoxAverages:
    """Averages over rectangles as rows that multiply the state.

    Attributes
    ----------
    names : tuple of str
        Of the rectangles.
    rows : ndarray, shape (n, size)
        The averages of a state z are ``rows @ z``.
    units : tuple of str
        SI unit of each.
    long_names : tuple of str
        What each is, for people.
    sides : ndarray, shape (n, 2, 2)
        From and to in each of the two directions [m]; beyond the length where a
        rectangle wraps around.
    """

    names: tuple[str, ...]
    rows: np.ndarray
    units: tuple[str, ...]
    long_names: tuple[str, ...]
    sides: np.ndarray


def box_averages(
    ocean: Any, boxes: Mapping[str, BoxSettings], section: str = "output.boxes"
) -> BoxAverages:
    """Exact averages over rectangles as linear functions of the state.

    Parameters
    ----------
    ocean : ocean
        Offers `linear_fields` and a space with `averages`.
    boxes : mapping of str to BoxSettings
        By name.
    section : str
        Where they stand in the config, for messages.

    Returns
    -------
    BoxAverages

    Raises
    ------
    DataError
        If a field is not one of the ocean's, or a rectangle is empty or reaches
        beyond the box; all such problems at once.
    """
    rows, sides, fields, places, problems = [], [], [], [], []
    known = ocean.linear_fields
    for name, box in boxes.items():
        where = f"[{section}.{name}]"
        field = known.get(box.field)
        if field is None:
            near = nearest(box.field, known)
            advice = f" (did you mean {quoted(near)}?)" if near else ""
            problems.append(
                f"{where} field = {quoted(box.field)} is not a field of this ocean"
                f"{advice}; its fields are {', '.join(known)}"
            )
        try:
            x, y = _rectangle(ocean, box)
        except DataError as error:
            problems += [f"{where} {line}" for line in error.args[0].splitlines()]
            continue
        if field is not None:
            means = _means(ocean.space, field.derivative, x, y)
            rows.append((field.weights * means).ravel())
            sides.append((x, y))
            fields.append(field)
            places.append(_place(ocean, box))
    if problems:
        raise DataError("\n".join(problems))
    return BoxAverages(
        names=tuple(boxes),
        rows=np.array(rows).reshape(len(rows), ocean.size),
        units=tuple(field.unit for field in fields),
        long_names=tuple(
            f"mean {field.long_name}{place}"
            for field, place in zip(fields, places, strict=True)
        ),
        sides=np.array(sides).reshape(len(rows), 2, 2),
    )


def _means(space, derivative, x, y):
    """Averages of the space's functions, or of their derivatives, (n_real,)."""
    if derivative == "x":
        ends = [space.averages((end, end), y) for end in x]
        return (ends[1] - ends[0]) / (x[1] - x[0])
    if derivative == "y":
        ends = [space.averages(x, (end, end)) for end in y]
        return (ends[1] - ends[0]) / (y[1] - y[0])
    return space.averages(x, y)


def directions_of(ocean: Any) -> tuple[str, str]:
    """What the two directions of an ocean's space are called: x and y, or x and z."""
    return getattr(ocean, "directions", ("x", "y"))


def _rectangle(ocean, box):
    """Both intervals of a rectangle, the end never before the start.

    Raises
    ------
    DataError
        With one line for each problem.
    """
    space, directions = ocean.space, directions_of(ocean)
    other = "z" if directions[1] == "y" else "y"
    problems = []
    if getattr(box, other) is not None:
        problems.append(
            f"{other}: the directions of this ocean are {' and '.join(directions)}; "
            f"give {directions[1]}"
        )
    found = []
    repeats = (space.x_is_periodic, space.y_is_periodic)
    for name, length, again in zip(directions, space.lengths, repeats, strict=True):
        try:
            found.append(_interval(name, getattr(box, name), length, again))
        except DataError as error:
            problems.append(str(error))
    if problems:
        raise DataError("\n".join(problems))
    return found


def _interval(name: str, given: Interval | None, length: float, repeats: bool):
    """One side of a rectangle as an interval, unwrapped."""
    if given is None:
        return 0.0, length
    start, end = given
    shown = f"{name} = [{_shown(start)}, {_shown(end)}]"
    # Lengths are sums and multiples of decimals: the last bit is not meant.
    end = length if abs(end - length) <= 1e-12 * length else end
    if not 0 <= start <= length or not 0 <= end <= length:
        message = f"{shown} reaches beyond the box, 0 to {_shown(length)}"
        raise DataError(message)
    if start == end:
        message = f"{shown} is empty; give a greater end, or leave {name} out for all"
        raise DataError(message)
    if start > end and not repeats:
        message = (
            f"{shown} runs backwards, and {name} does not repeat: give the smaller "
            "number first"
        )
        raise DataError(message)
    if start > end:
        end += length
        if start == end:
            message = f"{shown} is empty: both are the same edge"
            raise DataError(message)
    return start, end


def _place(ocean, box):
    """Where a rectangle lies, in words that follow a name."""
    sides = []
    for name in directions_of(ocean):
        given = getattr(box, name)
        if given is not None:
            sides.append(f"{name} {_shown(given[0])} to {_shown(given[1])}")
    return f" over {', '.join(sides)}" if sides else " over the whole box"


def _shown(length):
    """A length for people."""
    return format_quantity(length, "m")
