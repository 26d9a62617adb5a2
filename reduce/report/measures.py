"""What the report says of the flow: means with errors by batch means, and fields."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from eddyshed.solver.diagnostics import FED, LEVELS
from eddyshed.solver.record import TruthRecord

from ..statistics.estimate import Estimate

BATCHES = 20  # batch means: common practice, the error is then known to a sixth


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Map:
    """A field over the box, with contours of the streamfunction.

    Attributes
    ----------
    name, units : str
        Of the field.
    title : str
        Which layer; empty if there is one only.
    field, streamfunction : ndarray, shape (ny, nx)
        [units] and [m2 s-1], on one grid.
    x, y : ndarray, shapes (nx,), (ny,)
        Grid coordinates [m].
    levels : ndarray, shape (level,)
        Contours of the streamfunction.
    interval : float
        Between contours [m2 s-1]; zero if there are none.
    """

    name: str
    units: str
    title: str
    field: np.ndarray
    streamfunction: np.ndarray
    x: np.ndarray
    y: np.ndarray
    levels: np.ndarray
    interval: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Profile:
    """A quantity averaged along x.

    Attributes
    ----------
    name, units : str
        Of the quantity.
    y : ndarray, shape (ny,)
        Distance from the origin, across [m].
    mean : Estimate, shape (ny,)
        Time mean.
    last : ndarray, shape (ny,)
        The same of the last state.
    """

    name: str
    units: str
    y: np.ndarray
    mean: Estimate
    last: np.ndarray


def batch_edges(count: int) -> np.ndarray:
    """Cut a record of `count` samples into equal parts; first index of each, and end.

    There are 20 parts, or fewer if they would hold less than two samples.
    """
    batches = max(1, min(BATCHES, count // 2))
    return np.round(np.linspace(0, count, batches + 1)).astype(int)


def of_batches(values: np.ndarray, whole: np.ndarray) -> Estimate:
    """Estimate of a mean whose values in batches are known.

    Parameters
    ----------
    values : ndarray, shape (batch, ...)
        Mean of each batch.
    whole : ndarray, shape (...)
        Mean of the record.

    Returns
    -------
    Estimate, shape (...)
        The error is infinite if there is one batch only.
    """
    count = len(values)
    if count < 2:
        return Estimate(whole, np.full(np.shape(whole), np.inf))
    return Estimate(whole, values.std(axis=0, ddof=1) / np.sqrt(count))


def energy_rates(
    times: np.ndarray, series: dict[str, np.ndarray], units: dict[str, str]
) -> dict[str, np.ndarray]:
    """What fed or drained the energy in each interval of a record, for drawing.

    Parameters
    ----------
    times : ndarray, shape (n_time,)
        Increasing [s].
    series : dict of ndarray, each (n_time,)
        As recorded; see `eddyshed.solver.diagnostics.budget_of`.
    units : dict of str
        Of each.

    Returns
    -------
    dict of ndarray, each (n_time - 1,)
        Mean rates [m2 s-3] by the names that `budget_of` gives them; those that
        are zero throughout are left out.
    """
    level_units, rate_units = LEVELS["energy"]
    prefix = "energy" + FED
    rates = {
        name: (values[1:] + values[:-1]) / 2
        for name, values in series.items()
        if units[name] == rate_units
    }
    rates |= {
        name.removeprefix(prefix): np.diff(values) / np.diff(times)
        for name, values in series.items()
        if name.startswith(prefix) and units[name] == level_units
    }
    return {name: values for name, values in rates.items() if np.any(values)}


def batch_states(record: TruthRecord) -> np.ndarray:
    """Mean state of each batch of a record, shape (batch, size)."""
    edges = batch_edges(len(record.times))
    means = np.zeros((len(edges) - 1, record.size))
    for where, states in record.chunks():
        place = np.searchsorted(edges, np.arange(where.start, where.stop), "right") - 1
        first = np.flatnonzero(np.diff(place, prepend=-1))
        means[place[first]] += np.add.reduceat(states, first, axis=0)
    return means / np.diff(edges)[:, np.newaxis]


def eastward_profile(space, psi: np.ndarray) -> np.ndarray:
    """Velocity along x, averaged along x [m s-1], of a streamfunction, shape (ny,)."""
    u, _ = space.velocity(psi)
    return u.mean(axis=1)


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


def is_stretched(lengths: tuple[float, float]) -> bool:
    """Whether a map of a box is not drawn to scale: a long one would be a line."""
    return not 0.4 <= lengths[1] / lengths[0] <= 2.5


def block_ranges(series: np.ndarray, most: int) -> tuple[np.ndarray, ...]:
    """Mean, least and greatest of at most `most` blocks of a series, for drawing.

    Parameters
    ----------
    series : ndarray, shape (n_time,)
    most : int
        Number of blocks at most.

    Returns
    -------
    mean, low, high : ndarray, shape (block,)
    """
    starts = np.unique(np.linspace(0, len(series), min(most, len(series)) + 1)[:-1])
    starts = starts.astype(int)
    sizes = np.diff(starts, append=len(series))
    return (
        np.add.reduceat(series, starts) / sizes,
        np.minimum.reduceat(series, starts),
        np.maximum.reduceat(series, starts),
    )
