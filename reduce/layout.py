"""How dataclasses lie in files: the axes of their arrays, and the units."""

from __future__ import annotations

import re
from collections.abc import Callable
from typing import Any

# Axes of every array that is written: class name -> field -> names of its axes.
AXES: dict[str, dict[str, tuple[str, ...]]] = {
    "Basis": {
        "vectors": ("coordinate", "mode"),
        "partners": ("mode",),
        "variance": ("mode",),
    },
    "Measured": {"matrix": ("measured", "mode")},
    "Split": {
        "mean": ("coordinate",),
        "resolved_mean": ("resolved_mode",),
        "x": ("member", "record", "resolved_mode"),
        "tendency": ("member", "record", "resolved_mode"),
        "fine_x": ("member", "fine_record", "resolved_mode"),
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
    "Variation": {
        "means": ("pattern",),
        "resolved": ("pattern", "x"),
        "unresolved": ("pattern", "y"),
    },
    "OrnsteinUhlenbeck": {"rate": ("mode", "mode"), "covariance": ("mode", "mode")},
    "Estimate": {"value": ("mode",), "error": ("mode",)},
    "Spectrum": {
        "wavenumber": ("wavenumber",),
        "energy": ("wavenumber",),
        "energy_error": ("wavenumber",),
        "part": ("component", "wavenumber"),
        "part_error": ("component", "wavenumber"),
    },
    "ZonalSpectrum": {
        "wavenumber": ("wavenumber",),
        "energy": ("wavenumber",),
        "energy_error": ("wavenumber",),
    },
    "Flux": {
        "wavenumber": ("wavenumber",),
        "flux": ("wavenumber",),
        "flux_error": ("wavenumber",),
    },
    "Field": {
        "x": ("x",),
        "y": ("y",),
        "snapshot": ("y", "x"),
        "mean": ("y", "x"),
        "mean_error": ("y", "x"),
    },
    "Profile": {
        "y": ("y",),
        "snapshot": ("y",),
        "mean": ("y",),
        "mean_error": ("y",),
    },
    "MeanBudget": {
        "term": ("name",),
        "term_error": ("name",),
        "time": ("time",),
        "level_block": ("member", "time"),
        "level_least": ("member", "time"),
        "level_greatest": ("member", "time"),
        "rate_time": ("rate_time",),
        "rate_block": ("member", "name", "rate_time"),
    },
    "Measure": {
        "time": ("time",),
        "block": ("member", "time"),
        "block_least": ("member", "time"),
        "block_greatest": ("member", "time"),
    },
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

# Powers of the unit of resolved coordinates and of the second, for units that
# depend on the inner product of the reduction.
RATE_UNIT = (0, -1)
X, X_RATE, X_SQUARED, PER_X = (1, 0), (1, -1), (2, 0), (-1, -1)

# Units of arrays, where they are known: class name -> field -> unit, powers as
# above, or the field that holds the unit. What of a reduced model bears on y has
# none: each closure has its own y. An array whose one axis bears its own name is
# the coordinate along that axis; it comes before those that need it.
UNITS: dict[str, dict[str, str | tuple[int, int]]] = {
    "Basis": {"variance": X_SQUARED},
    "Split": {
        "times": "s",
        "mean": X,
        "resolved_mean": X,
        "x": X,
        "tendency": X_RATE,
        "fine_x": X,
    },
    "Operators": {
        **dict.fromkeys(("F1", "F2"), X_RATE),
        **dict.fromkeys(("A11", "A12", "A21"), RATE_UNIT),
        **dict.fromkeys(("B111", "B112", "B122", "B211", "B212"), PER_X),
    },
    "OrnsteinUhlenbeck": {"rate": RATE_UNIT, "covariance": X_SQUARED},
    "NoiseFit": {"rate_error": RATE_UNIT},
    "ReducedModel": {
        "x_forcing": X_RATE,
        "x_from_x": RATE_UNIT,
        "x_from_xx": PER_X,
        "rate": RATE_UNIT,
    },
    "Spectrum": {
        "wavenumber": "m-1",
        **dict.fromkeys(("energy", "energy_error", "part", "part_error"), "m2 s-2"),
    },
    "ZonalSpectrum": {
        "wavenumber": "m-1",
        "energy": "m2 s-2",
        "energy_error": "m2 s-2",
    },
    "Flux": {"wavenumber": "m-1", "flux": "units", "flux_error": "units"},
    "Field": {
        "x": "m",
        "y": "m",
        **dict.fromkeys(("snapshot", "mean", "mean_error"), "units"),
    },
    "Profile": {
        "y": "m",
        **dict.fromkeys(("snapshot", "mean", "mean_error"), "units"),
    },
    "MeanBudget": {
        "time": "s",
        "rate_time": "s",
        **dict.fromkeys(("level_block", "level_least", "level_greatest"), "units"),
        **dict.fromkeys(("term", "term_error", "rate_block"), "rate_units"),
    },
    "Measure": {
        "time": "s",
        **dict.fromkeys(("block", "block_least", "block_greatest"), "units"),
    },
}
# Those of estimates, by what is estimated.
ESTIMATES = {"variance": X_SQUARED, "decay": RATE_UNIT, "frequency": RATE_UNIT}


def units_of(value: Any, name: str, unit: str) -> Callable[[str], str | None]:
    """Return a function that gives the unit of an array of a dataclass.

    Parameters
    ----------
    value : dataclass instance
    name : str
        What it is called where it is kept.
    unit : str
        Of resolved coordinates.

    Returns
    -------
    callable
        From the name of a field to its unit; None if it has none that is known.
    """
    kind = type(value).__name__
    if kind == "Estimate":
        found = next((powers for key, powers in ESTIMATES.items() if key in name), "1")
        known, other = dict.fromkeys(("value", "error"), found), "1"
    else:
        known = UNITS.get(kind, {})
        other = None if kind == "ReducedModel" else "1"

    def of(field):
        found = known.get(field, other)
        if isinstance(found, tuple):
            return composed(unit, *found)
        return found if found is None else getattr(value, found, found)

    return of


def composed(unit: str, power: int, seconds: int) -> str:
    """Product of powers of a unit and of the second, as UDUNITS writes it.

    Examples
    --------
    >>> composed("m s-1", 2, -1)
    'm2 s-3'
    >>> composed("m s-1", -1, -1)
    'm-1'
    """
    exponents: dict[str, int] = {}
    for factor in unit.split():
        symbol, exponent = re.fullmatch(r"(.*?)(-?[0-9]+)?", factor).groups()
        if symbol:  # not the 1 of what has no unit
            exponents[symbol] = exponents.get(symbol, 0) + power * int(exponent or 1)
    exponents["s"] = exponents.get("s", 0) + seconds
    factors = [
        symbol if exponent == 1 else f"{symbol}{exponent}"
        for symbol, exponent in exponents.items()
        if exponent
    ]
    return " ".join(factors) or "1"
