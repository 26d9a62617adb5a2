"""Reduced models run as long as the truth, and set beside it."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from eddyshed.solver.randomness import stream

from .closures import CLOSURES
from .measured import measured_statistics
from .reduced import ReducedModel
from .scores import Summary, Verdict, judge, score, summarise
from .settings import BenchmarkSettings, StudyConfig
from .simulated import Simulated
from .simulation import simulate, step_rule
from .split import Split
from .statistics.correlation import correlation_function
from .store import plain

LAGS = 120  # of the correlation functions that are kept for the report
SPIN_UP_TIMES = 5  # of a reduced model, in correlation times of the slowest mode
RECORD_LENGTHS = 2  # of the truth, in all members of a reduced model together
LOST_BOUND = 10  # times the largest excursion of the truth: a member is lost
AT_REST = 1e-8  # of the truth's variance: a mode has come to rest


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TruthSide:
    """The truth, as reduced models are compared with it.

    Attributes
    ----------
    split : Split
        The divided truth.
    series : ndarray, shape (member, time, mode)
        Resolved coordinates, not centred.
    step : float
        Sampling interval [s].
    summary : Summary
        Its statistics.
    lags : ndarray of int, shape (n_lags,)
        Lags of the correlation functions in samples, dense at first, up to
        three times the slowest integral time.
    """

    split: Split
    series: np.ndarray
    step: float
    summary: Summary
    lags: np.ndarray

    def correlations(self, series: np.ndarray) -> np.ndarray:
        """Correlation functions at the lags, shape (n_lags, mode)."""
        return correlation_function(series, int(self.lags[-1]))[self.lags]


def truth_side(split: Split, seed: int) -> TruthSide:
    """Prepare the truth for comparison.

    Parameters
    ----------
    split : Split
        The divided truth.
    seed : int
        Entropy of the study.

    Returns
    -------
    TruthSide

    Raises
    ------
    DataError
        If a resolved mode is constant or the truth too short.
    """
    series = split.fine_x + split.resolved_mean
    step = split.fine_step
    summary = summarise(series, step, stream(seed, 0, "truth statistics"))
    longest = 3 * summary.integral_time.value.max() / step
    spread = np.geomspace(1, np.clip(longest, 2, series.shape[1] / 4), LAGS)
    lags = np.unique(np.concatenate([[0], np.round(spread)])).astype(int)
    return TruthSide(split=split, series=series, step=step, summary=summary, lags=lags)


def member_duration(settings: BenchmarkSettings, truth_length: float) -> float:
    """Length of the record of each member of a reduced model [s]."""
    if settings.duration is not None:
        return settings.duration
    return RECORD_LENGTHS * truth_length / settings.members


def run_closure(
    config: StudyConfig,
    model: ReducedModel,
    truth: TruthSide,
    progress: Callable[[int, int], None],
) -> Simulated:
    """Run a reduced model from states of the truth.

    Parameters
    ----------
    config : StudyConfig
        Section ``[benchmark]``, and the seed.
    model : ReducedModel
        The model.
    truth : TruthSide
        Gives the starts, the sampling interval and the length.
    progress : callable
        Told how many units of work are done, of how many.

    Returns
    -------
    Simulated
    """
    split, interval, seed = truth.split, truth.step, config.seed
    members = config.benchmark.members
    step, every = step_rule(model, np.sqrt(split.resolved.variance), interval=interval)
    duration = member_duration(config.benchmark, split.length)
    spin_up = SPIN_UP_TIMES * float(truth.summary.integral_time.value.max())
    skip = int(np.ceil(spin_up / interval))
    n_steps = (skip + int(np.ceil(duration / interval))) * every
    states = split.x.reshape(-1, split.x.shape[-1])
    starts = stream(seed, 0, f"starts of {model.name}").integers(
        len(states), size=members
    )
    before = time.process_time()
    trajectory = simulate(
        model,
        states[starts],
        step=step,
        n_steps=n_steps,
        every=every,
        streams=[stream(seed, k, f"noise of {model.name}") for k in range(members)],
        bound=LOST_BOUND * float(np.linalg.norm(states, axis=1).max()),
        progress=progress,
    )
    seconds = time.process_time() - before
    return Simulated(
        series=trajectory.series[:, skip:] + split.resolved_mean,
        start=float(trajectory.times[skip]),
        step=interval,
        lost=trajectory.lost,
        cost=seconds / (n_steps * step * members),
    )


def compare(
    config: StudyConfig, name: str, truth: TruthSide, run: Simulated
) -> dict[str, Any]:
    """Score a reduced model.

    Parameters
    ----------
    config : StudyConfig
        Section ``[benchmark]``, and the seed.
    name : str
        The closure.
    truth : TruthSide
    run : Simulated

    Returns
    -------
    dict
        Plain data: ``name``, ``what`` it is, members ``lost``, ``cost``,
        ``verdict``, and ``summary``, ``scores`` and ``measured``, which are None,
        empty and None for a model that gives no statistics; the last also where
        nothing is measured.
    """
    labels = truth.split.resolved.labels
    summary, scores, measured, verdict = None, [], None, _failure(truth, run)
    if verdict is None:
        rng = stream(config.seed, 0, f"scores of {name}")
        summary = summarise(run.series, run.step, rng)
        scores = score(
            config.benchmark,
            truth.series,
            truth.step,
            truth.summary,
            run.series,
            run.step,
            summary,
            rng,
        )
        verdict = judge(scores, labels)
        measured = measured_statistics(
            truth.split.resolved,
            run.series,
            run.step,
            stream(config.seed, 0, f"measured of {name}"),
        )
    return {
        "name": name,
        "what": CLOSURES[name],
        "lost": [list(pair) for pair in run.lost],
        "cost": run.cost,
        "summary": plain(summary),
        "scores": plain(scores),
        "measured": measured,
        "verdict": plain(verdict),
    }


def _failure(truth: TruthSide, run: Simulated) -> Verdict | None:
    """Verdict on a model that gives no statistics, if that is so."""
    labels = truth.split.resolved.labels
    if run.lost:
        first = min(when for _, when in run.lost)
        reason = (
            f"{len(run.lost)} of {len(run.series)} members blew up, the first after "
            f"{first / 86400:.4g} days"
        )
    else:
        # Of each member by itself: they may have come to rest in different places.
        variance = run.series.var(axis=1).max(axis=0)
        rest = variance < AT_REST * truth.summary.variance.value
        if not rest.any():
            return None
        reason = f"{labels[int(np.argmax(rest))]} comes to rest: it has no variance"
    return Verdict(
        word="failed", reason=reason, within_sampling=0, within_tolerance=0, count=0
    )
