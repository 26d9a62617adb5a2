"""One truth run: integrate, record, checkpoint, resume."""

from __future__ import annotations

import logging
import math
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from .build import build_ocean, build_with
from .errors import Blowup, DataError, EddyshedError, RunFolderError
from .exponential import stepper_of
from .identity import truth_table
from .initial import band_noise, starting_state
from .integrate import guard, integrate
from .locks import holding, member_lock
from .random_forcing import RandomForcing, random_forcing
from .randomness import stream
from .segments import MemberFiles
from .settings import TruthConfig
from .streams import Recorder, Stream, streams_of

log = logging.getLogger(__name__)

NOTE_EVERY = 0.5  # seconds of wall time between words on how far a run is


def initial_state(config: TruthConfig, ocean: Any, member: int) -> np.ndarray:
    """State at time zero, shape (size,).

    Every member but the first gets the config's perturbation, if there is one, from
    a stream of its own.

    Raises
    ------
    DataError
        If it does not fit the ocean or its grid, or a file cannot be used.
    """
    z = starting_state(config.initial, ocean, seed=config.seed, member=member)
    perturbation = config.ensemble.perturbation
    if perturbation is not None and member > 0:
        rng = stream(config.seed, member, "perturbation")
        try:
            z += band_noise(ocean, perturbation.energy, perturbation.band, rng)
        except DataError as error:
            message = f"[ensemble.perturbation] {error}"
            raise DataError(message) from error
    return z


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


def steps_of(config: TruthConfig) -> tuple[int, int]:
    """Steps of the spin-up, and of the whole run."""
    spin_up = round(config.time.spin_up / config.time.step)
    return spin_up, spin_up + round(config.time.duration / config.time.step)


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
    spin_up, total = steps_of(config)
    return Plan(
        spin_up=spin_up,
        total=total,
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
        If the folder holds a run of another config, cannot be written, was moved
        away, or another process is at work on this member.
    DataError
        If a segment is damaged, or a pattern does not fit the grid.
    Blowup
        If the run blows up. The segments written so far remain.
    """
    # What the config alone can do wrong is found before the folder is touched.
    parts = _made(config, member)
    with holding(member_lock(folder, member)) as lock:
        try:
            return _run(config, member, folder, lock, stop, progress, parts)
        except EddyshedError as error:
            lock.note(failed=str(error))
            raise


def _made(config, member):
    """Ocean, random forcing, plan, stepper and starting state of a member."""
    ocean = build_ocean(config)
    random = random_forcing_of(config, ocean, member)
    return (
        ocean,
        random,
        plan_of(config, ocean, random),
        stepper_of(config.time.scheme, ocean, config.time.step),
        initial_state(config, ocean, member),
    )


def _run(config, member, folder, lock, stop, progress, parts):
    """Carry out `run_member`, its lock in hand."""
    ocean, random, plan, stepper, z = parts
    files = MemberFiles(
        folder,
        member,
        streams=plan.streams,
        output=config.output,
        ocean=ocean,
        table=truth_table(config, member),
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
    lock.note(step=first_step)  # whatever an earlier run has left there
    advance = integrate(
        stepper,
        z,
        first_step=first_step,
        last_step=plan.total,
        energy_bound=config.time.energy_bound,
        push=random.push,
        stir=random.stir,
    )
    noted = -math.inf
    try:
        # A state on its way out overflows before it is caught: say so once, well.
        with np.errstate(over="ignore", invalid="ignore"):
            for step in advance:
                recorder.record(step, step * step_length, z)
                stopping = stop()
                now = time.monotonic()
                if now - noted > NOTE_EVERY:
                    noted = now
                    lock.note(step=step)
                    progress(step)
                if step % plan.segment == 0 or step == plan.total or stopping:
                    # A checkpoint is a promise that the run can go on from it.
                    guard(z, step, step_length, config.time.energy_bound)
                    lock.check_place()
                    files.add(step, recorder, z, random)
                    lock.note(step=step)
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
