"""Vectors that someone else has made, from a file."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
from scipy import linalg

from eddyshed.solver.errors import DataError
from eddyshed.solver.quantities import quoted

from ..contract import Model
from .basis import Basis, Flat, dependent
from .settings import FileSettings


def file_basis(settings: FileSettings, model: Model) -> Basis:
    """Read vectors and make them orthonormal in the model's inner product.

    Parameters
    ----------
    settings : FileSettings
        The file and the variable in it.
    model : Model
        Gives the size and the inner product.

    Returns
    -------
    Basis
        Each mode is the part of a vector that those before it do not span, so
        that the first few span what the first few in the file do; orthonormal
        vectors come out as they are. The variances are zero: they are the
        truth's to say.

    Raises
    ------
    DataError
        If the file cannot be read, lacks the variable, or its vectors are not
        finite, of another size, or not independent.
    """
    path = Path(settings.path)
    flat = Flat.of(model)
    vectors = flat.states(_read(path, settings, model.size).T).T
    found = dependent(vectors)
    if found is not None:
        number, others = found
        of = (
            f"a combination of {', '.join(str(k + 1) for k in others)}, to one part in "
            "a million"
            if others
            else "zero"
        )
        message = (
            f"{path}: vector {number + 1} of {settings.variable} is {of}; leave it out"
        )
        raise DataError(message)
    vectors, triangle = linalg.qr(
        vectors / np.linalg.norm(vectors, axis=0), mode="economic"
    )
    vectors *= np.sign(np.diag(triangle))
    return Basis(
        vectors=flat.vectors(vectors),
        labels=tuple(f"vector {k + 1}" for k in range(vectors.shape[1])),
        partners=np.full(vectors.shape[1], -1),
        variance=np.zeros(vectors.shape[1]),
    )


def _read(path, settings, size):
    """Vectors of a file, shape (size, k), checked."""
    try:
        with h5py.File(path) as file:
            held = file.get(settings.variable)
            if not isinstance(held, h5py.Dataset):
                message = (
                    f"{path}: has no variable {quoted(settings.variable)}; found: "
                    f"{', '.join(_variables(file)) or 'none'}"
                )
                raise DataError(message)
            shape, kind = held.shape, held.dtype.kind
            fits = len(shape) == 2 and shape[0] == size and kind in "fiu"
            values = held[:, : settings.modes] if fits else None
    except OSError as error:
        message = (
            f"{path}: cannot be read as HDF5 or netCDF-4 ({error}); give such a file"
        )
        raise DataError(message) from error
    if values is None:
        advice = (
            "; swap its axes"
            if len(shape) == 2 and shape[1] == size != shape[0]
            else ""
        )
        message = (
            f"{path}: {settings.variable} has the shape {shape} and type "
            f"{held_type(kind)}; columns of real numbers in the {size} coordinates of "
            f"this grid are needed, of shape ({size}, any number){advice}"
        )
        raise DataError(message)
    count = values.shape[1]
    if settings.modes is not None and count < settings.modes:
        message = (
            f"[resolved] modes = {settings.modes}, but {path} holds {count} vectors; "
            "ask for fewer"
        )
        raise DataError(message)
    if not 0 < count < size:
        message = (
            f"{path}: {count} vectors of {size} coordinates; at least one must be "
            "kept, and some coordinates left unresolved"
        )
        raise DataError(message)
    if not np.all(np.isfinite(values)):
        message = f"{path}: {settings.variable} is not finite everywhere"
        raise DataError(message)
    return values.astype(float)


def held_type(kind: str) -> str:
    """What numpy's letter for a type means."""
    names = {"f": "real", "i": "whole", "u": "whole", "c": "complex", "b": "true/false"}
    return names.get(kind, "text or records")


def _variables(file):
    """Paths of all variables of a file."""
    names: list[str] = []
    file.visititems(
        lambda name, item: (
            names.append(name) if isinstance(item, h5py.Dataset) else None
        )
    )
    return names
