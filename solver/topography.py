"""Shapes of the bottom, and how they fit a space.

Heights are given in metres above the mean bottom; what the flow feels is
``h = coriolis * height / depth``. In a space with walls the topography must be
a sine series like the streamfunction, or the Jacobian of the two could not be
projected exactly. So it must vanish at walls: a bump must stand clear of them,
a ridge that runs into a wall is tapered by half a sine. A shape that the modes
kept do not hold to a few percent is refused.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np

from .config import setting
from .errors import DataError
from .grid_files import read_fields

# Of a shape's rms height: what may be lost to the modes left out. A Gaussian
# whose radius is a fifth of the shortest wavelength kept stays below it.
LARGEST_LOSS = 0.05


@dataclass(frozen=True, slots=True, kw_only=True)
class Bump:
    """A round hill (or hollow), ``height exp(-r^2 / (2 radius^2))``."""

    height: float = setting(unit="m", doc="height of the top; negative for a hollow")
    radius: float = setting(
        unit="m", above=0, doc="distance at which it has fallen to 61 % of its height"
    )
    centre: tuple[float, float] = setting(
        unit="m", doc="where the top is, in x and y from the corner of the box"
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Ridge:
    """A straight ridge (or trench) with a Gaussian profile."""

    height: float = setting(unit="m", doc="height of the crest; negative for a trench")
    width: float = setting(
        unit="m",
        above=0,
        doc="distance from the crest at which it has fallen to 61 % of its height",
    )
    position: float = setting(
        unit="m", doc="where the crest is, across its direction from the box's edge"
    )
    along: str = setting(
        default="y",
        choices=("x", "y"),
        doc="direction in which it runs; where that ends at walls the height is "
        "tapered by half a sine wave",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Waves:
    """A sinusoidal bottom: ``cos(k.x + phase)``, a sine in y or x between walls."""

    height: float = setting(unit="m", doc="largest height")
    waves: tuple[int, int] = setting(
        doc="waves per box in x and y, half waves between walls"
    )
    phase: float = setting(
        default=0.0,
        doc="phase of the cosine at the origin, in radians; none in a basin",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class HeightFile:
    """Heights on the grid, from a file."""

    path: str = setting(
        doc='a NumPy .npy file, or an HDF5 or netCDF-4 file with a variable "height"; '
        "in metres, of shape (points in y, points in x); under the current folder if "
        "not absolute"
    )


Topography: TypeAlias = Bump | Ridge | Waves | HeightFile
TOPOGRAPHY_KINDS = {"bump": Bump, "ridge": Ridge, "waves": Waves, "file": HeightFile}


def heights(space: Any, shapes: Mapping[str, Topography]) -> np.ndarray:
    """Height of the bottom, all shapes together.

    Parameters
    ----------
    space : Periodic, Channel or Basin
    shapes : mapping of str to Topography
        By name.

    Returns
    -------
    ndarray, shape (n_real,)
        Height in the space [m]; where it has no walls, above its mean.

    Raises
    ------
    DataError
        If a shape does not fit the space, or its file cannot be used.
    """
    total = np.zeros(space.n_real)
    for name, shape in shapes.items():
        try:
            total += _height(space, shape)
        except DataError as error:
            message = f"[ocean.topography.{name}] {error}"
            raise DataError(message) from error
    return total


def _height(space, shape):
    """One shape in the space."""
    if isinstance(shape, Waves):
        return shape.height * space.wave(shape.waves, shape.phase)
    if isinstance(shape, HeightFile):
        path = Path(shape.path)
        field = read_fields(path, ("height",), space.points)["height"]
        return _fitted(space, field, str(path))
    x, y = space.grid_axes
    if isinstance(shape, Bump):
        across = _gaussian(space, 0, x, shape.centre[0], shape.radius)
        upwards = _gaussian(space, 1, y, shape.centre[1], shape.radius)
        what = f"a bump of radius {shape.radius:.6g} m"
    else:
        profiles = []
        for axis, coordinate in enumerate((x, y)):
            if "xy"[axis] != shape.along:
                profile = _gaussian(
                    space, axis, coordinate, shape.position, shape.width
                )
            elif _is_periodic(space, axis):
                profile = np.ones(len(coordinate))
            else:
                profile = np.sin(np.pi * coordinate / space.lengths[axis])
            profiles.append(profile)
        across, upwards = profiles
        what = f"a ridge of width {shape.width:.6g} m"
    field = shape.height * upwards[:, np.newaxis] * across[np.newaxis, :]
    return _fitted(space, field, what)


def _is_periodic(space, axis):
    return (space.x_is_periodic, space.y_is_periodic)[axis]


def _gaussian(space, axis, coordinate, centre, width):
    """Gaussian on the grid; in a periodic direction with its nearest images."""
    length = space.lengths[axis]
    if not 0 <= centre <= length:
        message = (
            f"stands at {'xy'[axis]} = {centre:.6g} m, outside the box of "
            f"{length:.6g} m; move it inside"
        )
        raise DataError(message)
    images = (-1, 0, 1) if _is_periodic(space, axis) else (0,)
    return sum(
        np.exp(-(((coordinate - centre + image * length) / width) ** 2) / 2)
        for image in images
    )


def _fitted(space, field, what):
    """A field in the space, if it is there what it is on the grid."""
    if space.x_is_periodic and space.y_is_periodic:
        field = field - field.mean()
    modes = space.to_modes(field)
    size = np.sqrt(np.mean(field**2))
    lost = np.sqrt(np.mean((field - space.to_grid(modes)) ** 2))
    if lost > LARGEST_LOSS * size:
        walls = "" if space.y_is_periodic else ", to bring it to zero at the walls"
        message = (
            f"{what} does not fit the space: {100 * lost / size:.3g} % of its rms "
            f"height is lost (up to {100 * LARGEST_LOSS:g} % is allowed); make it "
            f"smoother or take more points{walls}"
        )
        raise DataError(message)
    return modes
