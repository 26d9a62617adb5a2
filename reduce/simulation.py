"""Simulation of reduced models: many members at once, each with its own noise.

The loop here knows a scheme by three methods and asks :func:`make_scheme`
for the one that suits a model. A new kind of model brings its scheme by
registering it there.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import singledispatch
from typing import Any, Protocol

import numpy as np

from eddyshed.solver.errors import DataError

from .diffusion import DiffusionModel
from .diffusion_schemes import ItoScheme, diffusion_step_rule
from .reduced import COLUMNS, ReducedModel
from .splitting import StrangScheme

WORKING_MEMORY = 2**20  # bytes of the largest array in a step: stays in cache
NOISE_MEMORY = 2**22  # bytes of the increments that are drawn at once
LARGEST_GROUP = 1024  # members stepped together, even of the smallest model
REPORT = 64  # steps between reports of progress
HUGE = 1e150  # its square is still finite
ACCURACY = 0.3  # of the fastest time of the noise, in a step
STABILITY = 0.2  # of the fastest time of the coupling, in a step


class Scheme(Protocol):
    """What the loop needs of a time-stepping scheme.

    States are arrays (row, member) whose first `n_observed` rows are the
    resolved coordinates; members come in multiples of 16.

    Attributes
    ----------
    n_observed : int
    n_starting, n_normals : int
        Standard normals that a member needs before its first step, and in
        each step.
    n_work : int
        Numbers for each member in the largest array that a step works on.
    """

    n_observed: int
    n_starting: int
    n_normals: int
    n_work: int

    def begin(
        self, x: np.ndarray, y: np.ndarray | None, normals: np.ndarray
    ) -> np.ndarray:
        """State before the first step, from (n_starting, member) normals."""

    def colour(self, normals: np.ndarray) -> np.ndarray:
        """Increments (row, steps, member) from normals (n_normals, steps, member)."""

    def advance(self, state: np.ndarray, increment: np.ndarray, time: float) -> None:
        """Step all members in place from `time` [s], by an increment (row, member)."""


@singledispatch
def make_scheme(model: object, step: float) -> Scheme:
    """Choose the time-stepping scheme for a reduced model.

    Parameters
    ----------
    model : ReducedModel, or any class registered with this function
    step : float
        Time step [s].

    Raises
    ------
    DataError
        If no scheme is known for this kind of model.
    """
    message = (
        f"simulate: no scheme is known for a {type(model).__name__}; register one "
        "with make_scheme.register"
    )
    raise DataError(message)


@make_scheme.register
def _(model: ReducedModel, step: float) -> Scheme:
    return StrangScheme(model, step)


@make_scheme.register
def _(model: DiffusionModel, step: float) -> Scheme:
    return ItoScheme(model, step)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Trajectory:
    """Paths of the resolved coordinates.

    Attributes
    ----------
    times : ndarray, shape (n_out,)
        The start and every output after it [s].
    series : ndarray, shape (member, n_out, nx)
        Resolved coordinates [state unit]; NaN from the time on at which a
        member was lost.
    lost : tuple of (int, float)
        Members that left the bound or the finite numbers, with the time [s]
        of the step in which they did.
    """

    times: np.ndarray
    series: np.ndarray
    lost: tuple[tuple[int, float], ...]


@singledispatch
def step_rule(
    model: ReducedModel, x_scale: np.ndarray, *, interval: float
) -> tuple[float, int]:
    """Time step that resolves the noise and the coupling, and fits the output.

    Parameters
    ----------
    model : ReducedModel
    x_scale : ndarray, shape (nx,)
        Typical amplitudes of x [state unit], such as standard deviations.
    interval : float
        Interval between outputs [s].

    Returns
    -------
    step : float
        The largest step [s] that divides the interval and is at most 0.3 / g
        and 0.2 / c.
    every : int
        Steps in an interval.

    Notes
    -----
    g is the largest modulus of an eigenvalue of the rate matrix: its noise is
    stepped exactly, but a coupling that is held over a step feels y at the
    step's ends only. c is the largest norm among the linear operators of the
    coupling: on x alone, its linear part and its quadratic part at the
    amplitude of x; on y, the modulation by x. For amplitudes with independent
    signs norms add in squares. The angular frequency of a seasonal forcing
    counts as well.
    """
    scale = np.square(x_scale)

    def modulated(tensors):
        norms = np.linalg.norm(2 * tensors, ord=2, axis=(0, 2)) if tensors.size else 0.0
        return math.sqrt(np.sum(scale * np.square(norms)))

    coupling = max(
        np.linalg.norm(model.x_from_x, ord=2),
        modulated(model.x_from_xx),
        modulated(model.y_from_xy),
        0.0 if model.variation is None else model.variation.fastest,
    )
    noise = np.abs(np.linalg.eigvals(model.rate)).max(initial=0.0)
    fastest = max(noise / ACCURACY, coupling / STABILITY)
    # A limit that divides the interval exactly must not cost one more step.
    every = max(1, math.ceil(interval * fastest * (1 - 1e-12)))
    return interval / every, every


step_rule.register(DiffusionModel, diffusion_step_rule)


def simulate(
    model: ReducedModel,
    start: np.ndarray,
    *,
    step: float,
    n_steps: int,
    every: int,
    streams: Sequence[np.random.Generator],
    start_y: np.ndarray | None = None,
    bound: float | None = None,
    start_time: float = 0.0,
    progress: Callable[[int, int], None] | None = None,
    scheme: Callable[[Any, float], Scheme] = make_scheme,
) -> Trajectory:
    """Simulate members of a reduced model.

    Parameters
    ----------
    model : ReducedModel
        Or another kind that is registered with :func:`make_scheme`.
    start : ndarray, shape (member, nx)
        Resolved coordinates at the start [state unit].
    step : float
        Time step [s].
    n_steps, every : int
        Steps in all, and between outputs; the second divides the first.
    streams : sequence of numpy.random.Generator
        One for each member. Its path depends on its own stream only, to the
        bit (on one machine, with one number of BLAS threads): not on how
        many members there are, nor on `every` or `n_steps`.
    start_y : ndarray, shape (member, ny), optional
        Noise at the start; drawn from its stationary distribution by default.
    bound : float, optional
        Largest norm of x [state unit]. A member beyond it, or beyond the
        finite numbers, is lost: it is recorded and stopped, never clipped,
        and the others go on.
    start_time : float
        Time of the start, on the clock of the forcing [s].
    progress : callable, optional
        Called as ``progress(done, total)`` with numbers of member-steps.
    scheme : callable
        ``scheme(model, step)`` makes the time-stepping scheme; by default the
        one that suits the kind of model.

    Returns
    -------
    Trajectory

    Raises
    ------
    DataError
        If shapes or numbers do not fit, or the noise is not one (see
        :func:`eddyshed.reduce.splitting.ornstein_uhlenbeck_step`).
    """
    start = _checked(model, start, start_y, streams, bound)
    _check_steps(step, n_steps, every)
    stepper = scheme(model, step)
    members, nx = start.shape
    count = n_steps // every + 1
    series = np.full((members, count, nx), np.nan)
    series[:, 0] = start
    width = group_width(stepper)
    lost = []
    for first in range(0, members, width):
        group = slice(first, first + width)
        own_streams = streams[group]
        own_y = None if start_y is None else np.asarray(start_y, dtype=float)[group]
        largest = HUGE if bound is None else bound
        for done, x, alive, gone in _steps(
            stepper,
            start[group],
            own_y,
            own_streams,
            n_steps,
            largest,
            lambda done: start_time + done * step,
        ):
            lost += [(first + int(m), start_time + done * step) for m in gone]
            if done % every == 0:
                series[first + alive, done // every] = x[:, alive].T
            if progress is not None and done % REPORT == 0:
                progress(first * n_steps + len(own_streams) * done, members * n_steps)
    if progress is not None:
        progress(members * n_steps, members * n_steps)
    return Trajectory(
        times=start_time + step * every * np.arange(count),
        series=series,
        lost=tuple(sorted(lost)),
    )


def group_width(scheme: Scheme) -> int:
    """Members that are stepped together: as many as stay in cache, 16 at least."""
    width = WORKING_MEMORY // (8 * scheme.n_work * COLUMNS) * COLUMNS
    return min(max(width, COLUMNS), LARGEST_GROUP)


def _steps(scheme, start, start_y, streams, n_steps, bound, clock):
    """Step one group of members; yield x, who is alive and who was just lost."""
    members = len(streams)
    columns = -(-members // COLUMNS) * COLUMNS  # filled up with members at rest

    def padded(rows):
        return np.pad(rows.T, ((0, 0), (0, columns - members)))

    def draw(steps, count, alive):
        normals = np.zeros((columns, steps, count))
        for member in alive:
            streams[member].standard_normal(out=normals[member])
        return np.ascontiguousarray(normals.T)  # (count, steps, member)

    alive = np.arange(members)
    state = scheme.begin(
        padded(start),
        None if start_y is None else padded(start_y),
        draw(1, scheme.n_starting, alive)[:, 0],
    )
    x = state[: scheme.n_observed]
    block = max(1, NOISE_MEMORY // (8 * columns * max(1, scheme.n_normals)))
    for first in range(0, n_steps, block):
        steps = min(block, n_steps - first)
        increments = scheme.colour(draw(steps, scheme.n_normals, alive))
        for done in range(first + 1, first + steps + 1):
            with np.errstate(over="ignore", invalid="ignore"):
                scheme.advance(state, increments[:, done - first - 1], clock(done - 1))
                is_good = np.einsum("im,im->m", x, x)[alive] <= bound**2  # no NaN
            gone, alive = alive[~is_good], alive[is_good]
            yield done, x, alive, gone
            if len(alive) == 0:
                return


def _checked(model, start, start_y, streams, bound):
    start = np.asarray(start, dtype=float)
    if start.ndim != 2 or start.shape[1] != model.nx:
        message = (
            f"simulate: start has shape {start.shape}, must be (member, {model.nx})"
        )
        raise DataError(message)
    members = len(start)
    if members == 0 or len(streams) != members:
        message = (
            f"simulate: {members} members with {len(streams)} streams; give one "
            "stream to each member, and at least one member"
        )
        raise DataError(message)
    if start_y is not None and np.shape(start_y) != (members, model.ny):
        message = (
            f"simulate: start_y has shape {np.shape(start_y)}, must be "
            f"{(members, model.ny)}"
        )
        raise DataError(message)
    norm = np.linalg.norm(start, axis=1)
    outside = ~(norm <= (HUGE if bound is None else bound))
    if outside.any():
        member = int(np.argmax(outside))
        message = (
            f"simulate: member {member} starts with norm {norm[member]:.4g}, allowed "
            f"is {'any finite number' if bound is None else f'at most {bound:.4g}'}"
        )
        raise DataError(message)
    return start


def _check_steps(step, n_steps, every):
    problems = []
    if not 0 < step < np.inf:
        problems.append(f"step = {step} must be positive")
    if n_steps < 0 or every < 1 or n_steps % every:
        problems.append(
            f"n_steps = {n_steps} must be a multiple of every = {every}, both positive"
        )
    if problems:
        message = f"simulate: {'; '.join(problems)}"
        raise DataError(message)
