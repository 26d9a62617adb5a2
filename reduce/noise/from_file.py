"""Series out of other people's files: HDF5, netCDF-4 and CSV."""

from __future__ import annotations

import csv
import re
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

import h5py
import numpy as np

from eddyshed.solver.errors import DataError
from eddyshed.solver.quantities import UNITS, nearest, quoted

EVEN = 1e-3  # of a step: what times rounded to a few digits differ by
MISSING = ("", "na", "nan", "null", "none", "-")
# How CF files and people write units of time (UDUNITS): all to our symbols.
TIME_UNITS = {
    **dict.fromkeys(("s", "sec", "secs", "second", "seconds"), "s"),
    **dict.fromkeys(("min", "mins", "minute", "minutes"), "min"),
    **dict.fromkeys(("h", "hr", "hrs", "hour", "hours"), "h"),
    **dict.fromkeys(("d", "day", "days"), "d"),
    **dict.fromkeys(("yr", "year", "years", "julian_year"), "yr"),
}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FileSeries:
    """Variables of a file at equal steps.

    Parameters
    ----------
    values : ndarray, shape (1, time, variable)
    step : float
        Time between samples [s].
    names, units : tuple of str
        Of the variables; units are empty where the file gives none.
    """

    values: np.ndarray
    step: float
    names: tuple[str, ...]
    units: tuple[str, ...]


def read_series(
    path: Path,
    variables: Sequence[str],
    *,
    time: str | None = None,
    time_unit: str | None = None,
    step: float | None = None,
) -> FileSeries:
    """Read variables and the time between their samples.

    Parameters
    ----------
    path : Path
        A CSV file with a heading (``.csv``, ``.txt`` or ``.tsv``), else HDF5 or
        netCDF-4.
    variables : sequence of str
        Columns, or datasets of one axis, or of time by mode.
    time : str, optional
        Column or dataset of times. By default the scale that is attached to the
        first axis of the variable (HDF5, netCDF), if there is one.
    time_unit : str, optional
        Unit of the times; by default what the file says ("days since ...", "time
        [d]"), or seconds for dates.
    step : float, optional
        Time between samples [s], which are then even and no times are read.

    Returns
    -------
    FileSeries

    Raises
    ------
    DataError
        If something is missing, not a number, or times are not even.
    """
    if not path.is_file():
        message = f"{path}: no such file"
        raise DataError(message)
    if step is not None and (time is not None or time_unit is not None):
        message = (
            f"{path}: a step, and a time or its unit, allowed is one or the other: the "
            "step says that samples are even and no times are read"
        )
        raise DataError(message)
    text = path.suffix.lower() in (".csv", ".txt", ".tsv")
    reader = _read_text if text else _read_hdf
    found = reader(path, tuple(variables), time, with_time=step is None)
    columns, times, unit = found
    for name, values, _ in columns:
        _check_missing(path, name, values)
        if len(values) != len(columns[0][1]):
            message = (
                f"{path}: {name} has {len(values)} times, {columns[0][0]} has "
                f"{len(columns[0][1])}, allowed are variables of equal length"
            )
            raise DataError(message)
    if step is None:
        step = _step(path, times, time_unit or unit, len(columns[0][1]))
    return FileSeries(
        values=np.stack([values for _, values, _ in columns], axis=-1)[np.newaxis],
        step=step,
        names=tuple(name for name, _, _ in columns),
        units=tuple(unit for _, _, unit in columns),
    )


def _read_text(path, variables, time, *, with_time):
    """Columns, times and their unit from a CSV file."""
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except UnicodeDecodeError as error:
        message = f"{path}: not a text file in UTF-8 ({error.reason} at {error.start})"
        raise DataError(message) from error
    lines = [line for line in lines if line.strip() and not line.startswith("#")]
    if not lines:
        message = f"{path}: empty; allowed is a heading and one line for each time"
        raise DataError(message)
    mark = max(",;\t", key=lines[0].count)
    rows = list(csv.reader(lines, delimiter=mark, skipinitialspace=True))
    heading, units = [], []
    for cell in rows[0]:
        # "sst [K]" or "sst (K)"
        name, unit = re.fullmatch(r"\s*(.*?)\s*(?:[\[(](.*)[\])])?\s*", cell).groups()
        heading.append(name)
        units.append(unit or "")
    for number, row in enumerate(rows[1:], start=2):
        if len(row) != len(heading):
            message = (
                f"{path}: line {number} (comments left out) has {len(row)} cells, the "
                f"heading {len(heading)}; allowed is one cell for each"
            )
            raise DataError(message)

    def column(name):
        if name not in heading:
            raise DataError(_unknown(path, name, heading))
        return heading.index(name)

    columns = [
        (name, _numbers(path, name, [row[column(name)] for row in rows[1:]]),
         units[column(name)])
        for name in variables
    ]  # fmt: skip
    if not with_time or time is None:
        return columns, None, ""
    cells = [row[column(time)] for row in rows[1:]]
    unit = units[column(time)]
    try:
        dates = [datetime.fromisoformat(cell.strip()) for cell in cells]
        # "1950" is a number and no date.
        if any("-" not in cell[1:] for cell in cells):
            raise ValueError  # noqa: TRY301 (the same remedy)
    except ValueError:
        return columns, _numbers(path, time, cells), unit
    return columns, np.array([(one - dates[0]).total_seconds() for one in dates]), "s"


def _read_hdf(path, variables, time, *, with_time):
    """Columns, times and their unit from an HDF5 or netCDF-4 file."""
    try:
        file = h5py.File(path, "r")
    except OSError as error:
        message = (
            f"{path}: neither HDF5 nor netCDF-4 ({error}), and its name does not end "
            "in .csv, .txt or .tsv; convert it (a classic netCDF file: nccopy -k nc4)"
        )
        raise DataError(message) from error
    with file:
        columns, scale = [], None
        for name in variables:
            data = _dataset(path, file, name)
            values = _decoded(data, path, name)
            unit = _text(data.attrs.get("units", ""))
            if values.ndim not in (1, 2) or not values.size:
                message = (
                    f"{path}: {name} has the shape {values.shape}, allowed are (time,) "
                    "and (time, mode)"
                )
                raise DataError(message)
            if values.ndim == 1:
                columns.append((name, values, unit))
            else:
                columns += [
                    (f"{name}[{k}]", values[:, k], unit) for k in range(values.shape[1])
                ]
            if scale is None and len(data.dims) and len(data.dims[0]):
                scale = data.dims[0][0]
        if with_time and time is not None:
            scale = _dataset(path, file, time)
        if not with_time or scale is None:
            return columns, None, ""
        name = time or scale.name
        times = _decoded(scale, path, name)
        unit = _text(scale.attrs.get("units", "")).split(" since ")[0].strip()
        _check_missing(path, name, times)
        return columns, times, unit


def _dataset(path, file, name):
    """Return the dataset of that name."""
    if name not in file or not isinstance(file[name], h5py.Dataset):
        known = []
        file.visititems(
            lambda key, item: (
                known.append(key) if isinstance(item, h5py.Dataset) else None
            )
        )
        raise DataError(_unknown(path, name, known))
    return file[name]


def _decoded(data, path, name):
    """Numbers of a dataset; CF packing undone, missing values to NaN."""
    if data.dtype.kind not in "fiu":
        message = (
            f"{path}: {name} holds {data.dtype}, allowed are real numbers; name "
            "another variable"
        )
        raise DataError(message)
    stored = data[...]
    values = stored.astype(float)
    for key in ("_FillValue", "missing_value"):
        if key in data.attrs:
            values[np.isin(stored, data.attrs[key])] = np.nan
    scale = np.ravel(data.attrs.get("scale_factor", 1.0))[0]
    offset = np.ravel(data.attrs.get("add_offset", 0.0))[0]
    return values * float(scale) + float(offset)


def _text(value):
    """Text of an attribute, whatever library wrote it."""
    value = value.item() if isinstance(value, np.ndarray) and value.size == 1 else value
    return value.decode() if isinstance(value, bytes) else str(value)


def _numbers(path, name, cells):
    """Cells of a column as floats; what is missing as NaN."""
    values = np.empty(len(cells))
    for row, cell in enumerate(cells):
        word = cell.strip()
        try:
            values[row] = np.nan if word.lower() in MISSING else float(word)
        except ValueError:
            message = (
                f"{path}: {name} holds {quoted(word)} in its row {row + 1}, allowed "
                "are numbers; clean the column"
            )
            raise DataError(message) from None
    return values


def _check_missing(path, name, values):
    """Raise DataError if a value is missing or not finite."""
    bad = np.flatnonzero(~np.isfinite(values))
    if len(bad):
        message = (
            f"{path}: {name} has {len(bad)} missing values, the first at number "
            f"{bad[0] + 1} of {len(values)}, allowed are none: lags are counted in "
            "samples; fill the gaps in a way that you can defend, or cut out the "
            "longest stretch without"
        )
        raise DataError(message)


def _step(path, times, unit, count):
    """Time between samples [s] from times in a unit."""
    if times is None:
        message = (
            f"{path}: no times; name their column or variable with --time, or give the "
            'time between samples with --step, such as --step "1 d"'
        )
        raise DataError(message)
    _check_missing(path, "the time", times)
    symbol = TIME_UNITS.get(unit.lower(), unit)
    if symbol not in UNITS or UNITS[symbol][1] != (0, 1, 0, 0):
        given = f"the unit {quoted(unit)}" if unit else "no unit"
        message = (
            f"{path}: times with {given}, allowed are s, min, h, d and yr; give it "
            "with --time-unit, or the time between samples with --step"
        )
        raise DataError(message)
    if len(times) != count or times.ndim != 1 or count < 2:
        message = (
            f"{path}: {times.size} times for {count} values, allowed is one for each "
            "of at least two"
        )
        raise DataError(message)
    steps = np.diff(times)
    step = (times[-1] - times[0]) / (count - 1)
    uneven = np.abs(steps - step) > EVEN * abs(step)
    if not step > 0 or uneven.any():
        where = int(np.argmax(np.abs(steps - step)))
        message = (
            f"{path}: uneven times: {steps[where]:.6g} {symbol} between numbers "
            f"{where + 1} and {where + 2}, {step:.6g} {symbol} on average, allowed are "
            "rising times at equal steps; interpolate, or if they are even for your "
            "purpose (calendar months) say so by --step instead of --time"
        )
        raise DataError(message)
    return float(step * UNITS[symbol][0])


def _unknown(path, name, known):
    """Message on a name that is not in the file."""
    close = nearest(name, known)
    return (
        f"{path}: no variable {quoted(name)}, there are "
        + ", ".join(known[:20])
        + (f" and {len(known) - 20} more" if len(known) > 20 else "")
        + (f"; did you mean {quoted(close)}?" if close else "")
    )
