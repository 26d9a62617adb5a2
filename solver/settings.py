"""The config sections that say what truth to make."""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from dataclasses import dataclass
from typing import TypeAlias

from .boxes import BoxSettings
from .config import setting
from .driven import is_random
from .exponential import SCHEMES
from .forcing import Wave, Wind
from .hooks import Hook
from .initial import (
    INITIAL_KINDS,
    FieldSettings,
    InitialSettings,
    NoiseSettings,
    RestSettings,
)
from .oceans.barotropic import BarotropicSettings
from .oceans.boussinesq_waves import BoussinesqSettings
from .oceans.two_layer_waves import TwoLayerSettings
from .stirring import Stirring
from .surface_buoyancy import SurfaceBuoyancy
from .time_functions import GustBand, break_times


@dataclass(frozen=True, slots=True, kw_only=True)
class GridSettings:
    """The box and its grid."""

    space: str = setting(
        default="periodic",
        choices=("periodic", "channel", "basin"),
        doc="the space: periodic in x and y; a channel, periodic in x between walls "
        "in y; or a basin between four walls. Walls are free of stress",
    )
    points: tuple[int, int] = setting(
        minimum=8, maximum=8192, doc="grid points in x and y; even numbers"
    )
    lengths: tuple[float, float] = setting(
        unit="m", above=0, doc="size of the box in x and y"
    )

    def problems(self):
        """Rules that go across keys."""
        odd = [n for n in self.points if n % 2]
        if odd:
            yield (
                f"points = {list(self.points)} must be even; "
                f"try {[n + n % 2 for n in self.points]}"
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class TimeSettings:
    """Steps, spin-up and length of a truth run."""

    step: float = setting(unit="s", above=0, doc="time step")
    spin_up: float = setting(
        unit="s", minimum=0, doc="time run, and not recorded, before the record"
    )
    duration: float = setting(unit="s", above=0, doc="length of the record")
    energy_bound: float = setting(
        unit="m2 s-2",
        default=1000.0,
        above=0,
        doc="energy beyond which the run counts as blown up",
    )
    scheme: str = setting(
        default=SCHEMES[0],
        choices=SCHEMES,
        doc="how a step is made, both of order four and exact for the linear part: "
        "exponential differencing is the better one where damping is much faster "
        "than the step",
    )

    def problems(self):
        """Rules that go across keys."""
        for name in ("spin_up", "duration"):
            if not _divides(self.step, getattr(self, name)):
                yield f"{name} must be a whole number of steps of {self.step:.6g} s"


@dataclass(frozen=True, slots=True, kw_only=True)
class ResolvedStreamSettings:
    """A stream of the low wavenumbers alone, finer in time than the full state."""

    every: float = setting(unit="s", above=0, doc="interval of the stream")
    up_to: float = setting(
        minimum=1, doc="largest total wavenumber in the stream, in waves per box"
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class OutputSettings:
    """What a truth run writes, and how often."""

    state_every: float = setting(
        unit="s", above=0, doc="interval of the full state and of the energy budget"
    )
    resolved: ResolvedStreamSettings | None = setting(
        default=None, doc="the low wavenumbers at a finer interval; absent: none"
    )
    fields_every: float | None = setting(
        default=None,
        unit="s",
        above=0,
        doc="interval of streamfunction and vorticity on the grid; absent: none",
    )
    boxes: dict[str, BoxSettings] = setting(
        default=dict,
        doc="averages over rectangles, as an instrument would measure them, each "
        "under a name of its own",
    )
    boxes_every: float | None = setting(
        default=None,
        unit="s",
        above=0,
        doc="interval of the averages over rectangles; absent: that of the state",
    )
    checkpoint_every: float | None = setting(
        default=None,
        unit="s",
        above=0,
        doc="model time between checkpoints; absent: 512 states, or as many as "
        "make 64 MB",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class PerturbationSettings:
    """Random phases and amplitudes on a band of wavenumbers, added to the start."""

    energy: float = setting(
        unit="m2 s-2", above=0, doc="energy of the perturbation by itself"
    )
    band: tuple[float, float] = setting(
        minimum=0,
        doc="smallest and largest total wavenumber perturbed, in waves per box (half "
        "waves between walls)",
    )

    def problems(self):
        """Rules that go across keys."""
        if self.band[0] > self.band[1]:
            yield f"band = {list(self.band)} runs downwards; give the smaller first"


@dataclass(frozen=True, slots=True, kw_only=True)
class EnsembleSettings:
    """How many members a truth has, and what tells them apart."""

    members: int = setting(
        default=1,
        minimum=1,
        maximum=10_000,
        doc="runs that differ in their random streams and, where the start is the "
        "same for all, in a perturbation of it; more can be added later",
    )
    perturbation: PerturbationSettings | None = setting(
        default=None,
        doc="noise added to the start of every member but member 0, which stays what "
        "a truth of one member is; absent: none",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class ProcessesSettings:
    """Members in processes of this machine, each on one thread."""

    workers: int | None = setting(
        default=None,
        minimum=1,
        maximum=4096,
        doc="members that run at the same time; absent: one for each processor that "
        "this process may use",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class DaskSettings:
    """Members on the workers of a Dask scheduler that somebody has started."""

    address: str | None = setting(
        default=None, doc='where the scheduler listens, such as "tcp://node7:8786"'
    )
    scheduler_file: str | None = setting(
        default=None, doc="file in which the scheduler has left its address"
    )

    def problems(self):
        """Rules that go across keys."""
        if (self.address is None) == (self.scheduler_file is None):
            yield (
                "needs either address or scheduler_file, such as address = "
                '"tcp://127.0.0.1:8786"'
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class SerialSettings:
    """Members one after another, in this process."""


EngineSettings: TypeAlias = ProcessesSettings | DaskSettings | SerialSettings
ENGINE_KINDS = {
    "processes": ProcessesSettings,
    "dask": DaskSettings,
    "serial": SerialSettings,
}


@dataclass(frozen=True, slots=True, kw_only=True)
class TruthConfig:
    """Everything that a truth run depends on."""

    name: str = setting(doc="name of the study and of its run folder")
    title: str = setting(default="", doc="one line for the head of the report")
    seed: int = setting(
        default=1, minimum=0, doc="entropy of every random stream of the study"
    )
    grid: GridSettings | None = setting(
        default=None,
        doc="the box and its grid, which every ocean but a model of your own needs",
    )
    ocean: BarotropicSettings | TwoLayerSettings | BoussinesqSettings | Hook = setting(
        kinds={
            "barotropic": BarotropicSettings,
            "two_layer": TwoLayerSettings,
            "boussinesq": BoussinesqSettings,
        },
        hooks=True,
        doc='the flow that is run; or kind = "package.module:Name", a model of your '
        "own, made with the keys of the table `options`",
    )
    forcing: dict[str, Wave | Wind | SurfaceBuoyancy | GustBand] = setting(
        default=dict,
        kinds={
            "wave": Wave,
            "wind": Wind,
            "surface_buoyancy": SurfaceBuoyancy,
            "gusts": GustBand,
        },
        doc="what drives the flow, each under a name of its own",
    )
    stirring: Stirring | None = setting(
        default=None, doc="random forcing, white in time; absent: none"
    )
    initial: InitialSettings = setting(
        default=RestSettings,
        kinds=INITIAL_KINDS,
        doc="the state that the run starts from",
    )
    time: TimeSettings = setting(doc="steps, spin-up and length")
    output: OutputSettings = setting(doc="what is written, and how often")
    ensemble: EnsembleSettings = setting(
        default=EnsembleSettings, doc="how many members, and how they differ"
    )
    engine: EngineSettings = setting(
        default=ProcessesSettings,
        kinds=ENGINE_KINDS,
        doc="where the members of an ensemble run; never changes a number",
    )

    def problems(self):
        """Rules that go across sections."""
        if not re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9._-]{0,63}", self.name):
            yield (
                f"name = {self.name!r} must be usable as a folder name: letters, "
                "digits, dot, underscore and hyphen, at most 64"
            )
        step = self.time.step
        intervals = {
            "[output] state_every": self.output.state_every,
            "[output] fields_every": self.output.fields_every,
            "[output] boxes_every": self.output.boxes_every,
            "[output] checkpoint_every": self.output.checkpoint_every,
        }
        if self.output.resolved is not None:
            intervals["[output.resolved] every"] = self.output.resolved.every
        for where, interval in intervals.items():
            if interval is not None and not _divides(step, interval):
                nearest = max(1, round(interval / step)) * step
                yield (
                    f"{where} = {interval:.6g} s must be a whole number of steps of "
                    f"{step:.6g} s; try {nearest:.6g} s"
                )
        if self.output.boxes_every is not None and not self.output.boxes:
            yield (
                "[output] boxes_every is given, but there is no [output.boxes.NAME] "
                "to average over; add one or leave it out"
            )
        for name in self.output.boxes:
            if not re.fullmatch(r"[A-Za-z0-9_]{1,64}", name):
                yield (
                    f"[output.boxes] {name!r} must be usable as the name of a "
                    "variable: letters, digits and underscore, at most 64"
                )
        if isinstance(self.ocean, Hook):
            yield from _beyond_a_hook(self)
        elif self.grid is None:
            yield (
                "[grid] is missing: the box and its grid; write a table [grid] with "
                "points, lengths"
            )
        is_slice = isinstance(self.ocean, BoussinesqSettings)
        for name, pattern in self.forcing.items():
            if is_slice and isinstance(pattern, Wind):
                yield (
                    f"[forcing.{name}] a wind drives a layer seen from above, not the "
                    'vertical slice of [ocean] kind = "boussinesq"; use kind = "wave" '
                    'or "surface_buoyancy"'
                )
            if not is_slice and isinstance(pattern, SurfaceBuoyancy):
                yield (
                    f'[forcing.{name}] only [ocean] kind = "boussinesq" has buoyancy '
                    'to heat; use kind = "wave" or "wind"'
                )
            behaviour = getattr(pattern, "time", None)
            for key, when in break_times(behaviour).items():
                if not _divides(step, when):
                    # Inside a step a jump would cost the scheme its order.
                    yield (
                        f"[forcing.{name}.time] {key} = {when:.6g} s must be a whole "
                        f"number of steps of {step:.6g} s; try "
                        f"{round(when / step) * step:.6g} s"
                    )
        yield from self._ensemble_problems()

    def _ensemble_problems(self):
        """Members must differ, and by one thing alone at the start."""
        start_differs = isinstance(self.initial, NoiseSettings)
        perturbed = self.ensemble.perturbation is not None
        if start_differs and perturbed:
            yield (
                '[ensemble.perturbation] has no meaning with [initial] kind = "noise", '
                "whose members start differently by themselves; leave it out"
            )
        random = self.stirring is not None or any(
            is_random(pattern) for pattern in self.forcing.values()
        )
        if self.ensemble.members > 1 and not (start_differs or perturbed or random):
            yield (
                f"[ensemble] members = {self.ensemble.members} would all be the same "
                "run: nothing of it is random; add a table [ensemble.perturbation] "
                "with energy and band"
            )


def _beyond_a_hook(config: TruthConfig) -> Iterator[str]:
    """What is asked for that a model without a space cannot give."""
    asked = {
        "[grid]": config.grid is not None,
        "[forcing]": bool(config.forcing),
        "[stirring]": config.stirring is not None,
        "[output.resolved]": config.output.resolved is not None,
        "[output] fields_every": config.output.fields_every is not None,
        "[output.boxes]": bool(config.output.boxes),
        "[ensemble.perturbation]": config.ensemble.perturbation is not None,
        '[initial] kind = "noise"': isinstance(config.initial, NoiseSettings),
        '[initial] kind = "field"': isinstance(config.initial, FieldSettings),
    }
    for where, is_asked in asked.items():
        if is_asked:
            yield (
                f"{where} needs a grid, and a model of your own has none; leave it "
                "out" + (', or use kind = "mode"' if "initial" in where else "")
            )


def _divides(step: float, interval: float) -> bool:
    """Whether an interval is a whole number of steps, up to rounding of decimals."""
    count = interval / step
    if not math.isfinite(count):
        return False
    return abs(count - round(count)) <= 1e-9 * max(1.0, count)
