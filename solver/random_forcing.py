"""All random forcing of one run: gusts and white stirring, and what they fed.

None of it is part of F. Gusts push the state during a step, stirring kicks it
between steps. The energy and the enstrophy that each feeds are summed up step by
step, because no record of the state could give them: the state and the noise are
correlated.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from .diagnostics import FED
from .driven import is_random, pattern_of
from .errors import DataError
from .gusts import GustProcess
from .randomness import stream
from .stirring import Stirring, StirringNoise, band_coordinates
from .time_functions import GustBand


@dataclass(slots=True, kw_only=True)
class RandomForcing:
    """Random forcing of a run, with all that a checkpoint must hold of it.

    Attributes
    ----------
    step : float
        Time step [s].
    gusts : dict of str to GustProcess
        By name of the forcing.
    stirring : StirringNoise or None
        White stirring, if there is any.
    stirring_rng : numpy.random.Generator
        Its stream.
    enstrophy_weights : ndarray, shape (size,)
        Enstrophy is ``sum(weights * z * z) / 2`` [m-2].
    fed, fed_enstrophy : dict of str to float
        Energy [m2 s-2] and enstrophy [s-2] fed by ``gusts`` and by ``stirring``
        since the start of the run; only those that there are.
    """

    step: float
    gusts: dict[str, GustProcess]
    stirring: StirringNoise | None
    stirring_rng: np.random.Generator
    enstrophy_weights: np.ndarray
    fed: dict[str, float] = field(init=False)
    fed_enstrophy: dict[str, float] = field(init=False)
    _before: np.ndarray | None = field(init=False, default=None)
    _push: np.ndarray | None = field(init=False, default=None)

    def __post_init__(self):
        acting = {"gusts": bool(self.gusts), "stirring": self.stirring is not None}
        self.fed = {name: 0.0 for name, acts in acting.items() if acts}
        self.fed_enstrophy = dict(self.fed)

    def push(self, z: np.ndarray) -> np.ndarray | None:
        """Mean tendency of all gusts over the step that is about to be made.

        Parameters
        ----------
        z : ndarray, shape (size,)
            The state at its start.

        Returns
        -------
        ndarray, shape (size,), or None
            None if there are no gusts.
        """
        if not self.gusts:
            return None
        self._before = z.copy()
        self._push = np.zeros(len(z))
        for gust in self.gusts.values():
            gust.add_push(self._push)
        return self._push

    def stir(self, z: np.ndarray) -> None:
        """Count what the gusts fed over the step just made, then kick the state.

        Parameters
        ----------
        z : ndarray, shape (size,)
            The state at the end of the step; changed in place.
        """
        if self._push is not None:
            # The push is constant, so its work is push . (integral of z): the
            # trapezoidal rule is of order two, like the gusts themselves.
            middle = self._before + z
            self.fed["gusts"] += self.step / 2 * float(self._push @ middle)
            middle *= self.enstrophy_weights
            self.fed_enstrophy["gusts"] += self.step / 2 * float(self._push @ middle)
        if self.stirring is not None:
            before = z.copy()
            self.fed["stirring"] += self.stirring.add(z, self.stirring_rng)
            # The kick, and twice the state half way through it.
            kick, middle = z - before, z + before
            middle *= self.enstrophy_weights
            self.fed_enstrophy["stirring"] += float(kick @ middle) / 2

    def fed_units(self) -> dict[str, tuple[str, str]]:
        """Units and long names of what :meth:`fed_so_far` returns."""
        units = {"energy": "m2 s-2", "enstrophy": "s-2"}
        return {
            quantity + FED + name: (unit, f"{quantity} fed by {name} since the start")
            for quantity, unit in units.items()
            for name in self.fed
        }

    def fed_so_far(self) -> dict[str, float]:
        """Energy and enstrophy fed since the start of the run, for the record."""
        both = {"energy": self.fed, "enstrophy": self.fed_enstrophy}
        return {
            quantity + FED + name: value
            for quantity, fed in both.items()
            for name, value in fed.items()
        }

    def arrays(self) -> dict[str, np.ndarray]:
        """All numbers that go into a checkpoint, by name."""
        found = {f"gust {name}": gust.value for name, gust in self.gusts.items()}
        found |= {f"fed {name}": np.array(value) for name, value in self.fed.items()}
        return found | {
            f"fed enstrophy {name}": np.array(value)
            for name, value in self.fed_enstrophy.items()
        }

    def streams(self) -> dict[str, np.random.Generator]:
        """All random streams that go into a checkpoint, by name."""
        found = {f"gust {name}": gust.rng for name, gust in self.gusts.items()}
        return found | {"stirring": self.stirring_rng}

    def restore(
        self, arrays: Mapping[str, np.ndarray], streams: Mapping[str, dict]
    ) -> None:
        """Go on from a checkpoint.

        Parameters
        ----------
        arrays : mapping of str to ndarray
            As :meth:`arrays` gave them.
        streams : mapping of str to dict
            State of the bit generator of each of :meth:`streams`.
        """
        for name, gust in self.gusts.items():
            gust.value = np.array(arrays[f"gust {name}"])
        for name in self.fed:
            self.fed[name] = float(arrays[f"fed {name}"])
            self.fed_enstrophy[name] = float(arrays[f"fed enstrophy {name}"])
        for name, generator in self.streams().items():
            generator.bit_generator.state = streams[name]


def random_forcing(
    forcing: Mapping[str, Any],
    stirring: Stirring | None,
    ocean: Any,
    build: Callable[[Mapping[str, Any]], Any],
    *,
    step: float,
    seed: int,
    member: int,
) -> RandomForcing:
    """Build all random forcing of a run, at the start of its streams.

    Parameters
    ----------
    forcing : mapping of str to section
        All patterns by name; those that are not gusts are left out.
    stirring : Stirring or None
        White stirring.
    ocean : ocean
        Its coordinates are stirred.
    build : callable
        ``build(patterns)`` makes the ocean with some of the patterns.
    step : float
        Time step [s].
    seed, member : int
        Choose the streams; each forcing has one of its own.

    Returns
    -------
    RandomForcing

    Raises
    ------
    DataError
        If a band or a pattern does not fit the space.
    """
    chosen = {name: p for name, p in forcing.items() if is_random(p)}
    without = build({}) if chosen else None
    gusts = {}
    for name, section in chosen.items():
        where = None
        if isinstance(section, GustBand):
            try:
                where = band_coordinates(ocean.waves, section.band)
            except DataError as error:
                message = f"[forcing.{name}] {error}"
                raise DataError(message) from error
            # z.z is the mean square velocity: shared equally by the coordinates.
            each = section.acceleration / np.sqrt(len(where))
            patterns = np.full(len(where), each)
            decorrelation = section.decorrelation
        else:
            pattern = pattern_of(build({name: section}), without)
            patterns = section.time.deviation * pattern[np.newaxis]
            decorrelation = section.time.decorrelation
        rng = stream(seed, member, f"gusts {name}")
        gusts[name] = GustProcess(patterns, decorrelation, step, rng, where)
    noise = None
    if stirring is not None:
        try:
            noise = StirringNoise(ocean, stirring, step)
        except DataError as error:
            message = f"[stirring] {error}"
            raise DataError(message) from error
    return RandomForcing(
        step=step,
        gusts=gusts,
        stirring=noise,
        stirring_rng=stream(seed, member, "stirring"),
        enstrophy_weights=ocean.enstrophy_weights,
    )
