"""Dataclasses of arrays to and from files.

Arrays become variables whose axes and units are those of `layout`; text and numbers
become attributes; a dataclass inside a dataclass becomes a group. What is
written reads back equal to the bit.
"""

from __future__ import annotations

import dataclasses
import json
import types
import typing
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from eddyshed.solver.errors import DataError
from eddyshed.solver.files import (
    add_scale,
    add_variable,
    new_file,
    open_file,
    replacing,
)

from .layout import AXES, units_of

NOTHING = json.dumps(None)  # an optional field that is not there


def pack(group: h5py.Group, value: Any, unit: str) -> None:
    """Write a dataclass into a group.

    Parameters
    ----------
    group : h5py.Group
        An empty group.
    value : dataclass instance
        Its fields are arrays, text, numbers, tuples of text, dicts of numbers,
        dataclasses, or None.
    unit : str
        Of resolved coordinates.
    """
    axes = AXES.get(type(value).__name__, {})
    units = units_of(value, group.name.rpartition("/")[2], unit)
    for field in dataclasses.fields(value):
        item = getattr(value, field.name)
        if dataclasses.is_dataclass(item):
            pack(group.create_group(field.name, track_order=True), item, unit)
        elif isinstance(item, np.ndarray):
            stored = item.astype(np.int8) if item.dtype == bool else item
            _add(group, field.name, axes[field.name], stored, units(field.name))
        elif isinstance(item, bool | int | float | np.floating | np.integer):
            group.attrs[field.name] = float(item) if _is_float(item) else int(item)
        elif isinstance(item, str):
            group.attrs[field.name] = item
        else:
            group.attrs[field.name] = json.dumps(item)


def unpack(group: h5py.Group, kind: type) -> Any:
    """Read back what :func:`pack` wrote.

    Parameters
    ----------
    group : h5py.Group
        The group.
    kind : type
        The dataclass that was written.

    Returns
    -------
    instance of kind
    """
    hints = typing.get_type_hints(kind)
    values = {}
    for field in dataclasses.fields(kind):
        hint, optional = hints[field.name], False
        if isinstance(hint, types.UnionType):
            optional = True
            hint = next(h for h in typing.get_args(hint) if h is not type(None))
        origin = typing.get_origin(hint) or hint
        if optional and group.attrs.get(field.name) == NOTHING:
            values[field.name] = None
        elif dataclasses.is_dataclass(hint):
            values[field.name] = unpack(group[field.name], hint)
        elif origin is np.ndarray:
            stored = group[field.name][...]
            values[field.name] = stored.astype(bool) if _is_flag(stored) else stored
        elif origin in (float, int, bool, str):
            values[field.name] = origin(group.attrs[field.name])
        else:
            values[field.name] = origin(json.loads(group.attrs[field.name]))
    return kind(**values)


def _is_float(item):
    return isinstance(item, float | np.floating)


def _is_flag(stored):
    """Whether an array was one of bool, which readers do not agree on."""
    return stored.dtype == np.int8


def _add(group, name, axes, values, units):
    """Add an array; axes that are not in the group yet are made."""
    words = name.replace("_", " ")
    if axes == (name,):
        add_scale(group, name, values, units=units, long_name=words)
        return
    used: list[str] = []
    for axis, length in zip(axes, values.shape, strict=True):
        dimension = axis
        while dimension in used:  # one dimension twice confuses every reader
            stem, _, count = dimension.partition("__")
            dimension = f"{stem}__{int(count or 1) + 1}"
        used.append(dimension)
        if dimension not in group:
            add_scale(group, dimension, np.arange(length), long_name=f"index: {axis}")
    add_variable(group, name, used, values, units=units, long_name=words)


def write_all(
    path: Path,
    stamp: str,
    title: str,
    kind: str,
    parts: Mapping[str, Any],
    unit: str = "m s-1",
) -> None:
    """Write several dataclasses into one file, a group each.

    Parameters
    ----------
    path : Path
        The file.
    stamp : str
        Fingerprint of what it was made from.
    title, kind : str
        See :func:`eddyshed.solver.files.new_file`.
    parts : mapping of str to dataclass instance
        Name of the group and what goes there.
    unit : str
        Of resolved coordinates.
    """
    with new_file(
        path, kind=kind, title=title, attributes={"fingerprint": stamp}
    ) as file:
        for name, value in parts.items():
            group = file.create_group(name, track_order=True)
            group.attrs["holds"] = type(value).__name__
            pack(group, value, unit)


def read_one(path: Path, kind: str, name: str, *classes: type) -> Any:
    """Read one dataclass out of a file that `write_all` made.

    Parameters
    ----------
    path : Path
        The file.
    kind, name : str
        Kind of the file, and name of the part.
    *classes : type
        What the part may be; the file says which it is.

    Returns
    -------
    instance of one of classes

    Raises
    ------
    DataError
        If the file is missing, damaged or of another kind, or lacks the part.
    """
    with open_file(path, kind=kind) as file:
        if name not in file:
            message = f"{path}: has no part {name!r}"
            raise DataError(message)
        try:
            holds = file[name].attrs["holds"]
            (cls,) = (known for known in classes if known.__name__ == holds)
            return unpack(file[name], cls)
        except (OSError, KeyError, RuntimeError, ValueError) as error:
            message = (
                f"{path}: part {name!r} cannot be read ({error}); remove the file and "
                "run the study again"
            )
            raise DataError(message) from error


def write_json(path: Path, stamp: str, content: dict[str, Any]) -> None:
    """Write a JSON file with its fingerprint; infinities become null."""
    text = json.dumps(
        _finite({"fingerprint": stamp, **content}), indent=1, allow_nan=False
    )
    with replacing(path) as temporary:
        temporary.write_text(text + "\n", encoding="utf-8")


def read_json(path: Path) -> dict[str, Any]:
    """Read a JSON file of ours.

    Raises
    ------
    DataError
        If it is missing or not an object in JSON.
    """
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
        problem = None if isinstance(found, dict) else "not an object"
    except (OSError, ValueError) as error:
        problem = error
    if problem is not None:
        message = (
            f"{path}: cannot be read ({problem}); remove it and run the study again"
        )
        raise DataError(message)
    return found


def read_fingerprint(path: Path) -> str:
    """Fingerprint that a file carries; empty if it cannot be read."""
    try:
        if path.suffix == ".h5":
            with open_file(path) as file:
                return str(file.attrs.get("fingerprint", ""))
        if path.suffix == ".json":
            return str(read_json(path).get("fingerprint", ""))
        text = path.read_text(encoding="utf-8")
    except (DataError, OSError, UnicodeDecodeError):
        return ""
    _, _, rest = text.partition('name="fingerprint" content="')
    return rest.partition('"')[0]


def plain(value: Any) -> Any:
    """Dataclasses and arrays as what JSON knows."""
    if dataclasses.is_dataclass(value):
        return {
            field.name: plain(getattr(value, field.name))
            for field in dataclasses.fields(value)
        }
    if isinstance(value, np.ndarray | np.generic):
        return value.tolist()
    if isinstance(value, Mapping):
        return {key: plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [plain(item) for item in value]
    return value


def _finite(value):
    """JSON has no infinity and no NaN: both become null."""
    if isinstance(value, float) and not np.isfinite(value):
        return None
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    return value
