"""Reduced models run as long as the truth, and set beside it."""

from __future__ import annotations

import logging
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from eddyshed.solver.errors import DataError
from eddyshed.solver.randomness import stream

from .closures import about
from .measured import measured_statistics
from .reduced import ReducedModel
from .scores import SAMPLING, Summary, Verdict, judge, score, summarise
from .settings import BenchmarkSettings, StudyConfig
from .simulated import Simulated
from .simulation import simulate, step_rule
from .split import Split
from .statistics.correlation import correlation_function
from .statistics.estimate import Estimate
from .step_check import StepCheck, compare_steps
from .store import plain

log = logging.getLogger(__name__)

LAGS = 120  # of the correlation functions that are kept for the report
SPIN_UP_TIMES = 5  # of a reduced model, in correlation times of the slowest mode
RECORD_LENGTHS = 2  # of the truth, in all members of a reduced model together
LOST_BOUND = 10  # times the largest excursion of the truth: a member is lost
SHORTER = 8  # times shorter than a run is its check at half the step
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
    # All members live by one clock, so they start at one phase of every season.
    variation = getattr(model, "variation", None)
    first = slice(None) if variation is None else variation.alike(split.times)
    if variation is not None and variation.is_transient:
        # Before and after are not alike: the same window of time as the truth.
        first, skip, duration = [0], 0, (split.x.shape[1] - 1) * split.step
    n_steps = (skip + int(np.ceil(duration / interval))) * every
    states = split.x[:, first].reshape(-1, split.x.shape[-1])
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
        bound=LOST_BOUND * float(np.linalg.norm(split.x, axis=2).max()),
        start_time=split.start,
        progress=progress,
    )
    seconds = time.process_time() - before
    return Simulated(
        series=trajectory.series[:, skip:] + split.resolved_mean,
        start=float(trajectory.times[skip]),
        step=interval,
        lost=trajectory.lost,
        cost=seconds / (n_steps * step * members),
        noisy=_has_noise(model),
        step_check=_half_step(config, model, truth, trajectory, skip),
    )


def _half_step(config, model, truth, whole, skip) -> StepCheck | None:
    """Go on for a short while at half the step, and compare."""
    variation = getattr(model, "variation", None)
    if variation is not None and variation.is_transient:
        return None  # later is not like before
    series, interval = whole.series[:, skip:], truth.step
    # Without noise a model may still be on its way to rest: later is not like before.
    if whole.lost or not _has_noise(model) or _at_rest(truth, series).any():
        return None
    step, every = step_rule(
        model, np.sqrt(truth.split.resolved.variance), interval=interval
    )
    memory = float(truth.summary.integral_time.value.max())
    settle = int(np.ceil(memory / interval))  # the noise starts anew
    records = settle + int(np.ceil(series.shape[1] / SHORTER))
    half = simulate(
        model,
        series[:, -1],
        step=step / 2,
        n_steps=2 * every * records,
        every=2 * every,
        streams=[
            stream(config.seed, k, f"half step of {model.name}")
            for k in range(len(series))
        ],
        start_time=float(whole.times[-1]),
    )
    if half.lost:
        log.warning("%s: blows up at half its step, but not at the step", model.name)
        return None
    try:
        return compare_steps(
            series,
            half.series[:, settle:],
            interval=interval,
            step=step,
            rng=stream(config.seed, 0, f"steps of {model.name}"),
        )
    except DataError:  # too short for statistics
        return None


def _has_noise(model) -> bool:
    """Whether anything random drives a model; any but a ReducedModel has noise."""
    return not isinstance(model, ReducedModel) or bool(np.any(model.covariance))


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
    summary, scores, measured, verdict = None, [], None, _lost(run)
    at_rest = _at_rest(truth, run.series) if verdict is None else None
    if at_rest is not None and at_rest.any() and not run.noisy:
        verdict = _resting(config, truth, run, int(np.argmax(at_rest)))
    elif at_rest is not None and at_rest.any():
        mode = labels[int(np.argmax(at_rest))]
        verdict = _failed(f"{mode} comes to rest: it has no variance")
    elif verdict is None:
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
        "what": about(name),
        "lost": [list(pair) for pair in run.lost],
        "cost": run.cost,
        "step": None if run.step_check is None else _step_entry(run, labels),
        "summary": plain(summary),
        "scores": plain(scores),
        "measured": measured,
        "verdict": plain(verdict),
    }


def _step_entry(run: Simulated, labels: tuple[str, ...]) -> dict[str, Any]:
    return {
        **plain(run.step_check),
        "sentence": run.step_check.sentence(labels),
    }


def _failed(reason: str) -> Verdict:
    return Verdict(
        word="failed", reason=reason, within_sampling=0, within_tolerance=0, count=0
    )


def _lost(run: Simulated) -> Verdict | None:
    """Verdict on a model that lost members, if that is so."""
    if not run.lost:
        return None
    first = min(when for _, when in run.lost)
    return _failed(
        f"{len(run.lost)} of {len(run.series)} members blew up, beyond {LOST_BOUND} "
        "times the largest excursion of the truth, the first on day "
        f"{first / 86400:.4g} of its clock"
    )


def _at_rest(truth: TruthSide, series: np.ndarray) -> np.ndarray:
    """Modes that do not move any more, shape (mode,)."""
    # In the second half, by when a slow approach is over; of each member by itself,
    # for they may have come to rest in different places.
    variance = _second_half(series).var(axis=1).max(axis=0)
    return variance < AT_REST * truth.summary.variance.value


def _second_half(series: np.ndarray) -> np.ndarray:
    return series[:, series.shape[1] // 2 :]


def _resting(config, truth: TruthSide, run: Simulated, mode: int) -> Verdict:
    """Verdict on a model without noise that comes to rest: its mean can be scored.

    Members that rest in different places give the mean an error of its own.
    """
    ends, labels = _second_half(run.series).mean(axis=1), truth.split.resolved.labels
    spread = np.zeros(ends.shape[1])
    if len(ends) > 1:
        spread = ends.std(axis=0, ddof=1) / np.sqrt(len(ends))
    mean, deviation = truth.summary.mean, np.sqrt(truth.summary.variance.value)
    off = np.abs(ends.mean(axis=0) - mean.value)
    error = np.hypot(mean.error, spread)
    worst = int(np.argmax(off / deviation))
    distance = Estimate(off[worst] / deviation[worst], error[worst] / deviation[worst])
    close = off / deviation < config.benchmark.mean_tolerance
    return Verdict(
        word="at rest",
        reason=(
            f"without noise {labels[mode]} comes to rest, so only means can be "
            f"compared: furthest is that of {labels[worst]}, off by {distance} "
            "standard deviations of the truth; of use for means and for the response "
            "to forcing"
        ),
        within_sampling=int((off < SAMPLING * error).sum()),
        within_tolerance=int(close.sum()),
        count=len(off),
    )
