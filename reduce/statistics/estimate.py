"""A number from a finite sample and its standard error, kept together."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from eddyshed.solver.errors import DataError


@dataclass(frozen=True, slots=True, eq=False, repr=False)
class Estimate:
    """Numbers from a finite sample, with their standard errors.

    Prints as ``0.291 +- 0.026``: the error to two figures, the value to the
    same place. A format such as ``f"{estimate:3}"`` asks for three figures.

    Parameters
    ----------
    value, error : array_like, equal shapes
        The estimates and their standard errors, in the same unit. An error
        of infinity says that the record was too short to know.

    Raises
    ------
    DataError
        If the shapes differ or an error is negative.
    """

    value: np.ndarray
    error: np.ndarray

    def __post_init__(self):
        value = np.asarray(self.value, dtype=float)
        error = np.asarray(self.error, dtype=float)
        if value.shape != error.shape:
            message = (
                f"estimate: values of shape {value.shape} with errors of shape "
                f"{error.shape}, allowed are equal shapes; give one error to each "
                "value"
            )
            raise DataError(message)
        if np.any(error < 0):
            message = (
                f"estimate: a standard error of {error.min():.3g}, allowed is zero "
                "or more; give the square root of the variance"
            )
            raise DataError(message)
        object.__setattr__(self, "value", value)
        object.__setattr__(self, "error", error)

    def __format__(self, spec):
        if spec and not (spec.isdecimal() and int(spec) > 0):
            message = (
                f'estimate: format "{spec}", allowed is the number of figures of '
                "the error (or nothing, for two)"
            )
            raise ValueError(message)
        figures = int(spec) if spec else 2
        value, error = self.value.ravel(), self.error.ravel()
        return np.array2string(
            np.arange(value.size).reshape(self.value.shape),
            formatter={"int": lambda i: _pair(value[i], error[i], figures)},
            separator=", ",
            threshold=12,
        )

    def __str__(self):
        return format(self, "")

    def __repr__(self):
        return f"Estimate({self})"


def _pair(value: float, error: float, figures: int) -> str:
    """One value and its error, to the figures that the error allows."""
    if not (math.isfinite(value) and math.isfinite(error) and error > 0):
        return f"{value:.4g} +- {error:.3g}"
    error = float(f"{error:.{figures - 1}e}")  # 0.0996 becomes 0.10, not 0.100
    place = math.floor(math.log10(error)) - figures + 1
    leading = math.floor(math.log10(max(abs(value), error)))
    if leading >= 6 or leading < -4:
        decimals = max(leading - place, 0)
        scaled = (f"{x / 10.0**leading:.{decimals}f}" for x in (value, error))
        return f"({' +- '.join(scaled)})e{leading:+03d}"
    decimals = max(-place, 0)
    return f"{round(value, -place):.{decimals}f} +- {error:.{decimals}f}"
