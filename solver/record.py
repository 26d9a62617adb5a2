"""Reading a truth run back, a stretch at a time."""

from __future__ import annotations

import json
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from .errors import DataError
from .files import open_file
from .segments import member_paths

CHUNK_BYTES = 64_000_000


@dataclass(frozen=True, slots=True, kw_only=True)
class TruthRecord:
    """The record of one truth run.

    Attributes
    ----------
    path : Path
        The index file.
    times : ndarray, shape (n_time,)
        Model time of each full state [s].
    step : float
        Interval between full states [s].
    size : int
        Number of coordinates.
    complete : bool
        Whether the run has reached its end.
    steps_done, steps_total : int
        How far it got.
    config : dict
        The truth part of the config that made it, in SI.
    resolved_times : ndarray, shape (n_fine,)
        Times of the fine stream [s]; empty if there is none.
    resolved_coordinates : ndarray of int, shape (n_low,)
        Which coordinates the fine stream holds.
    boxes_times : ndarray, shape (n_boxes_time,)
        Times of the averages over boxes [s]; empty if there are none.
    """

    path: Path
    times: np.ndarray
    step: float
    size: int
    complete: bool
    steps_done: int
    steps_total: int
    config: dict
    resolved_times: np.ndarray
    resolved_coordinates: np.ndarray
    boxes_times: np.ndarray = field(default_factory=lambda: np.empty(0))

    def read(self, start: int, stop: int) -> np.ndarray:
        """Full states of records start to stop, shape (stop - start, size)."""
        with open_file(self.path, kind="truth") as file:
            return file["state"][start:stop]

    def chunks(self, rows: int | None = None) -> Iterator[tuple[slice, np.ndarray]]:
        """Walk through all full states, a stretch at a time.

        Parameters
        ----------
        rows : int, optional
            States in a stretch; as many as 64 MB hold by default.

        Yields
        ------
        slice
            Which records.
        ndarray, shape (n, size)
            Their states.
        """
        rows = rows or max(1, CHUNK_BYTES // (8 * self.size))
        with open_file(self.path, kind="truth") as file:
            for start in range(0, len(self.times), rows):
                where = slice(start, min(start + rows, len(self.times)))
                yield where, file["state"][where]

    def read_resolved(self) -> np.ndarray:
        """Return the fine stream, shape (n_fine, n_low)."""
        with open_file(self.path, kind="truth") as file:
            return file["resolved"][:]

    def read_budget(self) -> dict[str, np.ndarray]:
        """All scalars recorded with the states, by name, each (n_time,)."""
        with open_file(self.path, kind="truth") as file:
            return {name: file[name][:] for name in _series(file, "time")}

    def budget_units(self) -> dict[str, str]:
        """Unit of each of :meth:`read_budget`."""
        with open_file(self.path, kind="truth") as file:
            return {name: file[name].attrs["units"] for name in _series(file, "time")}

    def read_boxes(self) -> dict[str, np.ndarray]:
        """Averages over boxes, by the name of the box, each (n_boxes_time,)."""
        with open_file(self.path, kind="truth") as file:
            return {
                name.removeprefix("box_"): file[name][:]
                for name in _series(file, "boxes_time")
            }

    def box_units(self) -> dict[str, str]:
        """Unit of each of :meth:`read_boxes`."""
        with open_file(self.path, kind="truth") as file:
            return {
                name.removeprefix("box_"): file[name].attrs["units"]
                for name in _series(file, "boxes_time")
            }


def _series(file, time):
    """Names of the variables whose one axis is a given time."""
    return [
        name
        for name, item in file.items()
        if name != time
        and item.ndim == 1
        and [scale.name for scale in item.dims[0].values()] == [f"/{time}"]
    ]


def _parts(file):
    """Names of the files that hold the series of an index."""
    # All variables of a stream lie in the same files: one of each tells.
    streams = {item.dims[0][0].name: item for item in file.values() if item.is_virtual}
    sources = (item.virtual_sources() for item in streams.values())
    return sorted({source.file_name for each in sources for source in each})


def walk(
    records: Sequence[TruthRecord], rows: int | None = None
) -> Iterator[tuple[int, slice, np.ndarray]]:
    """Walk through all full states of all members, a stretch at a time.

    Parameters
    ----------
    records : sequence of TruthRecord
        The members.
    rows : int, optional
        As for `TruthRecord.chunks`.

    Yields
    ------
    int
        The member's place.
    slice
        Which of its records.
    ndarray, shape (n, size)
        Their states.
    """
    for member, record in enumerate(records):
        for where, states in record.chunks(rows):
            yield member, where, states


def open_records(
    folder: Path, members: Iterable[int] | None = None
) -> list[TruthRecord]:
    """Open the records of a truth's members.

    Parameters
    ----------
    folder : Path
        ``truth`` of a run folder.
    members : iterable of int, optional
        Which, and in which order; by default all that are there, by number.

    Returns
    -------
    list of TruthRecord

    Raises
    ------
    DataError
        As :func:`open_record`; or if there is none.
    """
    if members is None:
        paths = sorted(folder.glob("member-*.h5"))
    else:
        paths = [member_paths(folder, member)[0] for member in members]
    if not paths:
        message = f"{folder}: holds no record of a truth run"
        raise DataError(message)
    return [open_record(path) for path in paths]


def open_record(path: Path) -> TruthRecord:
    """Open the record of a truth run.

    Parameters
    ----------
    path : Path
        The index file, ``truth/member-000.h5`` of a run folder.

    Raises
    ------
    DataError
        If it is missing, damaged, not a truth run, or holds under two states.
    """
    with open_file(path, kind="truth") as file:
        times = file["time"][:]
        if len(times) < 2:
            message = f"{path}: holds {len(times)} states; at least two are needed"
            raise DataError(message)
        missing = [name for name in _parts(file) if not (path.parent / name).is_file()]
        if missing:
            # HDF5 would fill the gap with NaN and say nothing.
            message = (
                f"{path}: lacks its part {missing[0]} ({len(missing)} missing); "
                "keep the folder beside the file, or run the truth again"
            )
            raise DataError(message)
        fine = "resolved_time" in file
        return TruthRecord(
            path=path,
            times=times,
            step=float(times[1] - times[0]),
            size=file["state"].shape[1],
            complete=bool(file.attrs["complete"]),
            steps_done=int(file.attrs["steps_done"]),
            steps_total=int(file.attrs["steps_total"]),
            config=json.loads(file.attrs["config_json"]),
            resolved_times=file["resolved_time"][:] if fine else np.empty(0),
            resolved_coordinates=(
                file["resolved_coordinate"][:] if fine else np.empty(0, dtype=int)
            ),
            boxes_times=(
                file["boxes_time"][:] if "boxes_time" in file else np.empty(0)
            ),
        )
