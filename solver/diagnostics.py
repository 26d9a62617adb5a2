"""What a flow does: its budgets, and the transport of its gyres.

A budget is closed by what the record says alone: how a quantity changed is set
against each source and sink, and what is left over is the residual.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from .errors import DataError

BATCHES = 20  # common practice: the error of a mean is then known to a sixth
LEVELS = {"energy": ("m2 s-2", "m2 s-3"), "enstrophy": ("s-2", "s-3")}
FED = "_fed_by_"  # in names of what random forcing fed since the start of the run


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
    level, change, gains = rates_of(times, series, units, quantity)
    steps = np.diff(times)
    count = max(1, min(BATCHES, len(steps) // 2))
    edges = np.round(np.linspace(0, len(steps), count + 1)).astype(int)
    weights = np.add.reduceat(steps, edges[:-1])

    def mean_of(rates):
        """Mean over each batch, and over the record, of rates in intervals."""
        values = rates * steps
        parts = np.add.reduceat(values, edges[:-1])
        return _mean(parts / weights, values.sum() / weights.sum())

    level_units, rate_units = LEVELS[quantity]
    return Budget(
        quantity=quantity,
        units=level_units,
        rate_units=rate_units,
        level=mean_of(level),
        change=mean_of(change),
        terms={name: mean_of(values) for name, values in gains.items()},
        residual=mean_of(change - sum(gains.values())),
        batches=count,
    )


def rates_of(
    times: np.ndarray,
    series: Mapping[str, np.ndarray],
    units: Mapping[str, str],
    quantity: str = "energy",
) -> tuple[np.ndarray, np.ndarray, dict[str, np.ndarray]]:
    """A quantity, its change, and what changed it, in each interval of a record.

    Parameters
    ----------
    times, series, units, quantity
        As in `budget_of`.

    Returns
    -------
    level : ndarray, shape (n_time - 1,)
        Mean of the quantity over the interval, by the trapezoidal rule.
    change : ndarray, shape (n_time - 1,)
        Its difference over the interval, as a rate.
    gains : dict of str to ndarray, each (n_time - 1,)
        Rate of each source (positive) and sink.

    Raises
    ------
    DataError
        As `budget_of`.
    """
    level_units, rate_units = LEVELS[quantity]
    if quantity not in series or len(times) < 2:
        message = (
            f"{quantity} budget: needs at least two records of the {quantity}, found "
            f"{len(series.get(quantity, ()))}; this ocean may have none"
        )
        raise DataError(message)
    steps = np.diff(times)

    def middle(values):
        return (values[1:] + values[:-1]) / 2

    gains = {
        name: middle(np.asarray(values))
        for name, values in series.items()
        if units[name] == rate_units
    }
    gains |= {
        name.removeprefix(quantity + FED): np.diff(values) / steps
        for name, values in series.items()
        if name.startswith(quantity + FED) and units[name] == level_units
    }
    level = np.asarray(series[quantity])
    return middle(level), np.diff(level) / steps, gains


def _mean(parts, whole):
    """Mean whose values in batches are known."""
    count = len(parts)
    error = parts.std(ddof=1) / np.sqrt(count) if count > 1 else np.inf
    return Mean(value=float(whole), error=float(error))


@dataclass(frozen=True, slots=True, kw_only=True)
class Gyres:
    """Circulation in a closed basin, from its streamfunction.

    Attributes
    ----------
    least, greatest : float
        Extremes of the streamfunction [m2 s-1]: transports per unit depth of
        the strongest anticlockwise gyre (negative) and clockwise one (positive).
    least_at, greatest_at : (float, float)
        Where they are, (x, y) [m]. As the streamfunction vanishes at the wall,
        each extreme is also the transport of the gyre's western boundary
        current, northward positive, and its x the width of that current.
    boundary_transport : float
        The extreme that is larger in size [m2 s-1].
    boundary_width : float
        Its distance from the western wall [m].
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
        Extremes of the parabolas, in x and in y, through the extreme on the
        grid and the points beside it.

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
    least, least_at = _extreme(x, y, psi, np.argmin)
    greatest, greatest_at = _extreme(x, y, psi, np.argmax)
    northward = greatest >= -least
    return Gyres(
        least=least,
        greatest=greatest,
        least_at=least_at,
        greatest_at=greatest_at,
        boundary_transport=greatest if northward else least,
        boundary_width=greatest_at[0] if northward else least_at[0],
    )


def _extreme(x, y, psi, find):
    """Value and place of an extreme, between the points of an even grid."""
    row, column = np.unravel_index(find(psi), psi.shape)
    value, place = float(psi[row, column]), []
    for axis, line, k in ((x, psi[row], column), (y, psi[:, column], row)):
        offset = 0.0
        if 0 < k < len(axis) - 1:
            slope = (line[k + 1] - line[k - 1]) / 2
            bend = line[k + 1] - 2 * line[k] + line[k - 1]
            if bend != 0:
                offset = -slope / bend  # within half a spacing: k is the extreme
                value += float(slope * offset / 2)
        place.append(float(axis[k] + offset * (axis[1] - axis[0])))
    return value, (place[0], place[1])
