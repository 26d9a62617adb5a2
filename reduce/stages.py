"""What each stage of a study does: here the truth and the reduction meet."""

from __future__ import annotations

import logging
import shutil
from dataclasses import replace

import numpy as np

from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import fingerprint
from eddyshed.solver.errors import ContractError
from eddyshed.solver.forecast import seconds_per_step
from eddyshed.solver.progress import progress
from eddyshed.solver.randomness import stream

from .audit import Material, audit
from .bases.spectrum import spectrum_notes
from .benchmark import compare, run_closure, truth_side
from .closures import closure
from .closures.data import ClosureData
from .coupling import coupling, coupling_sizes, covariance
from .diffusion import DiffusionModel
from .flow.measure import measure_flow
from .flow.parts import write_flow
from .measured import measured_names, measured_statistics
from .member_blocks import check_series_memory
from .noise.fit import NoiseFit
from .noise.of_split import fit_noise
from .operators import Operators, galerkin
from .preflight import model_of
from .reduced import ReducedModel
from .settings import EofSettings, StudyConfig
from .simulated import load, save
from .split import Split, split_truth, unresolved_series
from .statistics.stationarity import stationarity, stationarity_notes
from .store import plain, read_one, write_all, write_json
from .study import Stage, Study, fingerprint_of
from .truth_stage import run_truth

log = logging.getLogger(__name__)


def run_flow(study: Study, stamp: str) -> None:
    """Measure what the truth did."""
    ocean, path = build_ocean(study.config), study.path("flow.h5")
    title = f"{study.config.name}: fields, spectra, fluxes and budgets of the truth"
    if ocean.waves is None:  # a user's own model: nothing is known of its space
        write_all(path, stamp, title, "flow", {})
        return
    with progress("flow", 1, quiet=study.quiet) as shown:
        found = measure_flow(ocean, study.records(), progress=shown.to)
    write_flow(path, stamp, title, found)


def run_reduce(study: Study, stamp: str) -> None:
    """Split the truth, project the equation, fit the noise, make the closures."""
    config, records = study.config, study.records()
    model = model_of(config)
    split = split_truth(config, model, records)
    shares = ", ".join(f"{100 * share:.3g} %" for share in split.shares)
    log.info(
        "reduce: %d resolved and %d unresolved modes (%s of the variance, the last "
        "left out)",
        split.resolved.n_modes,
        split.unresolved.n_modes,
        shares,
    )
    for note in split_notes(config, split):
        log.info("reduce: %s", note)
    y = unresolved_series(split, model, records, config.limits.memory)
    with progress("operators", 1, quiet=study.quiet) as shown:
        operators = galerkin(
            model,
            split.resolved.vectors,
            split.unresolved.vectors,
            split.mean,
            times=split.times,
            memory=config.limits.memory,
            progress=lambda done, total: shown.to(done / total),
        )
    linear, quadratic = coupling_sizes(operators, split.x, y)
    log.info(
        "reduce: unresolved modes reach the resolved ones by linear terms of "
        "%.3g and quadratic terms of %.3g %s per second (rms)",
        linear,
        quadratic,
        model.unit,
    )
    variation, forced = operators.variation, np.zeros((len(split.times), y.shape[2]))
    if variation is not None:
        forced = variation.cycle(y, split.times)
    noise = fit_noise(
        config.noise,
        y - forced,
        split.step,
        product=quadratic > linear,
        basis=split.unresolved,
        waves=model.waves,
    )
    for note in noise.notes:
        log.info("reduce: noise: %s", note)
    data = ClosureData(
        model=model,
        split=split,
        operators=operators,
        noise=noise,
        covariance_y=covariance(y, y),
        covariance_xy=covariance(split.x, y),
        mean_calibration=config.closures.mean_calibration,
        forced_covariance=covariance(forced[np.newaxis], forced[np.newaxis]),
        leave_out=config.closures.white.leave_out,
    )
    hooks = config.closures.hooks
    models = {name: _made(name, hooks.get(name), data) for name in config.closures.use}
    write_all(
        study.path("split.h5"),
        stamp,
        f"{config.name}: resolved and unresolved modes",
        "split",
        {"split": split},
        model.unit,
    )
    write_all(
        study.path("closures.h5"),
        stamp,
        f"{config.name}: operators, noise and reduced models",
        "closures",
        {"operators": operators, "noise": noise, **models},
        model.unit,
    )


def _made(name, hook, data):
    """Make a closure; its notes say what a varying forcing means for it."""
    variation = data.operators.variation
    if hook is None:
        model = closure(name)(data)
    else:
        model = _checked(name, hook(data), data.operators.nx)
    if variation is None:
        return model
    notes = variation.notes
    if getattr(model, "variation", None) is None:
        notes += ("this closure runs under the mean forcing: it takes no variation",)
    return replace(model, notes=model.notes + notes)


def _checked(name, made, nx):
    """What a user's closure made, under the name that the config has for it."""
    if not isinstance(made, ReducedModel | DiffusionModel):
        message = (
            f'closure "{name}" returned a {type(made).__name__}, must be a '
            "ReducedModel or a DiffusionModel of eddyshed.reduce"
        )
        raise ContractError(message)
    if made.nx != nx:
        message = (
            f'closure "{name}" returned a model of {made.nx} coordinates, must have '
            f"the {nx} resolved ones of data.split"
        )
        raise ContractError(message)
    return replace(made, name=name)


def split_notes(config: StudyConfig, split: Split) -> list[str]:
    """What is to be said of a divided truth: stationarity, degenerate functions."""
    notes = stationarity_notes(stationarity(split.x, split.step), split.resolved.labels)
    if isinstance(config.resolved, EofSettings):
        notes += spectrum_notes(split.resolved, split.unresolved, split.x, split.step)
    return notes


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
    config, records = study.config, study.records()
    model, split = model_of(config), read_split(study)
    operators = read_operators(study)
    material = Material(
        model=model,
        split=split,
        operators=operators,
        noise=read_noise(study),
        coupling=coupling(split, operators),
        y=unresolved_series(split, model, records, config.limits.memory),
        records=records,
        models={
            name: read_model(study, name)
            for name in ("coloured", "white")
            if name in config.closures.use
        },
    )
    rng = stream(config.seed, 0, "audit")
    found = audit(config.audit, material, config.closures.use, rng)
    write_json(study.path("audit.json"), stamp, plain(found))


def run_benchmark(study: Study, stamp: str) -> None:
    """Simulate every closure and score it."""
    config, split = study.config, read_split(study)
    check_series_memory(config, split.resolved.n_modes)
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
            "unit": model_of(config).unit,
            "measured": measured_names(split.resolved),
            "truth": {
                "measured": measured_statistics(
                    split.resolved,
                    truth.series,
                    truth.step,
                    stream(config.seed, 0, "measured truth"),
                ),
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
            folder=path.with_suffix(".members"),
            stamp=stamp,
        )
    save(path, stamp, f"{study.config.name}: {name}", run, model_of(study.config).unit)
    shutil.rmtree(path.with_suffix(".members"))
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
            outputs=(),
            run=run_truth,
        ),
        Stage(
            name="flow",
            sections=(),
            after=("truth",),
            outputs=("flow.h5",),
            run=run_flow,
        ),
        Stage(
            name="reduce",
            sections=("resolved", "unresolved", "noise", "closures", "limits"),
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
            after=("flow", "audit", "benchmark"),
            outputs=("report.html",),
            run=run_report,
        ),
    )
}
