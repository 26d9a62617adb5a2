"""One truth run: integrate, record, checkpoint, resume."""

from __future__ import annotations

import logging
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from .config import as_table
from .errors import Blowup, DataError, RunFolderError
from .forcing import StirringNoise, band_members, pattern_source
from .integrate import guard, integrate
from .oceans.barotropic import Barotropic
from .randomness import stream
from .segments import MemberFiles
from .settings import NoiseSettings, TruthConfig
from .spaces.periodic import Periodic
from .stepping import IntegratingFactorRK4
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


def build_ocean(config: TruthConfig) -> Barotropic:
    """Build the ocean that a config describes.

    Raises
    ------
    DataError
        If a forcing pattern does not fit the grid.
    """
    space = Periodic(config.grid.points, config.grid.lengths)
    source = np.zeros(space.n_modes, dtype=complex)
    for name, wave in config.forcing.items():
        try:
            source += pattern_source(space, wave)
        except DataError as error:
            message = f"[forcing.{name}] {error}"
            raise DataError(message) from error
    return Barotropic(config.ocean, space, source)


def initial_state(config: TruthConfig, ocean: Barotropic, member: int) -> np.ndarray:
    """State at time zero, shape (size,).

    Raises
    ------
    DataError
        If no mode lies in the band.
    """
    modes = np.zeros(ocean.space.n_modes, dtype=complex)
    if isinstance(config.initial, NoiseSettings):
        try:
            where = band_members(ocean.space, config.initial.band)
        except DataError as error:
            message = f"[initial] {error}"
            raise DataError(message) from error
        rng = stream(config.seed, member, "initial state")
        modes[where] = rng.standard_normal(2 * where.sum()).view(complex)
        energy = np.vdot(modes, modes).real / 2
        modes *= np.sqrt(config.initial.energy / energy)
    return modes.view(float)


def stirring_noise(config: TruthConfig, ocean: Barotropic) -> StirringNoise | None:
    """Build the stirring of a config, if it has any.

    Raises
    ------
    DataError
        If no mode lies in the band.
    """
    if config.stirring is None:
        return None
    try:
        return StirringNoise(
            ocean.space, config.stirring, ocean.damping, config.time.step
        )
    except DataError as error:
        message = f"[stirring] {error}"
        raise DataError(message) from error


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


def plan_of(config: TruthConfig, ocean: Barotropic) -> Plan:
    """Count the steps of a run."""
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
        streams=streams_of(config.output, ocean, step),
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
    plan = plan_of(config, ocean)
    noise = stirring_noise(config, ocean)
    rng = stream(config.seed, member, "stirring")
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
    first_step = files.restore(z, rng)
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
        IntegratingFactorRK4(ocean, step_length),
        z,
        first_step=first_step,
        last_step=plan.total,
        energy_bound=config.time.energy_bound,
        stir=None if noise is None else lambda state: noise.add(state, rng),
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
                    files.add(step, recorder, z, rng)
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
