"""Fields and profiles of a state on a grid fine enough to be looked at."""

from __future__ import annotations

from typing import Any

import numpy as np

from .means import of_batches
from .parts import Field, Profile

MAP_POINTS = 192  # of a map, from the modes that the space holds


class Finer:
    """Shows the fields of a space on a finer grid, by the functions they are sums of.

    Parameters
    ----------
    space : Periodic, Channel or Basin
    least : int
        Points that the longer axis has at least.

    Attributes
    ----------
    space : Periodic, Channel or Basin
        The same box with a whole multiple of the points.
    """

    def __init__(self, space, least: int):
        factor = max(1, -(-least // max(space.points)))
        points = tuple(factor * count for count in space.points)
        self.space = type(space)(points, space.lengths)
        self._coarse = space
        place = {label: i for i, label in enumerate(self.space.labels)}
        self._places = np.array([place[label] for label in space.labels])

    def modes(self, f: np.ndarray) -> np.ndarray:
        """Vector of a field, shape (n_real,), as one of the finer space."""
        result = np.zeros(self.space.n_real)
        result[self._places] = f
        return result

    def field(self, field: np.ndarray) -> np.ndarray:
        """A field on the coarse grid, as `fields` of an ocean gives it, on the finer.

        Parameters
        ----------
        field : ndarray, shape (ny, nx)
            A sum of the modes that the coarse space keeps.

        Returns
        -------
        ndarray, shape (factor * ny, factor * nx)
        """
        return self.space.to_grid(self.modes(self._coarse.to_modes(field)))


def fields_of(
    ocean: Any, finer: Finer, last: np.ndarray, batches: np.ndarray, mean: np.ndarray
) -> dict[str, Field]:
    """Every field of an ocean at the end and in the mean.

    Parameters
    ----------
    ocean : ocean
        Its fields are linear in the state.
    finer : Finer
        Of its space.
    last, mean : ndarray, shape (size,)
        The last state and the mean one.
    batches : ndarray, shape (batch, size)
        Mean states of stretches of the record.
    """
    x, y = finer.space.grid_axes

    def shown(z):
        return {name: finer.field(f) for name, f in ocean.fields(z).items()}

    snapshot, whole, parts = shown(last), shown(mean), [shown(z) for z in batches]
    result = {}
    for name, units in ocean.field_units.items():
        found = of_batches(np.array([part[name] for part in parts]), whole[name])
        result[name] = Field(
            units=units,
            x=x,
            y=y,
            snapshot=snapshot[name],
            mean=found.value,
            mean_error=found.error,
        )
    return result


def profile_of(
    ocean: Any, finer: Finer, last: np.ndarray, batches: np.ndarray, mean: np.ndarray
) -> Profile | None:
    """Velocity along x, or buoyancy, averaged along x; None if neither says much.

    Parameters and shapes are those of `fields_of`. Between walls in x the mean of
    the velocity is zero, and of two layers there are two.
    """
    if not ocean.space.x_is_periodic or "streamfunction" not in ocean.field_units:
        return None
    is_slice = "buoyancy" in ocean.field_units

    def along(z):
        if is_slice:
            return finer.field(ocean.fields(z)["buoyancy"]).mean(axis=1)
        return eastward_profile(finer.space, finer.modes(ocean.streamfunction(z)))

    found = of_batches(np.array([along(z) for z in batches]), along(mean))
    return Profile(
        name="b" if is_slice else "u",
        units=ocean.field_units["buoyancy"] if is_slice else ocean.unit,
        y=finer.space.grid_axes[1],
        snapshot=along(last),
        mean=found.value,
        mean_error=found.error,
    )


def eastward_profile(space, psi: np.ndarray) -> np.ndarray:
    """Velocity along x, averaged along x [m s-1], of a streamfunction, shape (ny,)."""
    u, _ = space.velocity(psi)
    return u.mean(axis=1)
