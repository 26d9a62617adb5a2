"""What each stage of a study does: here the truth and the reduction meet."""

from __future__ import annotations

import logging

import numpy as np

from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import fingerprint
from eddyshed.solver.driven import is_random
from eddyshed.solver.errors import DataError
from eddyshed.solver.exponential import stepper_of
from eddyshed.solver.forecast import seconds_per_step
from eddyshed.solver.progress import progress
from eddyshed.solver.randomness import stream
from eddyshed.solver.segments import reached_step
from eddyshed.solver.time_functions import Steady
from eddyshed.solver.truth import (
    initial_state,
    plan_of,
    random_forcing_of,
    run_member,
)

from .audit import audit
from .bases.fourier import kept_coordinates
from .benchmark import compare, run_closure, truth_side
from .closures import closure
from .closures.data import ClosureData
from .coupling import coupling, coupling_sizes
from .diffusion import DiffusionModel
from .homogenised import LARGEST
from .noise.fit import NoiseFit, fit_ornstein_uhlenbeck, window_rule
from .operators import Operators, galerkin
from .reduced import ReducedModel
from .settings import FourierSettings, StudyConfig
from .simulated import load, save
from .split import Split, split_truth, unresolved_series
from .statistics.correlation import integral_time
from .store import plain, read_one, write_all, write_json
from .study import Interrupted, Stage, Study, fingerprint_of

log = logging.getLogger(__name__)


def preflight(config: StudyConfig, command: str) -> None:
    """Refuse now what would fail only after the truth was run.

    Parameters
    ----------
    config : StudyConfig
        The config.
    command : str
        The command that was given: a truth run may do what a reduction of it
        cannot.

    Raises
    ------
    DataError
        If a pattern, a band or the basis does not fit the grid, or a reduction
        is asked for under a forcing that varies.
    """
    varying = [
        name
        for name, pattern in config.forcing.items()
        if not is_random(pattern) and not isinstance(pattern.time, Steady)
    ]
    if varying and command not in ("truth", "check"):
        message = (
            f"[forcing.{varying[0]}] varies in time, and the reduced models are made "
            "for a steady forcing; make it steady, or run only the truth: eddyshed "
            "truth"
        )
        raise DataError(message)
    ocean = build_ocean(config)
    initial_state(config, ocean, 0)
    random_forcing_of(config, ocean, 0)
    stepper_of(config.time.scheme, ocean, config.time.step)
    if isinstance(config.resolved, FourierSettings):
        kept = int(kept_coordinates(config.resolved, ocean.waves).sum())
    elif (kept := config.resolved.modes) >= ocean.size:
        message = (
            f"[resolved] modes = {config.resolved.modes}, but the grid has "
            f"{ocean.size} coordinates and some must be left unresolved; ask for fewer"
        )
        raise DataError(message)
    white = [name for name in config.closures.use if name.startswith("white")]
    if white and kept > LARGEST and command not in ("truth", "check"):
        message = (
            f"[closures] {white[0]}: {kept} resolved modes make a cubic of {kept}^4 "
            f"coefficients, and it is made for at most {LARGEST} modes; keep fewer, or "
            "leave it out of [closures] use"
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
    linear, quadratic = coupling_sizes(operators, split.x, y)
    log.info(
        "reduce: unresolved modes reach the resolved ones by linear terms of "
        "%.3g and quadratic terms of %.3g %s per second (rms)",
        linear,
        quadratic,
        ocean.unit,
    )
    match = config.noise.match
    if match == "auto":
        match = "product" if quadratic > linear else "integral"
    noise = fit_ornstein_uhlenbeck(
        y[np.newaxis],
        record.step,
        window=window,
        match=match,
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
        leave_out=config.closures.white.leave_out,
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


def read_model(study: Study, name: str) -> ReducedModel | DiffusionModel:
    """Read a reduced model."""
    path = study.path("closures.h5")
    return read_one(path, "closures", name, ReducedModel, DiffusionModel)


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
    truth = truth_side(split, config.seed)
    entries, correlations = [], {"truth": truth.correlations(truth.series)}
    for name in config.closures.use:
        run, model = _simulated(study, name, truth), read_model(study, name)
        entry = compare(config, name, truth, run)
        entry |= {"notes": list(model.notes), "facts": model.facts}
        entries.append(entry)
        if entry["summary"] is not None:
            correlations[name] = truth.correlations(run.series)
    write_json(
        study.path("benchmark.json"),
        stamp,
        {
            "modes": list(split.resolved.labels),
            "unit": build_ocean(config).unit,
            "truth": {
                "length": truth.series.shape[1] * truth.step,
                "summary": plain(truth.summary),
                "cost": seconds_per_step(config) / config.time.step,
            },
            "closures": entries,
            "correlation": {
                "lags": (truth.lags * truth.step).tolist(),
                **{name: values.tolist() for name, values in correlations.items()},
            },
        },
    )


def _simulated(study, name, truth):
    """Run of a reduced model: from its file if that is fresh, else made now."""
    path, stamp = study.path(f"simulated/{name}.h5"), simulation_stamp(study, name)
    found = load(path, stamp)
    if found is not None:
        log.info("benchmark: %s: simulation reused", name)
        return found
    with progress(name, 1, quiet=study.quiet) as shown:
        run = run_closure(
            study.config,
            read_model(study, name),
            truth,
            progress=lambda done, total: shown.to(done / total),
        )
    save(path, stamp, f"{study.config.name}: {name}", run)
    return run


def simulation_stamp(study: Study, name: str) -> str:
    """Fingerprint of a simulation: its closure and how it is run."""
    benchmark = study.config.benchmark
    return fingerprint(
        {
            "closure": name,
            "after": fingerprint_of(study, STAGES, "reduce"),
            "members": benchmark.members,
            "duration": benchmark.duration,
        }
    )


def run_report(study: Study, stamp: str) -> None:
    """Write the report."""
    from .report.page import write_report

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
