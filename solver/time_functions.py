"""How a forcing pattern varies in time.

A pattern times one of these functions is a forcing. All but the gusts are
functions of time and make the forcing F(t) of the ocean vary; the gusts are a
random process and never part of F, see :mod:`.gusts`. Times count from the
start of the run, its spin-up included.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, TypeAlias

from .config import setting


@dataclass(frozen=True, slots=True, kw_only=True)
class Steady:
    """The pattern as it is, at all times."""

    def factor(self, t: float) -> float:
        """What the pattern is multiplied with at time t [s]."""
        return 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Seasonal:
    """Comes and goes: the factor is ``1 + amplitude cos(2 pi t / period + phase)``."""

    period: float = setting(unit="s", above=0, doc="period of the season")
    amplitude: float = setting(
        minimum=0, doc="largest departure from the pattern, as a fraction of it"
    )
    phase: float = setting(
        default=0.0, doc="phase of the cosine at the start of the run, in radians"
    )

    def factor(self, t: float) -> float:
        """What the pattern is multiplied with at time t [s]."""
        angle = 2 * math.pi * math.fmod(t / self.period, 1.0) + self.phase
        return 1.0 + self.amplitude * math.cos(angle)


@dataclass(frozen=True, slots=True, kw_only=True)
class Ramp:
    """Changes linearly from one strength to another, and is constant elsewhere."""

    start: float = setting(
        unit="s", minimum=0, doc="when the change begins, counted from the run's start"
    )
    end: float = setting(
        unit="s", above=0, doc="when the change ends, counted from the run's start"
    )
    before: float = setting(
        default=0.0, doc="factor of the pattern until the change begins"
    )
    after: float = setting(default=1.0, doc="factor of the pattern once it has ended")

    def problems(self):
        """Rules that go across keys."""
        if self.start >= self.end:
            yield (
                f"start = {self.start:.6g} s must be before end = {self.end:.6g} s; "
                'give an earlier start, or use kind = "step"'
            )

    def factor(self, t: float) -> float:
        """What the pattern is multiplied with at time t [s]."""
        part = (t - self.start) / (self.end - self.start)
        return self.before + (self.after - self.before) * min(max(part, 0.0), 1.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """Jumps from one strength to another."""

    at: float = setting(
        unit="s", minimum=0, doc="when it jumps, counted from the run's start"
    )
    before: float = setting(default=0.0, doc="factor of the pattern before the jump")
    after: float = setting(default=1.0, doc="factor of the pattern from the jump on")

    def factor(self, t: float) -> float:
        """What the pattern is multiplied with at time t [s]; `after` at the jump."""
        # The time of a step is a product: its last bits must not decide.
        # Times of steps are products: their last bits must not decide.
        return self.before if t < self.at * (1 - 4e-16) else self.after


@dataclass(frozen=True, slots=True, kw_only=True)
class Gusts:
    """A random factor of mean zero: an Ornstein-Uhlenbeck process in time."""

    decorrelation: float = setting(
        unit="s", above=0, doc="e-folding time of the factor's correlation"
    )
    deviation: float = setting(
        default=1.0, above=0, doc="standard deviation of the factor"
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class GustBand:
    """Gusts on a ring of wavenumbers, an independent process for each part."""

    acceleration: float = setting(
        unit="m s-2", above=0, doc="root mean square acceleration over the domain"
    )
    band: tuple[float, float] = setting(
        minimum=0,
        doc="smallest and largest total wavenumber forced, in waves per box (half "
        "waves between walls)",
    )
    decorrelation: float = setting(
        unit="s", above=0, doc="e-folding time of the correlation"
    )

    def problems(self):
        """Rules that go across keys."""
        if self.band[0] > self.band[1]:
            yield f"band = {list(self.band)} runs downwards; give the smaller first"


TimeFunction: TypeAlias = Steady | Seasonal | Ramp | Step
TimeBehaviour: TypeAlias = Steady | Seasonal | Ramp | Step | Gusts


def in_time() -> Any:
    """Field that a pattern's section takes for its behaviour in time."""
    return setting(
        default=Steady,
        kinds={
            "steady": Steady,
            "seasonal": Seasonal,
            "ramp": Ramp,
            "step": Step,
            "gusts": Gusts,
        },
        doc="how the pattern varies in time",
    )


def break_times(function: TimeBehaviour) -> dict[str, float]:
    """Times [s], by key, at which a function is not smooth."""
    if isinstance(function, Ramp):
        return {"start": function.start, "end": function.end}
    if isinstance(function, Step):
        return {"at": function.at}
    return {}
