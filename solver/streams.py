"""What a truth run records: its streams, each with a cadence of its own."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import h5py
import numpy as np

from .boxes import box_averages, directions_of
from .files import add_scale, add_time, add_variable
from .random_forcing import RandomForcing
from .settings import OutputSettings

DISTANCES = {"x": "distance eastward", "y": "distance northward", "z": "height"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Variable:
    """One recorded variable.

    Attributes
    ----------
    dimensions : tuple of str
        Names of the axes behind time.
    shape : tuple of int
        Their lengths.
    units, long_name : str
        CF attributes.
    dtype : str
        Type in the file.
    attributes : mapping of str to str
        Further CF attributes.
    """

    dimensions: tuple[str, ...]
    shape: tuple[int, ...]
    units: str
    long_name: str
    dtype: str = "float64"
    attributes: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class Stream:
    """Variables that are recorded together.

    Attributes
    ----------
    time : str
        Name of the time axis; every stream has its own.
    every : int
        Interval in steps.
    variables : mapping of str to Variable
        What is recorded.
    sample : callable
        ``sample(t, z)`` returns a value for each variable.
    """

    time: str
    every: int
    variables: Mapping[str, Variable]
    sample: Callable[[float, np.ndarray], Mapping[str, object]]


def streams_of(
    output: OutputSettings,
    ocean: Any,
    step: float,
    random: RandomForcing | None = None,
) -> list[Stream]:
    """List the streams that a config asks for.

    Parameters
    ----------
    output : OutputSettings
        Intervals [s].
    ocean : ocean
        The ocean.
    step : float
        Time step [s].
    random : RandomForcing, optional
        What it feeds is recorded with the budget.

    Returns
    -------
    list of Stream

    Raises
    ------
    DataError
        If a box does not fit the ocean.
    """
    fed = {} if random is None else random.fed_units()
    state = Stream(
        time="time",
        every=round(output.state_every / step),
        variables={
            "state": Variable(
                dimensions=("coordinate",),
                shape=(ocean.size,),
                units=ocean.unit,
                long_name="state in energy-orthonormal coordinates",
            ),
            **{
                name: Variable(
                    dimensions=(), shape=(), units=units, long_name=long_name
                )
                for name, (units, long_name) in {**ocean.budget_units, **fed}.items()
            },
        },
        sample=lambda t, z: {
            "state": z,
            **ocean.budget(t, z),
            **({} if random is None else random.fed_so_far()),
        },
    )
    streams = [state]
    if output.resolved is not None:
        chosen = low_coordinates(ocean, output.resolved.up_to)
        streams.append(
            Stream(
                time="resolved_time",
                every=round(output.resolved.every / step),
                variables={
                    "resolved": Variable(
                        dimensions=("resolved_coordinate",),
                        shape=(len(chosen),),
                        units=ocean.unit,
                        long_name="coordinates of the low wavenumbers",
                    )
                },
                sample=lambda t, z: {"resolved": z[chosen]},
            )
        )
    if output.boxes:
        streams.append(_box_stream(output, ocean, step))
    if output.fields_every is not None:
        nx, ny = ocean.space.points
        streams.append(
            Stream(
                time="fields_time",
                every=round(output.fields_every / step),
                variables={
                    name: Variable(
                        dimensions=("y", "x"),
                        shape=(ny, nx),
                        units=unit,
                        long_name=name,
                        dtype="float32",
                    )
                    for name, unit in ocean.field_units.items()
                },
                sample=lambda t, z: ocean.fields(z),
            )
        )
    return streams


def _box_stream(output, ocean, step):
    """Averages over boxes, a variable each: their units differ."""
    averages = box_averages(ocean, output.boxes)
    names = [f"box_{name}" for name in averages.names]
    variables = {}
    for name, units, long_name in zip(
        names, averages.units, averages.long_names, strict=True
    ):
        places = [f"{letter}_of_{name}" for letter in directions_of(ocean)]
        variables[name] = Variable(
            dimensions=(),
            shape=(),
            units=units,
            long_name=long_name,
            attributes={
                "coordinates": " ".join(places),
                "cell_methods": f"boxes_time: point {places[0]}: {places[1]}: mean",
            },
        )
    every = output.boxes_every or output.state_every
    return Stream(
        time="boxes_time",
        every=round(every / step),
        variables=variables,
        sample=lambda t, z: dict(zip(names, averages.rows @ z, strict=True)),
    )


def low_coordinates(ocean: Any, up_to: float) -> np.ndarray:
    """Indices of the coordinates of total wavenumber at most `up_to`."""
    return np.flatnonzero(np.hypot(*ocean.waves.T) <= up_to + 1e-9)


def add_labels(group: h5py.Group, output: OutputSettings, ocean: Any) -> None:
    """Add what is known of the coordinates; their axes must exist.

    Parameters
    ----------
    group, output, ocean
        As for :func:`add_axes`.
    """
    labels = ocean.labels
    for name, chosen in _coordinates(output, ocean).items():
        prefix = name.removesuffix("coordinate")
        add_variable(
            group,
            f"{prefix}label",
            [name],
            [labels[i] for i in chosen],
            long_name="part and wavenumbers in x and y",
        )
        for axis, letter in enumerate("xy" if ocean.waves is not None else ""):
            add_variable(
                group,
                f"{prefix}waves_{letter}",
                [name],
                ocean.waves[chosen, axis],
                long_name=f"waves per box in {letter}",
            )


def _coordinates(output, ocean):
    """Which coordinates each axis of them holds, by its name."""
    axes = {"coordinate": np.arange(ocean.size)}
    if output.resolved is not None:
        axes["resolved_coordinate"] = low_coordinates(ocean, output.resolved.up_to)
    return axes


def add_axes(group: h5py.Group, output: OutputSettings, ocean: Any) -> None:
    """Add the axes behind time, and where the boxes are.

    Parameters
    ----------
    group : h5py.Group
        Where to.
    output : OutputSettings
        Which streams there are.
    ocean : ocean
        Names the coordinates.
    """
    for name, chosen in _coordinates(output, ocean).items():
        add_scale(group, name, chosen, long_name="index of the coordinate")
    if output.fields_every is not None:
        for name, letter, points in zip(
            "xy", directions_of(ocean), ocean.space.grid_axes, strict=True
        ):
            add_scale(
                group,
                name,
                points,
                units="m",
                long_name=DISTANCES[letter],
                axis=letter.upper(),
            )
    if output.boxes:
        add_scale(group, "side", np.arange(2), long_name="0: from, 1: to")
        _add_box_sides(group, output, ocean)


def _add_box_sides(group, output, ocean):
    """Add the middle of each box and its sides, as CF asks of an average."""
    averages = box_averages(ocean, output.boxes)
    for name, sides in zip(averages.names, averages.sides, strict=True):
        for letter, interval in zip(directions_of(ocean), sides, strict=True):
            # No box can be named so that its variable is called the same.
            place = f"{letter}_of_box_{name}"
            about = {"units": "m", "long_name": DISTANCES[letter]}
            middle = interval.mean()
            add_variable(group, place, (), middle, bounds=f"{place}_sides", **about)
            add_variable(group, f"{place}_sides", ("side",), interval, **about)


class Recorder:
    """Holds the records made since the last checkpoint.

    Parameters
    ----------
    streams : list of Stream
        What to record.
    first_step : int
        Step of the first record of each stream: the end of the spin-up.
    """

    def __init__(self, streams: list[Stream], first_step: int):
        self._streams = streams
        self._first = first_step
        self._times = [Series((), "float64") for _ in streams]
        self._rows = [
            {name: Series(v.shape, v.dtype) for name, v in stream.variables.items()}
            for stream in streams
        ]

    def clear(self) -> None:
        """Forget the records, after they were written."""
        for times, rows in zip(self._times, self._rows, strict=True):
            times.clear()
            for series in rows.values():
                series.clear()

    def record(self, step: int, t: float, z: np.ndarray) -> None:
        """Record whatever is due at a step."""
        since = step - self._first
        if since < 0:
            return
        for stream, times, rows in zip(
            self._streams, self._times, self._rows, strict=True
        ):
            if since % stream.every == 0:
                times.append(t)
                for name, value in stream.sample(t, z).items():
                    rows[name].append(value)

    def write(self, group: h5py.Group) -> None:
        """Write the records as plain variables; axes behind time must exist."""
        for stream, times, rows in zip(
            self._streams, self._times, self._rows, strict=True
        ):
            add_time(group, stream.time, times.values)
            for name, variable in stream.variables.items():
                add_variable(
                    group,
                    name,
                    (stream.time, *variable.dimensions),
                    rows[name].values,
                    units=variable.units,
                    long_name=variable.long_name,
                    **variable.attributes,
                )


class Series:
    """Values of one variable, in memory that serves again when they are forgotten.

    Parameters
    ----------
    shape : tuple of int
        Shape of a value.
    dtype : str
        Type to hold it in.
    """

    def __init__(self, shape: tuple[int, ...], dtype: str):
        self._held = np.empty((16, *shape), dtype)
        self._count = 0

    @property
    def values(self) -> np.ndarray:
        """The values so far, shape (n, *shape): valid until the next is added."""
        return self._held[: self._count]

    def append(self, value: object) -> None:
        """Add a copy of a value."""
        if self._count == len(self._held):
            # What is allocated and not yet touched takes no memory.
            longer = np.empty(
                (2 * self._count, *self._held.shape[1:]), self._held.dtype
            )
            longer[: self._count] = self._held
            self._held = longer
        self._held[self._count] = value
        self._count += 1

    def clear(self) -> None:
        """Forget the values."""
        self._count = 0
