"""What each stage of a study does: here the truth and the reduction meet."""

from __future__ import annotations

import logging
import time
from typing import Any

import numpy as np

from eddyshed.solver.build import build_ocean
from eddyshed.solver.errors import DataError
from eddyshed.solver.exponential import stepper_of
from eddyshed.solver.forecast import seconds_per_step
from eddyshed.solver.progress import progress
from eddyshed.solver.randomness import stream
from eddyshed.solver.segments import reached_step
from eddyshed.solver.truth import (
    initial_state,
    plan_of,
    random_forcing_of,
    run_member,
)

from .audit import audit
from .bases.fourier import kept_coordinates
from .benchmark import Score, Summary, Verdict, judge, score, summarise
from .closures import CLOSURES, closure
from .closures.data import ClosureData, coupling
from .noise import NoiseFit, fit_ornstein_uhlenbeck, window_rule
from .operators import Operators, galerkin
from .reduced import ReducedModel
from .settings import FourierSettings, StudyConfig
from .simulate import simulate, step_rule
from .split import Split, split_truth, unresolved_series
from .statistics import correlation_function, integral_time
from .store import plain, read_one, write_all, write_json
from .study import Interrupted, Stage, Study

log = logging.getLogger(__name__)

LAGS = 120  # of the correlation functions that are kept for the report
SPIN_UP_TIMES = 5  # of a reduced model, in correlation times of the slowest mode
RECORD_LENGTHS = 2  # of the truth, in all members of a reduced model together
LOST_BOUND = 10  # times the largest excursion of the truth: a member is lost
AT_REST = 1e-8  # of the truth's variance: a mode has come to rest


def preflight(config: StudyConfig) -> None:
    """Refuse now what would fail only after the truth was run.

    Raises
    ------
    DataError
        If a pattern, a band or the basis does not fit the grid.
    """
    ocean = build_ocean(config)
    initial_state(config, ocean, 0)
    random_forcing_of(config, ocean, 0)
    stepper_of(config.time.scheme, ocean, config.time.step)
    if isinstance(config.resolved, FourierSettings):
        kept_coordinates(config.resolved, ocean.waves)
    elif config.resolved.modes >= ocean.size:
        message = (
            f"[resolved] modes = {config.resolved.modes}, but the grid has "
            f"{ocean.size} coordinates and some must be left unresolved; ask for fewer"
        )
        raise DataError(message)


def run_truth(study: Study, stamp: str) -> None:
    """Run the truth, or go on with it."""
    config = study.config
    ocean = build_ocean(config)
    total = plan_of(config, ocean).total
    done = reached_step(study.truth_folder, 0)
    with (
        study.gentle(),
        progress("truth", total, done=done, quiet=study.quiet) as shown,
    ):
        complete = run_member(
            config, 0, study.truth_folder, stop=study.stop, progress=shown.to
        )
    if not complete:
        reached = reached_step(study.truth_folder, 0)
        message = (
            f"truth stopped at step {reached} of {total}, checkpoint written; run the "
            "same command again to go on"
        )
        raise Interrupted(message)


def run_reduce(study: Study, stamp: str) -> None:
    """Split the truth, project the equation, fit the noise, make the closures."""
    config, record = study.config, study.record()
    ocean = build_ocean(config)
    split = split_truth(config, ocean, record)
    shares = ", ".join(f"{100 * share:.3g} %" for share in split.shares)
    log.info(
        "reduce: %d resolved and %d unresolved modes (%s of the variance, the last "
        "left out)",
        split.resolved.n_modes,
        split.unresolved.n_modes,
        shares,
    )
    y = unresolved_series(split, ocean, record)
    with progress("operators", 1, quiet=study.quiet) as shown:
        operators = galerkin(
            ocean,
            split.resolved.vectors,
            split.unresolved.vectors,
            split.mean,
            progress=lambda done, total: shown.to(done / total),
        )
    window = config.noise.window
    if window is None:
        times = integral_time(y[np.newaxis], record.step).value
        window = window_rule(times, split.unresolved.variance, record.step)
    noise = fit_ornstein_uhlenbeck(
        y[np.newaxis],
        record.step,
        window=window,
        partners=split.unresolved.partners,
        labels=split.unresolved.labels,
    )
    data = ClosureData(
        model=ocean,
        split=split,
        operators=operators,
        noise=noise,
        covariance_y=y.T @ y / len(y),
        covariance_xy=split.x.T @ y / len(y),
        mean_calibration=config.closures.mean_calibration,
    )
    models = {name: closure(name)(data) for name in config.closures.use}
    write_all(
        study.path("split.h5"),
        stamp,
        f"{config.name}: resolved and unresolved modes",
        "split",
        {"split": split},
    )
    write_all(
        study.path("closures.h5"),
        stamp,
        f"{config.name}: operators, noise and reduced models",
        "closures",
        {"operators": operators, "noise": noise, **models},
    )


def read_split(study: Study) -> Split:
    """Read the divided truth."""
    return read_one(study.path("split.h5"), "split", "split", Split)


def read_noise(study: Study) -> NoiseFit:
    """Read the noise fit."""
    return read_one(study.path("closures.h5"), "closures", "noise", NoiseFit)


def read_operators(study: Study) -> Operators:
    """Read the Galerkin tensors."""
    return read_one(study.path("closures.h5"), "closures", "operators", Operators)


def read_model(study: Study, name: str) -> ReducedModel:
    """Read a reduced model."""
    return read_one(study.path("closures.h5"), "closures", name, ReducedModel)


def run_audit(study: Study, stamp: str) -> None:
    """Test the assumptions."""
    split = read_split(study)
    rng = stream(study.config.seed, 0, "audit")
    findings = audit(
        study.config.audit, split, coupling(split, read_operators(study)), rng
    )
    write_json(study.path("audit.json"), stamp, {"findings": plain(findings)})


def run_benchmark(study: Study, stamp: str) -> None:
    """Simulate every closure and score it."""
    config, split = study.config, read_split(study)
    labels = split.resolved.labels
    truth = (split.fine_x + split.resolved_mean)[np.newaxis]
    truth_summary = summarise(
        truth, split.fine_step, stream(config.seed, 0, "truth statistics")
    )
    lags = _lags(split, truth_summary)
    results = []
    correlations = {"truth": _correlations(truth, lags)}
    for name in config.closures.use:
        series, lost, cost, interval = _simulated(study, name, split, truth_summary)
        entry: dict[str, Any] = {
            "name": name,
            "what": CLOSURES[name],
            "lost": [list(pair) for pair in lost],
            "cost": cost,
            "summary": None,
            "scores": [],
        }
        verdict = _failure(series, lost, truth_summary, labels)
        if verdict is None:
            summary, scores, verdict = _scored(
                study, name, split, truth, truth_summary, series, interval
            )
            entry |= {"summary": plain(summary), "scores": plain(scores)}
            correlations[name] = _correlations(series, lags)
        entry["verdict"] = plain(verdict)
        results.append(entry)
    ocean = build_ocean(config)
    write_json(
        study.path("benchmark.json"),
        stamp,
        {
            "modes": list(labels),
            "unit": ocean.unit,
            "truth": {
                "length": len(truth[0]) * split.fine_step,
                "summary": plain(truth_summary),
                "cost": seconds_per_step(config) / config.time.step,
            },
            "closures": results,
            "correlation": {
                "lags": (lags * split.fine_step).tolist(),
                **{name: values.tolist() for name, values in correlations.items()},
            },
        },
    )


def _simulated(study, name, split, truth_summary):
    """Series of a reduced model, from its file if that is fresh, else run now."""
    from .simulated import load, save

    config = study.config
    path = study.path(f"simulated/{name}.h5")
    stamp = simulation_stamp(study, name)
    found = load(path, stamp)
    if found is not None:
        log.info("benchmark: %s: simulation reused", name)
        return found
    model = read_model(study, name)
    members, interval = config.benchmark.members, split.fine_step
    scale = np.sqrt(split.resolved.variance)
    step, every = step_rule(model, scale, interval=interval)
    duration = config.benchmark.duration
    if duration is None:
        duration = RECORD_LENGTHS * len(split.x) * split.step / members
    spin_up = SPIN_UP_TIMES * float(truth_summary.integral_time.value.max())
    skip = int(np.ceil(spin_up / interval))
    n_steps = (skip + int(np.ceil(duration / interval))) * every
    starts = stream(config.seed, 0, f"starts of {name}").integers(
        len(split.x), size=members
    )
    before = time.process_time()
    with progress(name, n_steps, quiet=study.quiet) as shown:
        path_of_members = simulate(
            model,
            split.x[starts],
            step=step,
            n_steps=n_steps,
            every=every,
            streams=[
                stream(config.seed, k, f"noise of {name}") for k in range(members)
            ],
            bound=LOST_BOUND * float(np.linalg.norm(split.x, axis=1).max()),
            progress=lambda done, total: shown.to(n_steps * done // total),
        )
    seconds = time.process_time() - before
    cost = seconds / (n_steps * step * members)
    series = path_of_members.series[:, skip:] + split.resolved_mean
    save(path, stamp, f"{config.name}: {name}", series, interval, path_of_members, cost)
    return series, path_of_members.lost, cost, interval


def simulation_stamp(study: Study, name: str) -> str:
    """Fingerprint of a simulation: its closure and how it is run."""
    from eddyshed.solver.config import as_table, fingerprint

    from .study import stamp

    benchmark = study.config.benchmark
    return fingerprint(
        {
            "closure": name,
            "after": stamp(study, STAGES, "reduce"),
            "members": benchmark.members,
            "duration": benchmark.duration,
            "seed": as_table(study.config)["seed"],
        }
    )


def _failure(series, lost, truth_summary, labels) -> Verdict | None:
    """Verdict on a model that gives no statistics, if that is so."""
    if lost:
        first = min(when for _, when in lost)
        reason = (
            f"{len(lost)} of {len(series)} members blew up, the first after "
            f"{first / 86400:.4g} days"
        )
    else:
        rest = series.var(axis=(0, 1)) < AT_REST * truth_summary.variance.value
        if not rest.any():
            return None
        reason = f"{labels[int(np.argmax(rest))]} comes to rest: it has no variance"
    return Verdict(
        word="failed", reason=reason, within_sampling=0, within_tolerance=0, count=0
    )


def _scored(
    study, name, split, truth, truth_summary, series, interval
) -> tuple[Summary, list[Score], Verdict]:
    """Scores of a reduced model and what they come to."""
    rng = stream(study.config.seed, 0, f"scores of {name}")
    summary = summarise(series, interval, rng)
    scores = score(
        study.config.benchmark,
        truth,
        split.fine_step,
        truth_summary,
        series,
        interval,
        summary,
        rng,
    )
    return summary, scores, judge(scores, split.resolved.labels)


def _lags(split, truth_summary):
    """Lags in samples, dense at first, up to three times the slowest time."""
    longest = 3 * truth_summary.integral_time.value.max() / split.fine_step
    longest = min(longest, len(split.fine_x) / 4)
    spread = np.geomspace(1, max(2, longest), LAGS)
    return np.unique(np.concatenate([[0], np.round(spread)])).astype(int)


def _correlations(series, lags):
    """Correlation function at some lags, shape (lag, mode)."""
    return correlation_function(series, int(lags[-1]))[lags]


def run_report(study: Study, stamp: str) -> None:
    """Write the report."""
    from .report import write_report

    write_report(study, stamp)


STAGES = {
    stage.name: stage
    for stage in (
        Stage(
            name="truth",
            sections=(),
            after=(),
            outputs=("truth/member-000.h5",),
            run=run_truth,
        ),
        Stage(
            name="reduce",
            sections=("resolved", "unresolved", "noise", "closures"),
            after=("truth",),
            outputs=("split.h5", "closures.h5"),
            run=run_reduce,
        ),
        Stage(
            name="audit",
            sections=("audit",),
            after=("reduce",),
            outputs=("audit.json",),
            run=run_audit,
        ),
        Stage(
            name="benchmark",
            sections=("benchmark",),
            after=("reduce",),
            outputs=("benchmark.json",),
            run=run_benchmark,
        ),
        Stage(
            name="report",
            sections=("name", "title"),
            after=("audit", "benchmark"),
            outputs=("report.html",),
            run=run_report,
        ),
    )
}
