"""HDF5 files that netCDF readers open, written so that a kill loses nothing.

Every file of a study is made here: written whole under a temporary name,
flushed to disk, then moved into place, so a reader sees the old file or the
new one and never half of one. Dimension scales are made and attached on every
axis, attributes follow the CF conventions, and only types that every reader
knows are used.
"""

from __future__ import annotations

import io
import os
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager, suppress
from importlib.metadata import version
from pathlib import Path

import h5py
import numpy as np

from .errors import DataError, RunFolderError

SCHEMA = 1
EPOCH = "2000-01-01 00:00:00"
PARTIAL = ".partial"


@contextmanager
def replacing(path: Path) -> Iterator[Path]:
    """Give a temporary path that takes the place of `path` when all went well.

    Parameters
    ----------
    path : Path
        The file to make or replace. Its folder is made if need be.

    Raises
    ------
    RunFolderError
        If the folder cannot be made or written, or the disk is full. The old
        file, if there was one, is as it was.
    """
    temporary = path.with_name(f".{path.name}.{os.getpid()}{PARTIAL}")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        yield temporary
        with temporary.open("rb") as handle:
            os.fsync(handle.fileno())
        temporary.replace(path)
        _settle(path.parent)
    except OSError as error:
        message = (
            f"{path}: cannot be written ({error.strerror or error}); what was there "
            "before is untouched. Free or unlock the disk, or choose another folder "
            "with --runs, and run the same command again"
        )
        raise RunFolderError(message) from error
    finally:
        with suppress(OSError):  # the folder itself may be what is wrong
            temporary.unlink(missing_ok=True)


def _settle(folder):
    """Have the folder itself on disk, so that a power cut cannot undo the move."""
    with suppress(OSError):  # the file is in its place; not all systems can do more
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def remove_partial(path: Path) -> None:
    """Remove what killed processes left of a file that they were writing.

    Parameters
    ----------
    path : Path
        The file, of which no other process may be writing a new version now. Its
        name may be a pattern as of `Path.glob`.
    """
    for left in path.parent.glob(f".{path.name}.*{PARTIAL}"):
        with suppress(OSError):  # harmless where it is
            left.unlink()


@contextmanager
def new_file(
    path: Path, *, kind: str, title: str, attributes: Mapping[str, object]
) -> Iterator[h5py.File]:
    """Write an HDF5 file in one go; it appears when the block ends without error.

    Parameters
    ----------
    path : Path
        The file.
    kind : str
        What the file holds, for `open_file`.
    title : str
        CF title.
    attributes : mapping
        Further root attributes: text, numbers, or lists of them.

    Raises
    ------
    RunFolderError
        As `replacing`.

    Notes
    -----
    The file is put together in memory, which takes its size once more, and
    written at the end. HDF5 does not survive a disk that fills up while it has
    a file open there: it can neither finish nor close it.
    """
    buffer = io.BytesIO()
    with replacing(path) as temporary:
        with h5py.File(buffer, "w", track_order=True) as file:
            file.attrs.update(
                {
                    "Conventions": "CF-1.8",
                    "title": title,
                    "source": f"eddyshed {version('eddyshed')}",
                    "eddyshed_kind": kind,
                    "eddyshed_schema": SCHEMA,
                    **attributes,
                }
            )
            yield file
        temporary.write_bytes(buffer.getbuffer())


@contextmanager
def open_file(path: Path, *, kind: str | None = None) -> Iterator[h5py.File]:
    """Open one of our files for reading.

    Parameters
    ----------
    path : Path
        The file.
    kind : str, optional
        What it must hold; anything of ours if not given.

    Raises
    ------
    DataError
        If the file is missing, damaged, not HDF5, or not of the kind.
    """
    if not path.is_file():
        message = f"{path}: no such file"
        raise DataError(message)
    try:
        file = h5py.File(path, "r")
    except OSError as error:
        message = (
            f"{path}: not a whole HDF5 file ({error}); "
            "remove it and run the study again to make it anew"
        )
        raise DataError(message) from error
    with file:
        found = file.attrs.get("eddyshed_kind")
        if found is None:
            message = f"{path}: an HDF5 file, but not one that eddyshed wrote"
            raise DataError(message)
        if kind is not None and found != kind:
            message = f"{path}: holds {found!r}, where {kind!r} is needed"
            raise DataError(message)
        schema = file.attrs.get("eddyshed_schema")
        if schema != SCHEMA:
            message = (
                f"{path}: schema {schema}, this version reads {SCHEMA}; make the file "
                "anew"
            )
            raise DataError(message)
        yield file


def add_scale(
    group: h5py.Group,
    name: str,
    values: Sequence[float] | np.ndarray,
    *,
    units: str = "1",
    long_name: str,
    **attributes: object,
) -> None:
    """Add a coordinate variable: a dimension and its values."""
    scale = group.create_dataset(name, data=np.asarray(values))
    scale.make_scale(name)
    scale.attrs.update({"units": units, "long_name": long_name, **attributes})


def add_time(group: h5py.Group, name: str, seconds: np.ndarray) -> None:
    """Add a time axis: model seconds, counted from an arbitrary date."""
    add_scale(group, name, seconds, long_name="model time", **time_attributes())


def time_attributes() -> dict[str, str]:
    """CF attributes of a time axis."""
    return {
        "units": f"seconds since {EPOCH}",
        "calendar": "proleptic_gregorian",
        "standard_name": "time",
        "axis": "T",
    }


def add_variable(
    group: h5py.Group,
    name: str,
    dimensions: Sequence[str],
    values: object,
    *,
    units: str | None = "1",
    long_name: str,
    **attributes: object,
) -> None:
    """Add a variable whose every axis is one of the group's dimensions.

    Parameters
    ----------
    group : h5py.Group
        File or group; the dimensions must exist in it.
    name : str
        Name of the variable.
    dimensions : sequence of str
        One name for each axis.
    values : array_like
        Numbers, or a list of str. A `h5py.VirtualLayout` makes a virtual one.
    units : str or None
        Units as UDUNITS text; None if they are not known.
    long_name : str
        What it is.
    **attributes
        Further attributes.
    """
    if isinstance(values, h5py.VirtualLayout):
        dataset = group.create_virtual_dataset(name, values, fillvalue=np.nan)
    else:
        if isinstance(values, (list, tuple)) and values and isinstance(values[0], str):
            values = np.array(values, dtype=h5py.string_dtype())
        dataset = group.create_dataset(name, data=values)
    # One axis without a scale, and no reader opens the file.
    for axis, dimension in zip(dataset.dims, dimensions, strict=True):
        axis.attach_scale(group[dimension])
    known = {} if units is None else {"units": units}
    dataset.attrs.update({**known, "long_name": long_name, **attributes})
