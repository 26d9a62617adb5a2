"""What a truth run will cost, and whether its grid and step are fit for it."""

from __future__ import annotations

import math
import resource
import sys
import time
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from .build import build_ocean
from .engine import workers_of
from .exponential import stepper_of
from .initial import ModeSettings, NoiseSettings
from .resolution import flow_scales, laminar_state, unresolved_lengths
from .segments import reached_step
from .settings import TruthConfig
from .truth import Plan, initial_state, plan_of, random_forcing_of

# What a file holds beside its records, and so much for each coordinate: a segment's
# axes, tables of contents and checkpoint, and what the index of a member says. As
# found on runs of 120 to 4000 coordinates, to a tenth.
SEGMENT_BYTES, SEGMENT_BYTES_PER_COORDINATE = 21_500, 16.4
INDEX_BYTES, INDEX_BYTES_PER_COORDINATE = 38_500, 70


@dataclass(frozen=True, slots=True, kw_only=True)
class Forecast:
    """Scales, costs and warnings of a config, before anything is run.

    Attributes
    ----------
    scales : tuple of (str, float, str)
        Name, value and SI unit of each derived scale.
    coordinates : int
        Real coordinates of the state.
    steps : int
        Steps of a member.
    seconds_per_step : float
        Processor time of a step with its share of recording, as timed just now [s].
    disk_bytes : int
        Size of the truth on disk, all members.
    memory_bytes : int
        Memory of one member at work: this process with the ocean in it as it is now,
        and the records between two checkpoints, twice while they are written.
    members : int
        How many there are.
    workers : int or None
        How many run at the same time; None if a cluster decides.
    warnings : tuple of str
        What the grid or the step does not resolve.
    """

    scales: tuple[tuple[str, float, str], ...]
    coordinates: int
    steps: int
    seconds_per_step: float
    disk_bytes: int
    memory_bytes: int
    members: int
    workers: int | None
    warnings: tuple[str, ...]

    @property
    def seconds(self) -> float:
        """Processor time of all members [s]."""
        return self.members * self.steps * self.seconds_per_step

    def wall_seconds(self, processors: int) -> float | None:
        """Time on the clock of all members [s]; None if a cluster decides.

        Parameters
        ----------
        processors : int
            How many there are for the workers, idle but for them.
        """
        if self.workers is None:
            return None
        rounds = math.ceil(self.members / self.workers)
        shared = max(1.0, self.workers / processors)
        return rounds * shared * self.steps * self.seconds_per_step


def forecast_run(config: TruthConfig, *, seconds: float = 0.3) -> Forecast:
    """Work out scales and costs.

    Parameters
    ----------
    config : TruthConfig
        The run.
    seconds : float
        Processor time that may be spent on timing steps [s].

    Returns
    -------
    Forecast

    Raises
    ------
    DataError
        If a forcing pattern does not fit the grid.
    """
    ocean = build_ocean(config)
    plan = plan_of(config, ocean, random_forcing_of(config, ocean, 0))
    scales, warnings = scales_of(config, ocean)
    per_step = seconds_per_step(config, seconds=seconds)
    recorded = (plan.total - plan.spin_up) / plan.total
    per_step += recorded * seconds_of_records(config, ocean, plan)
    held = sum(
        _bytes(stream) * (min(plan.segment, plan.total - plan.spin_up) / stream.every)
        for stream in plan.streams
    )
    members = config.ensemble.members
    return Forecast(
        scales=tuple(scales),
        coordinates=ocean.size,
        steps=plan.total,
        seconds_per_step=per_step,
        disk_bytes=members * bytes_of_member(plan, ocean.size, 0),
        memory_bytes=_memory_now() + round(2 * held),
        members=members,
        workers=workers_of(config.engine, members),
        warnings=(*warnings, *_warnings(config, ocean, plan)),
    )


def bytes_of_member(plan: Plan, size: int, first_step: int) -> int:
    """Bytes that a member still writes from a step to its end.

    Parameters
    ----------
    plan : Plan
        Its steps and streams.
    size : int
        Coordinates of the state.
    first_step : int
        Where it goes on.
    """
    if first_step >= plan.total:
        return 0
    steps = plan.total - max(first_step, plan.spin_up)
    records = sum(
        _bytes(stream) * (steps // stream.every + 1) for stream in plan.streams
    )
    segments = math.ceil((plan.total - first_step) / plan.segment)
    per_segment = SEGMENT_BYTES + SEGMENT_BYTES_PER_COORDINATE * size
    index = INDEX_BYTES + INDEX_BYTES_PER_COORDINATE * size
    return records + round(segments * per_segment + index)


def bytes_to_come(config: TruthConfig, folder: Path, members: Iterable[int]) -> int:
    """Bytes that members still write, from wherever each stands.

    Parameters
    ----------
    config : TruthConfig
    folder : Path
        The truth folder.
    members : iterable of int
        Which ones.
    """
    ocean = build_ocean(config)
    plan = plan_of(config, ocean, random_forcing_of(config, ocean, 0))
    return sum(
        bytes_of_member(plan, ocean.size, reached_step(folder, member))
        for member in members
    )


def scales_of(
    config: TruthConfig, ocean: Any
) -> tuple[list[tuple[str, float, str]], list[str]]:
    """Scales of an ocean and of the flows known before a run, and warnings.

    Parameters
    ----------
    config : TruthConfig
    ocean : ocean

    Returns
    -------
    scales : list of (str, float, str)
        Of the ocean; of its initial state; of its laminar flow, in which the
        linear part balances the forcing, and which turbulence makes slower.
    warnings : list of str
        What the grid or the step does not resolve, and by how much.
    """
    if ocean.waves is None:  # a model of the user's own: nothing is known of it
        return [], []
    scales = list(ocean.scales())
    warnings = list(unresolved_lengths(scales))
    start = initial_state(config, ocean, 0)
    for name, z in (("initial state", start), ("laminar flow", laminar_state(ocean))):
        if z is not None and z.any():
            seeded = z is start and isinstance(
                config.initial, NoiseSettings | ModeSettings
            )
            more, wrong = flow_scales(
                ocean, z, name, config.time.step, lengths=not seeded
            )
            scales += more
            warnings += wrong
    return scales, warnings


def seconds_per_step(config: TruthConfig, *, seconds: float = 0.3) -> float:
    """Processor time of one step [s], from as many as fit in `seconds`."""
    ocean = build_ocean(config)
    start = initial_state(config, ocean, 0)
    random = random_forcing_of(config, ocean, 0)
    stepper = stepper_of(config.time.scheme, ocean, config.time.step)

    def make_step():
        # Always the first one: a step that is too long must not blow up here.
        z = start.copy()
        stepper.advance(0.0, z, random.push(z))
        random.stir(z)

    make_step()  # it pays for what is made once
    began, count = time.process_time(), 0
    while count == 0 or time.process_time() - began < seconds:
        make_step()
        count += 1
    return (time.process_time() - began) / count


def seconds_of_records(config: TruthConfig, ocean: Any, plan: Plan) -> float:
    """Processor time of recording [s], per step of the record."""
    z = initial_state(config, ocean, 0)
    cost = 0.0
    for stream in plan.streams:
        stream.sample(0.0, z)  # it pays for what is made once
        began = time.process_time()
        for _ in range(3):
            stream.sample(0.0, z)
        cost += (time.process_time() - began) / 3 / stream.every
    return cost


def _memory_now():
    """Largest memory that this process has had, in bytes."""
    largest = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return largest * (1 if sys.platform == "darwin" else 1024)


def _bytes(stream):
    """Bytes of one record of a stream, its time included."""
    return 8 + sum(
        np.dtype(v.dtype).itemsize * int(np.prod(v.shape))
        for v in stream.variables.values()
    )


def _warnings(config: TruthConfig, ocean, plan: Plan):
    """What to look at before running."""
    step = config.time.step
    if plan.total - plan.spin_up < 1000 * round(config.output.state_every / step):
        yield "under a thousand states will be recorded: too few to fit noise to"
    if ocean.waves is None:
        return
    damping = ocean.damping
    total = np.hypot(*ocean.waves.T)
    edge = damping[total >= total.max() - 1].max()
    # Drag alone damps all scales alike, or the small ones less where the surface
    # is free.
    if config.forcing and edge < 2 * damping[total <= total.min() + 1].max():
        yield (
            "forced, but neither viscosity nor hyperviscosity takes enstrophy out "
            "at the smallest scales: noise will pile up at the cutoff"
        )
    frequency = ocean.fastest_frequency
    if frequency * step > 1:
        yield (
            f"the fastest wave turns by {frequency * step:.2g} radians in a step; "
            f"try a step of {0.5 / frequency:.3g} s"
        )
