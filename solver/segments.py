"""The files of a truth run: segments with their checkpoints, and the index.

A segment is one file that holds the records of a stretch of the run *and* the
checkpoint at its end, and it appears in the folder in one atomic move:
whatever kills the run, records and checkpoint agree, nothing is doubled and
nothing acknowledged is lost. The index beside the folder is a small file of
virtual datasets that shows all segments as one series; it is what readers
open, also while the run goes on.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Protocol

import h5py
import numpy as np

from .errors import RunFolderError
from .files import (
    add_scale,
    add_time,
    add_variable,
    new_file,
    open_file,
    remove_partial,
)
from .identity import differences
from .settings import OutputSettings
from .streams import Recorder, Stream, add_axes, add_labels


def member_paths(folder: Path, member: int) -> tuple[Path, Path]:
    """Index file and segment folder of a member."""
    name = f"member-{member:03d}"
    return folder / f"{name}.h5", folder / name


def reached_step(folder: Path, member: int) -> int:
    """Step of a member's last checkpoint; zero if there is none."""
    paths = _segments(member_paths(folder, member)[1])
    return _step_of(paths[-1]) if paths else 0


class Resumable(Protocol):
    """What a run depends on besides its state and the time."""

    def arrays(self) -> dict[str, np.ndarray]:
        """Numbers to keep, by name."""

    def streams(self) -> dict[str, np.random.Generator]:
        """Random streams to keep, by name."""

    def restore(
        self, arrays: Mapping[str, np.ndarray], streams: Mapping[str, dict]
    ) -> None:
        """Take back the arrays, and the states of the streams' bit generators."""


class MemberFiles:
    """The files of one member: reads its checkpoint, adds segments.

    Parameters
    ----------
    folder : Path
        The study's truth folder.
    member : int
        Which member.
    streams : sequence of Stream
        What is recorded.
    output : OutputSettings
        The axes of the streams.
    ocean : ocean
        Names the coordinates.
    table : mapping
        The config of the run, in SI.
    title : str
        Name of the study.
    total : int
        Steps in all.
    """

    def __init__(
        self,
        folder: Path,
        member: int,
        *,
        streams: Sequence[Stream],
        output: OutputSettings,
        ocean: Any,
        table: Mapping[str, object],
        title: str,
        total: int,
    ):
        self.index, self.folder = member_paths(folder, member)
        self._streams, self._output, self._ocean = streams, output, ocean
        self._table, self._title, self._total = table, title, total
        self._attributes = {
            "config_json": json.dumps(table),
            "member": member,
            "steps_total": total,
        }
        # Times of the segments seen so far: each is opened for them once, so a
        # long run does not slow down.
        self._times: dict[Path, dict[str, np.ndarray]] = {}
        # The newest segment that this object read or wrote.
        self._written: Path | None = None

    @property
    def last(self) -> Path | None:
        """The newest segment, which holds the last checkpoint."""
        paths = _segments(self.folder)
        return paths[-1] if paths else None

    def restore(self, z: np.ndarray, random: Resumable) -> int:
        """Load the last checkpoint, if there is one, in place.

        Parameters
        ----------
        z : ndarray, shape (size,)
            Gets the state.
        random : Resumable
            Gets back what it held.

        Returns
        -------
        int
            The step of the checkpoint; zero if there is none, and the
            arguments are as they were.

        Raises
        ------
        RunFolderError
            If another config made the folder; names the keys that differ.
        DataError
            If the newest segment is damaged.
        """
        for path in (self.index, self.folder / "segment-*.h5"):
            remove_partial(path)
        self._written = self.last
        if self._written is None:
            return 0
        with open_file(self._written, kind="truth segment") as file:
            self._check_config(json.loads(file.attrs["config_json"]))
            group = file["checkpoint"]
            z[:] = group["state"][:]
            arrays = {
                array.attrs["purpose"]: array[...]
                for array in group["random"].values()
                if not array.is_scale
            }
            random.restore(arrays, json.loads(group.attrs["streams"]))
            return int(group.attrs["step"])

    def _check_config(self, made: dict) -> None:
        """Refuse a folder that another config made, unless only the end moved."""
        changed = differences(made, self._table)
        if changed:
            message = (
                f"{self.folder}: made by another config ({'; '.join(changed)}). Give "
                "this study another name, point --runs elsewhere, or remove the folder"
            )
            raise RunFolderError(message)

    def add(
        self,
        step: int,
        recorder: Recorder,
        z: np.ndarray,
        random: Resumable,
    ) -> None:
        """Write a segment: the records so far, and a checkpoint.

        Parameters
        ----------
        step : int
            The step that was just completed.
        recorder : Recorder
            Holds the records; emptied.
        z : ndarray, shape (size,)
            The state.
        random : Resumable
            What else the run depends on.

        Raises
        ------
        RunFolderError
            If it cannot be written, or the folder has lost what was written
            before. What is there is untouched.
        """
        if self._written is not None and not self._written.is_file():
            # Made anew, the folder would hold a series with a gap.
            message = (
                f"{self._written}: has vanished while the run went on, so nothing more "
                "is written. Bring the folder back (is the disk still mounted?) and "
                "run the same command again: it goes on from the last checkpoint there"
            )
            raise RunFolderError(message)
        path = self.folder / f"segment-{step:012d}.h5"
        with new_file(
            path,
            kind="truth segment",
            title=f"{self._title}: truth, part",
            attributes=self._attributes,
        ) as file:
            add_axes(file, self._output, self._ocean)
            recorder.write(file)
            group = file.create_group("checkpoint", track_order=True)
            add_variable(
                group,
                "state",
                ("/coordinate",),
                z,
                units=self._ocean.unit,
                long_name="state at the end of this part",
            )
            group.attrs["step"] = step
            _add_arrays(group.create_group("random", track_order=True), random.arrays())
            streams = {
                name: generator.bit_generator.state
                for name, generator in random.streams().items()
            }
            # Text: their integers have 128 bits, more than an HDF5 integer holds.
            group.attrs["streams"] = json.dumps(streams)
        self._written = path
        recorder.clear()
        self.write_index()

    def write_index(self) -> None:
        """Present all segments as one series of virtual datasets."""
        for path in _segments(self.folder):
            if path not in self._times:
                with open_file(path, kind="truth segment") as file:
                    self._times[path] = {s.time: file[s.time][:] for s in self._streams}
        parts = sorted(self._times.items())
        if not any(len(times["time"]) for _, times in parts):
            return  # still in the spin-up: nothing to show
        step = _step_of(parts[-1][0])
        with new_file(
            self.index,
            kind="truth",
            title=f"{self._title}: truth",
            attributes={
                **self._attributes,
                "steps_done": step,
                "complete": int(step == self._total),
            },
        ) as file:
            add_axes(file, self._output, self._ocean)
            # Here alone: for a large grid they take as long as many states.
            add_labels(file, self._output, self._ocean)
            for stream in self._streams:
                _add_series(file, stream, self.folder.name, parts)


def _segments(folder):
    """Segments of a folder in the order of their steps."""
    return sorted(folder.glob("segment-*.h5"))


def _step_of(segment):
    """Step at the end of a segment, from its name."""
    return int(segment.stem.removeprefix("segment-"))


def _add_arrays(group, arrays):
    """Add the arrays that random forcing keeps, each with axes of its own."""
    for number, (name, values) in enumerate(arrays.items()):
        # Users name forcings; a name of theirs may mean a path to HDF5.
        plain = f"array_{number:03d}"
        axes = [f"{plain}_axis_{axis}" for axis in range(np.ndim(values))]
        for axis, length in zip(axes, np.shape(values), strict=True):
            add_scale(group, axis, np.arange(length), long_name="index")
        add_variable(
            group,
            plain,
            axes,
            values,
            units=None,
            long_name=f"kept by the random forcing: {name}",
            purpose=name,
        )


def _add_series(file, stream, folder, parts):
    """Add one stream of all segments to the index."""
    times = [known[stream.time] for _, known in parts]
    lengths = [len(part) for part in times]
    add_time(file, stream.time, np.concatenate(times))
    for name, variable in stream.variables.items():
        layout = h5py.VirtualLayout(
            shape=(sum(lengths), *variable.shape), dtype=variable.dtype
        )
        start = 0
        for (path, _), length in zip(parts, lengths, strict=True):
            if length:
                layout[start : start + length] = h5py.VirtualSource(
                    f"{folder}/{path.name}",
                    name,
                    shape=(length, *variable.shape),
                    dtype=variable.dtype,
                )
            start += length
        add_variable(
            file,
            name,
            (stream.time, *variable.dimensions),
            layout,
            units=variable.units,
            long_name=variable.long_name,
            **variable.attributes,
        )
