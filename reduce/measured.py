"""What is measured of the resolved modes, in its own units, for people."""

from __future__ import annotations

from typing import Any

import numpy as np

from .bases.basis import Basis
from .scores import summarise
from .statistics.estimate import Estimate
from .store import plain

QUANTITIES = ("mean", "standard deviation", "integral time")


def measured_statistics(
    basis: Basis, series: np.ndarray, step: float, rng: np.random.Generator
) -> dict[str, Any] | None:
    """Statistics of what is measured along a series of the resolved modes.

    Parameters
    ----------
    basis : Basis
        The resolved modes.
    series : ndarray, shape (member, time, mode)
        Their coordinates, not centred.
    step : float
        Sampling interval [s].
    rng : numpy.random.Generator
        For the bootstrap.

    Returns
    -------
    dict or None
        By the names of `QUANTITIES`, plain values and errors in the units of
        what is measured (seconds for the time); None if nothing is measured.
    """
    if basis.measured is None:
        return None
    found = summarise(series @ basis.measured.matrix.T, step, rng)
    deviation = np.sqrt(found.variance.value)
    estimates = (
        found.mean,
        Estimate(deviation, found.variance.error / (2 * deviation)),
        found.integral_time,
    )
    return {name: plain(e) for name, e in zip(QUANTITIES, estimates, strict=True)}


def measured_names(basis: Basis) -> dict[str, list[str]] | None:
    """Labels, units and long names of what is measured; None if nothing is."""
    if basis.measured is None:
        return None
    found = basis.measured
    return {
        "labels": list(found.labels),
        "units": list(found.units),
        "long_names": list(found.long_names),
    }


def measured_rows(benchmark: dict[str, Any]) -> list[list[Any]]:
    """Rows of a table: quantity, unit, label, then a column for each series.

    Parameters
    ----------
    benchmark : dict
        The content of ``benchmark.json``.

    Returns
    -------
    list of [str, str, str, list of (value, error)]
        Empty if nothing is measured. Columns are the truth and every closure
        that has scores, in their order; times are in days.
    """
    names = benchmark["measured"]
    if names is None:
        return []
    sides = [benchmark["truth"]["measured"]]
    sides += [e["measured"] for e in benchmark["closures"] if e["measured"] is not None]
    rows = []
    for quantity in QUANTITIES:
        time = quantity == "integral time"
        scale = 86400.0 if time else 1.0
        for k, label in enumerate(names["labels"]):
            pairs = [
                tuple(
                    None
                    if side[quantity][part][k] is None
                    else side[quantity][part][k] / scale
                    for part in ("value", "error")
                )
                for side in sides
            ]
            rows.append([quantity, "d" if time else names["units"][k], label, pairs])
    return rows
