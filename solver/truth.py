"""One truth run: integrate, record, checkpoint, resume."""

from __future__ import annotations

import logging
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from .build import build_ocean, build_with
from .config import as_table
from .errors import Blowup, RunFolderError
from .exponential import stepper_of
from .initial import starting_state
from .integrate import guard, integrate
from .random_forcing import RandomForcing, random_forcing
from .segments import MemberFiles
from .settings import TruthConfig
from .streams import Recorder, Stream, streams_of

log = logging.getLogger(__name__)

TRUTH_SECTIONS = (
    "seed",
    "grid",
    "ocean",
    "forcing",
    "stirring",
    "initial",
    "time",
    "output",
)


def initial_state(config: TruthConfig, ocean: Any, member: int) -> np.ndarray:
    """State at time zero, shape (size,).

    Raises
    ------
    DataError
        If it does not fit the ocean or its grid, or a file cannot be used.
    """
    return starting_state(config.initial, ocean, seed=config.seed, member=member)


def random_forcing_of(config: TruthConfig, ocean: Any, member: int) -> RandomForcing:
    """Build the gusts and the stirring of a member, at the start of their streams.

    Raises
    ------
    DataError
        If a pattern or a band does not fit the space.
    """
    return random_forcing(
        config.forcing,
        config.stirring,
        ocean,
        lambda forcing: build_with(config, forcing),
        step=config.time.step,
        seed=config.seed,
        member=member,
    )


def truth_table(config: TruthConfig) -> dict[str, object]:
    """Return the part of the config that a truth run depends on, in SI."""
    table = as_table(config)
    return {key: table[key] for key in TRUTH_SECTIONS if key in table}


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """Step counts of a run.

    Attributes
    ----------
    spin_up, total : int
        Steps before the record, and in all.
    segment : int
        Steps between checkpoints.
    streams : list of Stream
        What is recorded.
    """

    spin_up: int
    total: int
    segment: int
    streams: list[Stream]


def plan_of(
    config: TruthConfig, ocean: Any, random: RandomForcing | None = None
) -> Plan:
    """Count the steps of a run; what random forcing feeds is recorded as well."""
    step = config.time.step
    every = round(config.output.state_every / step)
    if config.output.checkpoint_every is not None:
        segment = round(config.output.checkpoint_every / step)
    else:
        states = max(1, min(512, 64_000_000 // (8 * ocean.size)))
        segment = states * every
    spin_up = round(config.time.spin_up / step)
    return Plan(
        spin_up=spin_up,
        total=spin_up + round(config.time.duration / step),
        segment=segment,
        streams=streams_of(config.output, ocean, step, random),
    )


def run_member(
    config: TruthConfig,
    member: int,
    folder: Path,
    *,
    stop: Callable[[], bool] = lambda: False,
    progress: Callable[[int], None] = lambda step: None,
) -> bool:
    """Run one member to its end, from wherever it stands.

    Parameters
    ----------
    config : TruthConfig
        The config.
    member : int
        Which member.
    folder : Path
        The study's truth folder.
    stop : callable
        Asked after every step; if true the run checkpoints and returns.
    progress : callable
        Told now and then which step was reached.

    Returns
    -------
    bool
        Whether the run is complete.

    Raises
    ------
    RunFolderError
        If the folder holds a run of another config, or cannot be written.
    DataError
        If a segment is damaged, or a pattern does not fit the grid.
    Blowup
        If the run blows up. The segments written so far remain.
    """
    ocean = build_ocean(config)
    random = random_forcing_of(config, ocean, member)
    plan = plan_of(config, ocean, random)
    stepper = stepper_of(config.time.scheme, ocean, config.time.step)
    z = initial_state(config, ocean, member)
    files = MemberFiles(
        folder,
        member,
        streams=plan.streams,
        output=config.output,
        ocean=ocean,
        table=truth_table(config),
        title=config.name,
        total=plan.total,
    )
    first_step = files.restore(z, random)
    step_length = config.time.step
    if first_step > plan.total:
        message = (
            f"{files.folder}: already runs to {first_step * step_length:.6g} s, past "
            "the end that [time] duration asks for now; give it a longer duration, or "
            "another name"
        )
        raise RunFolderError(message)
    if first_step == plan.total:
        files.write_index()
        return True
    recorder = Recorder(plan.streams, plan.spin_up)
    if first_step == 0:
        recorder.record(0, 0.0, z)
    log.info("member %d: step %d of %d", member, first_step, plan.total)
    advance = integrate(
        stepper,
        z,
        first_step=first_step,
        last_step=plan.total,
        energy_bound=config.time.energy_bound,
        push=random.push,
        stir=random.stir,
    )
    try:
        # A state on its way out overflows before it is caught: say so once, well.
        with np.errstate(over="ignore", invalid="ignore"):
            for step in advance:
                recorder.record(step, step * step_length, z)
                stopping = stop()
                if step % plan.segment == 0 or step == plan.total or stopping:
                    # A checkpoint is a promise that the run can go on from it.
                    guard(z, step, step_length, config.time.energy_bound)
                    files.add(step, recorder, z, random)
                    progress(step)
                if stopping:
                    break
    except Blowup as error:
        last = files.last
        kept = (
            "There was no checkpoint yet"
            if last is None
            else f"The last good checkpoint is kept: {last}"
        )
        advice = (
            f"{kept}. Try half the [time] step, or more friction, under another name"
        )
        raise Blowup(*error.args[:3], advice) from None
    return step == plan.total
