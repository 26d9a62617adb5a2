"""An ocean whose forcing varies in time, made of oceans that know nothing of it.

Everything an ocean says is affine in its forcing pattern. So an ocean with one
pattern, less the same ocean with none, is what that pattern adds; multiplied
with a function of time it is added to an ocean with the steady patterns.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np

from .time_functions import GustBand, Gusts, Steady, TimeFunction


class Driven:
    """An ocean with some patterns multiplied by functions of time.

    Parameters
    ----------
    ocean : ocean
        With the steady patterns.
    without : ocean
        The same with no pattern at all.
    parts : sequence of (TimeFunction, ocean)
        For each varying pattern its function of time, and the ocean with that
        pattern alone.

    Notes
    -----
    F(t) of this ocean is F of `ocean` plus, for each part, the factor at time t
    times what the pattern adds; `explicit`, `tendency` and `budget` agree with
    it. All else is that of `ocean`.
    """

    def __init__(
        self,
        ocean: Any,
        without: Any,
        parts: Sequence[tuple[TimeFunction, Any]],
    ):
        self._ocean = ocean
        self._without = without
        self._parts = tuple(parts)
        self._patterns = [
            (function, pattern_of(one, without)) for function, one in self._parts
        ]

    def __getattr__(self, name: str) -> Any:
        if name.startswith("_"):  # not there yet while a copy is being unpickled
            raise AttributeError(name)
        return getattr(self._ocean, name)

    @property
    def variations(self) -> tuple[tuple[TimeFunction, np.ndarray], ...]:
        """Each function of time with what its pattern adds to F, shape (size,)."""
        return tuple(self._patterns)

    def _varying(self, t: float) -> np.ndarray:
        """Sum of the varying patterns at time t, shape (size,)."""
        return sum(
            (function.factor(t) * pattern for function, pattern in self._patterns),
            np.zeros(self._ocean.size),
        )

    def forcing(self, t: float) -> np.ndarray:
        """F [state unit s-1] at time t [s], shape (size,)."""
        return self._ocean.forcing(t) + self._varying(t)

    def explicit(self, t: float, z: np.ndarray) -> np.ndarray:
        """All of the tendency but the part treated exactly, shape (size,)."""
        result = self._ocean.explicit(t, z)
        for function, pattern in self._patterns:
            result += function.factor(t) * pattern
        return result

    def tendency(self, t: float, z: np.ndarray) -> np.ndarray:
        """dz/dt [state unit s-1], shape (..., size)."""
        return self._ocean.tendency(t, z) + self._varying(t)

    def budget(self, t: float, z: np.ndarray) -> dict[str, float]:
        """Budget of the ocean, with the work of the forcing that acts at time t."""
        found = self._ocean.budget(t, z)
        none = self._without.budget(t, z)
        for function, ocean in self._parts:
            one = ocean.budget(t, z)
            for name in found:
                found[name] += function.factor(t) * (one[name] - none[name])
        return found


def pattern_of(one: Any, without: Any) -> np.ndarray:
    """What one forcing pattern adds to F [state unit s-1], shape (size,).

    Parameters
    ----------
    one, without : ocean
        The same ocean with that pattern, and with none.
    """
    return one.forcing(0.0) - without.forcing(0.0)


def is_random(pattern: Any) -> bool:
    """Whether a section of ``[forcing]`` is gusts, and so no part of F."""
    return isinstance(pattern, GustBand) or isinstance(pattern.time, Gusts)


def driven_ocean(
    forcing: Mapping[str, Any], build: Callable[[Mapping[str, Any]], Any]
) -> Any:
    """Build an ocean with all of its forcing that is a function of time.

    Parameters
    ----------
    forcing : mapping of str to section
        The patterns by name; gusts are left out.
    build : callable
        ``build(patterns)`` makes the ocean with some of them, all taken as steady.

    Returns
    -------
    ocean
        A plain one if all of them are steady.

    Raises
    ------
    DataError
        If a pattern does not fit the space.
    """
    acting = {name: p for name, p in forcing.items() if not is_random(p)}
    varying = {n: p for n, p in acting.items() if not isinstance(p.time, Steady)}
    ocean = build({name: p for name, p in acting.items() if name not in varying})
    if not varying:
        return ocean
    parts = [(p.time, build({name: p})) for name, p in varying.items()]
    return Driven(ocean, build({}), parts)
