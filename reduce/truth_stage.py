"""The stage that makes the truth: one member here, many by an engine."""

from __future__ import annotations

from eddyshed.solver.engine import opened_executor
from eddyshed.solver.ensemble import Outcome, complete_members, run_ensemble
from eddyshed.solver.errors import RunFolderError
from eddyshed.solver.forecast import bytes_to_come
from eddyshed.solver.progress import progress
from eddyshed.solver.segments import reached_step
from eddyshed.solver.settings import SerialSettings
from eddyshed.solver.truth import run_member, steps_of

from .study import Incomplete, Interrupted, Study, free_bytes, members_text


def refuse_full_disk(study: Study) -> None:
    """Refuse a truth that will not fit the disk.

    Parameters
    ----------
    study : Study
        What is on disk already, of the members that are asked for, counts as done.

    Raises
    ------
    RunFolderError
        With what is needed, and what there is.
    """
    needed = bytes_to_come(study.config, study.truth_folder, study.asked)
    free = free_bytes(study.folder)
    if needed > free and not study.ignore_disk_space:
        message = (
            f"{study.folder}: the truth will take {needed / 1e9:.3g} GB more, and "
            f"{free / 1e9:.3g} GB are free; record less often ([output] state_every), "
            "run fewer members, choose a larger disk with --runs, or go ahead all the "
            "same with --ignore-disk-space"
        )
        raise RunFolderError(message)


def run_truth(study: Study, stamp: str) -> None:
    """Run the members of the truth that are asked for, or go on with them."""
    refuse_full_disk(study)
    config, asked = study.config, study.asked
    ensemble = config.ensemble.members > 1
    with study.gentle():
        study.outcomes[:] = _run_members(study) if ensemble else [_run_alone(study)]
    complete = sum(outcome.complete for outcome in study.outcomes)
    if study.stop() and complete < len(asked):
        where = f"{complete} of {len(asked)} members complete"
        if not ensemble:
            where = study.outcomes[0].reason
        message = (
            f"truth stopped: {where}, checkpoint written; run the same command again "
            "to go on"
        )
        raise Interrupted(message)
    if complete < len(asked):
        unfinished = [o.member for o in study.outcomes if not o.complete]
        message = (
            f"truth: {members_text(unfinished)} not complete; run the same command "
            "again to try those once more, the others are kept"
        )
        raise Incomplete(message)


def _run_alone(study):
    """Run the one member of a study in this process; what is wrong is raised."""
    config, folder = study.config, study.truth_folder
    _, total = steps_of(config)
    done = reached_step(folder, 0)
    step = config.time.step
    with progress("truth", total, done=done, quiet=study.quiet, step=step) as shown:
        complete = run_member(config, 0, folder, stop=study.stop, progress=shown.to)
    if complete:
        return Outcome(member=0, status="done")
    reached = f"at step {reached_step(folder, 0)} of {total}"
    return Outcome(member=0, status="stopped", reason=reached)


def _run_members(study):
    """Run members by the config's engine."""
    config, folder, asked = study.config, study.truth_folder, study.asked
    _, total = steps_of(config)
    complete = complete_members(config, folder, asked)
    done = sum(
        total if member in complete else reached_step(folder, member)
        for member in asked
    )
    # No process is started for what is there already.
    left = len(asked) - len(complete)
    engine = config.engine if left else SerialSettings()
    with (
        progress(
            f"truth, {len(asked)} members",
            total * len(asked),
            done=done,
            quiet=study.quiet,
            step=config.time.step,
        ) as shown,
        opened_executor(engine, left) as executor,
    ):
        return run_ensemble(
            config,
            folder,
            asked,
            executor=executor,
            stop=study.stop,
            progress=lambda steps, ready: shown.to(steps, f"{ready} complete"),
        )
