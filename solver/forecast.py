"""What a truth run will cost, and whether its grid and step are fit for it."""

from __future__ import annotations

import time
from dataclasses import dataclass

import numpy as np

from .integrate import integrate
from .settings import TruthConfig
from .stepping import IntegratingFactorRK4
from .truth import Plan, build_ocean, initial_state, plan_of


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
    plan = plan_of(config, ocean)
    per_step = seconds_per_step(config, seconds=seconds)
    record_steps = plan.total - plan.spin_up
    per_steps = sum(_bytes(stream) / stream.every for stream in plan.streams)
    return Forecast(
        scales=tuple(ocean.scales()),
        coordinates=ocean.size,
        steps=plan.total,
        seconds_per_step=per_step,
        disk_bytes=round(per_steps * record_steps),
        memory_bytes=round(per_steps * min(plan.segment, record_steps)),
        warnings=tuple(_warnings(config, ocean, plan)),
    )


def seconds_per_step(config: TruthConfig, *, seconds: float = 0.3) -> float:
    """Processor time of one step [s], from as many as fit in `seconds`."""
    ocean = build_ocean(config)
    z = initial_state(config, ocean, 0)
    stepper = IntegratingFactorRK4(ocean, config.time.step)
    run = integrate(stepper, z, first_step=0, last_step=10**9, energy_bound=np.inf)
    first = next(run)  # it pays for what is made once
    start = time.process_time()
    step = next(step for step in run if time.process_time() - start > seconds)
    return (time.process_time() - start) / (step - first)


def _bytes(stream):
    """Bytes of one record of a stream, its time included."""
    return 8 + sum(
        np.dtype(v.dtype).itemsize * int(np.prod(v.shape))
        for v in stream.variables.values()
    )


def _warnings(config: TruthConfig, ocean, plan: Plan):
    """What to look at before running."""
    step = config.time.step
    if config.forcing and config.ocean.hyperviscosity == config.ocean.viscosity == 0:
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
    if plan.total - plan.spin_up < 1000 * round(config.output.state_every / step):
        yield "under a thousand states will be recorded: too few to fit noise to"
