"""Fields on the grid, from files that others have made."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np

from .errors import DataError
from .quantities import quoted


def read_fields(
    path: Path, names: tuple[str, ...], points: tuple[int, int]
) -> dict[str, np.ndarray]:
    """Read fields by name.

    Parameters
    ----------
    path : Path
        A NumPy .npy file of one field, or an HDF5 or netCDF-4 file.
    names : tuple of str
        What the fields are called.
    points : tuple of int
        Grid points (nx, ny).

    Returns
    -------
    dict of ndarray, shape (ny, nx)

    Raises
    ------
    DataError
        If the file cannot be read, lacks a field, or a field is not of finite
        numbers on the grid.
    """
    if path.suffix == ".npy":
        if len(names) > 1:
            message = (
                f"{path}: holds one field, this ocean steps {', '.join(names)}; give "
                "an HDF5 file with a variable for each"
            )
            raise DataError(message)
        try:
            found = {names[0]: np.load(path, allow_pickle=False)}
        except (OSError, ValueError, EOFError) as error:
            message = f"{path}: cannot be read as a NumPy array ({error})"
            raise DataError(message) from error
    else:
        found = _hdf5_fields(path, names)
    nx, ny = points
    for name, values in found.items():
        if values.shape != (ny, nx) or values.dtype.kind not in "fiu":
            message = (
                f"{path}: {name} is an array of {values.dtype} of shape "
                f"{values.shape}; numbers of shape {(ny, nx)} (y, x) are needed, the "
                "points of [grid]"
            )
            raise DataError(message)
        if not np.all(np.isfinite(values)):
            message = f"{path}: {name} is not finite everywhere; fill its gaps first"
            raise DataError(message)
    return {name: values.astype(float) for name, values in found.items()}


def _hdf5_fields(path, names):
    """Fields by name from an HDF5 file, any one."""
    try:
        with h5py.File(path) as file:
            missing = [name for name in names if name not in file]
            if missing:
                message = (
                    f"{path}: has no variable {quoted(missing[0])}; found: "
                    f"{', '.join(file) or 'none'}"
                )
                raise DataError(message)
            return {name: file[name][...] for name in names}
    except OSError as error:
        message = f"{path}: cannot be read as HDF5 ({error}); give a .npy or .h5 file"
        raise DataError(message) from error
