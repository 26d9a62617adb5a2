"""Dataclasses of arrays to and from files.

Arrays become variables whose axes are named by :data:`AXES`; text and numbers
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

# Axes of every array that is written: class name -> field -> names of its axes.
AXES: dict[str, dict[str, tuple[str, ...]]] = {
    "Basis": {
        "vectors": ("coordinate", "mode"),
        "partners": ("mode",),
        "variance": ("mode",),
    },
    "Split": {
        "mean": ("coordinate",),
        "resolved_mean": ("resolved_mode",),
        "x": ("record", "resolved_mode"),
        "tendency": ("record", "resolved_mode"),
        "fine_x": ("fine_record", "resolved_mode"),
    },
    "Operators": {
        "F1": ("x",),
        "F2": ("y",),
        "A11": ("x", "x"),
        "A12": ("x", "y"),
        "A21": ("y", "x"),
        "B111": ("x", "x", "x"),
        "B112": ("x", "x", "y"),
        "B122": ("x", "y", "y"),
        "B211": ("y", "x", "x"),
        "B212": ("y", "x", "y"),
    },
    "OrnsteinUhlenbeck": {"rate": ("mode", "mode"), "covariance": ("mode", "mode")},
    "Estimate": {"value": ("mode",), "error": ("mode",)},
    "NoiseFit": {"rate_error": ("mode", "mode"), "uncorrected": ("mode",)},
    "ReducedModel": {
        "x_forcing": ("x",),
        "x_from_x": ("x", "x"),
        "x_from_xx": ("x", "x", "x"),
        "x_from_y": ("x", "y"),
        "x_from_xy": ("x", "x", "y"),
        "x_from_yy": ("x", "y", "y"),
        "y_forcing": ("y",),
        "y_from_x": ("y", "x"),
        "y_from_xx": ("y", "x", "x"),
        "y_from_xy": ("y", "x", "y"),
        "rate": ("y", "y"),
        "covariance": ("y", "y"),
    },
    "DiffusionModel": {"noise": ("power", "x", "power", "x")},
    "Polynomial": {
        "constant": ("x",),
        "linear": ("x", "x"),
        "quadratic": ("x", "x", "x"),
        "cubic": ("x", "x", "x", "x"),
    },
}


def pack(group: h5py.Group, value: Any) -> None:
    """Write a dataclass into a group.

    Parameters
    ----------
    group : h5py.Group
        An empty group.
    value : dataclass instance
        Its fields are arrays, text, numbers, tuples of text, dicts of numbers
        or dataclasses.
    """
    axes = AXES.get(type(value).__name__, {})
    for field in dataclasses.fields(value):
        item = getattr(value, field.name)
        if dataclasses.is_dataclass(item):
            pack(group.create_group(field.name, track_order=True), item)
        elif isinstance(item, np.ndarray):
            stored = item.astype(np.int8) if item.dtype == bool else item
            _add(group, field.name, axes[field.name], stored)
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
        hint = hints[field.name]
        if isinstance(hint, types.UnionType):
            hint = next(h for h in typing.get_args(hint) if h is not type(None))
        origin = typing.get_origin(hint) or hint
        if dataclasses.is_dataclass(hint):
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


def _add(group, name, axes, values):
    """Add an array; axes that are not in the group yet are made."""
    used: list[str] = []
    for axis, length in zip(axes, values.shape, strict=True):
        dimension = axis
        while dimension in used:  # one dimension twice confuses every reader
            stem, _, count = dimension.partition("__")
            dimension = f"{stem}__{int(count or 1) + 1}"
        used.append(dimension)
        if dimension not in group:
            add_scale(group, dimension, np.arange(length), long_name=f"index: {axis}")
    add_variable(group, name, used, values, long_name=name.replace("_", " "))


def write_all(
    path: Path, stamp: str, title: str, kind: str, parts: Mapping[str, Any]
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
    """
    with new_file(
        path, kind=kind, title=title, attributes={"fingerprint": stamp}
    ) as file:
        for name, value in parts.items():
            group = file.create_group(name, track_order=True)
            group.attrs["holds"] = type(value).__name__
            pack(group, value)


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
