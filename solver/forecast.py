"""What a truth run will cost, and whether its grid and step are fit for it."""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import Any

import numpy as np

from .build import build_ocean
from .exponential import stepper_of
from .initial import ModeSettings, NoiseSettings
from .resolution import flow_scales, laminar_state, unresolved_lengths
from .settings import TruthConfig
from .truth import Plan, initial_state, plan_of, random_forcing_of


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
        Steps of the truth run.
    seconds_per_step : float
        Processor time of a step, as timed just now [s].
    disk_bytes : int
        Size of the truth on disk.
    memory_bytes : int
        Records held between two checkpoints.
    warnings : tuple of str
        What the grid or the step does not resolve.
    """

    scales: tuple[tuple[str, float, str], ...]
    coordinates: int
    steps: int
    seconds_per_step: float
    disk_bytes: int
    memory_bytes: int
    warnings: tuple[str, ...]


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
    record_steps = plan.total - plan.spin_up
    per_steps = sum(_bytes(stream) / stream.every for stream in plan.streams)
    return Forecast(
        scales=tuple(scales),
        coordinates=ocean.size,
        steps=plan.total,
        seconds_per_step=per_step,
        disk_bytes=round(per_steps * record_steps),
        memory_bytes=round(per_steps * min(plan.segment, record_steps)),
        warnings=(*warnings, *_warnings(config, ocean, plan)),
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
