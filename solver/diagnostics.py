"""What a flow does: budgets, spectra, fluxes between scales, transports.

A budget is closed by what the record says alone: how a quantity changed is set
against each source and sink, and what is left over is the residual. Spectra
and fluxes need an ocean whose coordinates are orthonormal in energy.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from .errors import DataError

BATCHES = 20  # common practice: the error of a mean is then known to a sixth
LEVELS = {"energy": ("m2 s-2", "m2 s-3"), "enstrophy": ("s-2", "s-3")}
FED = "_fed_by_"  # in names of what random forcing fed since the start of the run


class Flow(Protocol):
    """What the diagnostics need of an ocean."""

    waves: np.ndarray
    size: int

    def bilinear(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """B(u, w), shape (..., size)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Mean:
    """Mean over a record and its standard error, in one unit.

    Attributes
    ----------
    value, error : float
        The error is infinite if the record is too short to tell.
    """

    value: float
    error: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Budget:
    """A quantity, how it changed, and what changed it.

    Attributes
    ----------
    quantity : str
        ``energy`` or ``enstrophy``.
    units, rate_units : str
        Of the level, and of all the rates below.
    level : Mean
        The quantity itself.
    change : Mean
        Its value at the end less that at the start, over the length.
    terms : dict of str to Mean
        Each source (positive) and sink (negative).
    residual : Mean
        Change less the sum of the terms: the error of integrating over the
        sampled record and that of the time step.
    batches : int
        Stretches of the record that the errors come from.
    """

    quantity: str
    units: str
    rate_units: str
    level: Mean
    change: Mean
    terms: dict[str, Mean]
    residual: Mean
    batches: int


def budget_of(
    times: np.ndarray,
    series: Mapping[str, np.ndarray],
    units: Mapping[str, str],
    quantity: str = "energy",
) -> Budget:
    """Close the budget of a quantity over a record.

    Parameters
    ----------
    times : ndarray, shape (n_time,)
        Increasing [s].
    series : mapping of str to ndarray, shape (n_time,)
        The quantity itself; its sources and sinks, told by their unit; and, as
        ``<quantity>_fed_by_<what>`` in the unit of the quantity, what random
        forcing fed since the start of the run. Others are left alone.
    units : mapping of str to str
        Unit of each series.
    quantity : {"energy", "enstrophy"}
        Which budget.

    Returns
    -------
    Budget

    Raises
    ------
    DataError
        If the quantity is not in the record, or there are under two records.

    Notes
    -----
    Rates are integrated by the trapezoidal rule. Errors are those of 20 batch
    means (fewer if a batch would hold under two records), which is right when
    a batch is long against the correlation of the rates.
    """
    level_units, rate_units = LEVELS[quantity]
    if quantity not in series or len(times) < 2:
        message = (
            f"{quantity} budget: needs at least two records of the {quantity}, found "
            f"{len(series.get(quantity, ()))}; this ocean may have none"
        )
        raise DataError(message)
    steps = np.diff(times)
    count = max(1, min(BATCHES, len(steps) // 2))
    edges = np.round(np.linspace(0, len(steps), count + 1)).astype(int)
    weights = np.add.reduceat(steps, edges[:-1])

    def mean_of(values):
        """Mean over each batch, and over the record, of the values in intervals."""
        parts = np.add.reduceat(values, edges[:-1])
        return _mean(parts / weights, values.sum() / weights.sum())

    def rate(values):
        return (values[1:] + values[:-1]) / 2 * steps

    gains = {
        name: rate(np.asarray(values))
        for name, values in series.items()
        if units[name] == rate_units
    }
    fed = {
        name: np.diff(values)
        for name, values in series.items()
        if name.startswith(quantity + FED) and units[name] == level_units
    }
    gains |= {name.removeprefix(quantity + FED): value for name, value in fed.items()}
    change = np.diff(series[quantity])
    return Budget(
        quantity=quantity,
        units=level_units,
        rate_units=rate_units,
        level=mean_of(rate(np.asarray(series[quantity]))),
        change=mean_of(change),
        terms={name: mean_of(values) for name, values in gains.items()},
        residual=mean_of(change - sum(gains.values())),
        batches=count,
    )


def _mean(parts, whole):
    """Mean whose values in batches are known."""
    count = len(parts)
    error = parts.std(ddof=1) / np.sqrt(count) if count > 1 else np.inf
    return Mean(value=float(whole), error=float(error))


def shells(waves: np.ndarray) -> np.ndarray:
    """Total wavenumber of each coordinate, rounded to the nearest whole one.

    Parameters
    ----------
    waves : ndarray of int, shape (size, 2)
        Waves per box, or half waves between walls, in x and y.

    Returns
    -------
    ndarray of int, shape (size,)
    """
    return np.rint(np.hypot(*waves.T)).astype(int)


def isotropic_spectrum(ocean: Flow, states: np.ndarray) -> np.ndarray:
    """Energy by total wavenumber.

    Parameters
    ----------
    ocean : Flow
    states : ndarray, shape (..., size)

    Returns
    -------
    ndarray, shape (..., n)
        Energy [m2 s-2] in each shell of whole total wavenumber 0, 1, ...; it
        sums to the energy of the state.
    """
    return _binned(np.square(states) / 2, shells(ocean.waves))


def zonal_spectrum(ocean: Flow, states: np.ndarray) -> np.ndarray:
    """Energy of the flow that does not vary in x, by wavenumber in y.

    Parameters
    ----------
    ocean : Flow
        Of a space that is periodic in x: between walls everything varies.
    states : ndarray, shape (..., size)

    Returns
    -------
    ndarray, shape (..., n)
        Energy [m2 s-2] at wavenumber 0, 1, ... in y.

    Raises
    ------
    DataError
        If every coordinate varies in x.
    """
    zonal = np.flatnonzero(ocean.waves[:, 0] == 0)
    if not len(zonal):
        message = (
            "zonal spectrum: every mode of this space varies in x; ask for it in a "
            "space that is periodic in x"
        )
        raise DataError(message)
    energy = np.square(np.asarray(states)[..., zonal]) / 2
    return _binned(energy, np.abs(ocean.waves[zonal, 1]))


def spectral_flux(ocean: Flow, states: np.ndarray) -> np.ndarray:
    r"""Energy that advection carries across each total wavenumber.

    Parameters
    ----------
    ocean : Flow
        Its advection must conserve energy.
    states : ndarray, shape (..., size)

    Returns
    -------
    ndarray, shape (..., n)
        Rate [m2 s-3] at which energy leaves all shells up to 0, 1, ... for
        smaller scales; the last is zero to round-off.

    Notes
    -----
    ``flux(K) = -sum over coordinates of shells <= K of z B(z, z)`` (Frisch,
    Turbulence, 1995, section 2.4).
    """
    transfer = np.multiply(states, ocean.bilinear(states, states))
    return -np.cumsum(_binned(transfer, shells(ocean.waves)), axis=-1)


def _binned(values, bins):
    """Sums of the last axis in bins, shape (..., largest bin + 1)."""
    order = np.argsort(bins, kind="stable")
    found, starts = np.unique(bins[order], return_index=True)
    result = np.zeros((*np.shape(values)[:-1], bins.max() + 1))
    result[..., found] = np.add.reduceat(values[..., order], starts, axis=-1)
    return result


@dataclass(frozen=True, slots=True, kw_only=True)
class Gyres:
    """Circulation in a closed basin, from its streamfunction.

    Attributes
    ----------
    least, greatest : float
        Extremes of the streamfunction [m2 s-1]: transports per unit depth of
        the strongest anticlockwise gyre (negative) and clockwise one (positive).
    least_at, greatest_at : (float, float)
        Where they are, (x, y) [m].
    boundary_transport : float
        Transport per unit depth between the western wall and the extreme that
        is larger in size [m2 s-1], northward positive.
    boundary_width : float
        Distance of that extreme from the western wall [m].
    """

    least: float
    greatest: float
    least_at: tuple[float, float]
    greatest_at: tuple[float, float]
    boundary_transport: float
    boundary_width: float


def gyres(x: np.ndarray, y: np.ndarray, psi: np.ndarray) -> Gyres:
    """Measure the gyres of a basin whose walls are the line ``psi = 0``.

    Parameters
    ----------
    x, y : ndarray, shapes (nx,), (ny,)
        Grid coordinates, from the western and the southern wall [m].
    psi : ndarray, shape (ny, nx)
        Streamfunction [m2 s-1], with ``v = psi_x``.

    Returns
    -------
    Gyres
        Extremes on the grid, not between its points.

    Raises
    ------
    DataError
        If the field does not fit the grid.
    """
    if psi.shape != (len(y), len(x)):
        message = (
            f"streamfunction of shape {psi.shape} does not fit a grid of "
            f"{(len(y), len(x))} points (y, x)"
        )
        raise DataError(message)
    low, high = (np.unravel_index(f(psi), psi.shape) for f in (np.argmin, np.argmax))
    main = low if -psi[low] > psi[high] else high
    return Gyres(
        least=float(psi[low]),
        greatest=float(psi[high]),
        least_at=(float(x[low[1]]), float(y[low[0]])),
        greatest_at=(float(x[high[1]]), float(y[high[0]])),
        boundary_transport=float(psi[main]),
        boundary_width=float(x[main[1]]),
    )
