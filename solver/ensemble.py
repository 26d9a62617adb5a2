"""Many members: run by any executor, and shown as one in a file."""

from __future__ import annotations

import json
import logging
import multiprocessing
import time
import uuid
from collections.abc import Callable, Iterable, Mapping, Sequence
from concurrent.futures import (
    FIRST_COMPLETED,
    CancelledError,
    Executor,
    Future,
    wait,
)
from contextlib import suppress
from dataclasses import dataclass, fields
from pathlib import Path

import h5py
import numpy as np

from .errors import DataError, EddyshedError, LostWorker
from .files import add_scale, add_variable, new_file, open_file
from .identity import truth_table
from .locks import Busy, holding, member_lock, noted
from .record import open_record
from .segments import member_paths, reached_step
from .settings import TruthConfig
from .truth import run_member, steps_of

log = logging.getLogger(__name__)

POLL = 0.2  # seconds between looks at a signal, here and in the workers
LOOK = 1.0  # seconds between looks at how far the members are


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """How a member came out.

    Attributes
    ----------
    member : int
        Which one.
    status : str
        ``done`` (now), ``skipped`` (it was complete before), ``failed``, ``busy``
        (another process is at work on it) or ``stopped`` (by a signal).
    reason : str
        Why, where that is a question.
    """

    member: int
    status: str
    reason: str = ""

    @property
    def complete(self) -> bool:
        """Whether the member is at its end."""
        return self.status in ("done", "skipped")


def run_ensemble(
    config: TruthConfig,
    folder: Path,
    members: Iterable[int] | None = None,
    *,
    executor: Executor | None = None,
    stop: Callable[[], bool] = lambda: False,
    progress: Callable[[int, int], None] = lambda steps, complete: None,
) -> list[Outcome]:
    """Run members, each from wherever it stands, and present them as one.

    Parameters
    ----------
    config : TruthConfig
        The config.
    folder : Path
        The study's truth folder; other processes may be at work there as well.
    members : iterable of int, optional
        Which ones; all of the config by default.
    executor : Executor, optional
        Runs them; this process itself, one after another, by default.
    stop : callable
        Asked now and then; if true every member finishes its step, checkpoints and
        ends, and no other is begun.
    progress : callable
        Told now and then how many steps are done in all, and how many members.

    Returns
    -------
    list of Outcome
        One for each, in their order. Whatever stops one stops no other.

    Raises
    ------
    RunFolderError
        If ``ensemble.h5`` cannot be written.
    """
    numbers = list(range(config.ensemble.members) if members is None else members)
    found = {
        m: Outcome(member=m, status="skipped")
        for m in complete_members(config, folder, numbers)
    }
    for member in found:
        log.info("member %d: complete, skipped", member)
    left = [member for member in numbers if member not in found]
    run = _run_here if executor is None else _run_by
    watch = _Watch(config, folder, numbers, set(found), progress)
    watch.look()
    # Workers need the solver alone: what a study adds stays here.
    plain = TruthConfig(
        **{f.name: getattr(config, f.name) for f in fields(TruthConfig)}
    )
    for outcome in run(plain, folder.resolve(), left, executor, stop, watch):
        found[outcome.member] = outcome
        reason = f": {outcome.reason}" if outcome.reason else ""
        level = logging.ERROR if outcome.status == "failed" else logging.INFO
        log.log(level, "member %d: %s%s", outcome.member, outcome.status, reason)
        if outcome.complete:
            watch.complete.add(outcome.member)
        watch.look()
    write_ensemble(config, folder)
    return [found[member] for member in numbers]


def complete_members(
    config: TruthConfig, folder: Path, members: Iterable[int] | None = None
) -> list[int]:
    """Which members are at the end that a config asks for.

    Parameters
    ----------
    config : TruthConfig
    folder : Path
        The truth folder.
    members : iterable of int, optional
        Which to look at; all of the config by default.

    Raises
    ------
    DataError
        If a file that the config names cannot be read.
    """
    asked = list(range(config.ensemble.members) if members is None else members)
    # The first member's table is its own; all others share one.
    tables = {first: truth_table(config, 0 if first else 1) for first in (True, False)}
    found = []
    for member in asked:
        with suppress(DataError):
            record = open_record(member_paths(folder, member)[0])
            if record.complete and record.config == tables[member == 0]:
                found.append(member)
    return found


def run_one(
    config: TruthConfig,
    member: int,
    folder: Path,
    stop: Callable[[], bool],
    progress: Callable[[int], None] = lambda step: None,
) -> Outcome:
    """Run a member and say how it came out; arguments as :func:`run_member`."""
    began = time.monotonic()
    try:
        complete = run_member(config, member, folder, stop=stop, progress=progress)
    except Busy:
        return Outcome(
            member=member, status="busy", reason="another process is at work on it"
        )
    except EddyshedError as error:
        return Outcome(member=member, status="failed", reason=str(error))
    except Exception as error:
        log.exception("member %d", member)
        reason = f"{type(error).__name__}: {error}"
        return Outcome(member=member, status="failed", reason=reason)
    took = f"{time.monotonic() - began:.1f} s"
    if complete:
        return Outcome(member=member, status="done", reason=took)
    return Outcome(
        member=member,
        status="stopped",
        reason=f"at step {reached_step(folder, member)}, checkpoint written",
    )


def work(config: TruthConfig, member: int, folder: str, stop_file: str) -> Outcome:
    """Run a member in a worker: a function of a module, with plain arguments.

    Parameters
    ----------
    config, member
        As :func:`run_member`.
    folder : str
        The truth folder, which the worker must see under the same name.
    stop_file : str
        If there is such a file, the member checkpoints and ends: a way to say so
        that reaches every worker that can do its work at all.

    Returns
    -------
    Outcome
    """
    parent, sign, next_look = multiprocessing.parent_process(), Path(stop_file), 0.0

    def stop():
        nonlocal next_look
        now = time.monotonic()
        if now < next_look:
            return False
        next_look = now + POLL
        return sign.exists() or (parent is not None and not parent.is_alive())

    if stop():
        return Outcome(member=member, status="stopped", reason="not begun")
    return run_one(config, member, Path(folder), stop)


class _Watch:
    """Tells how far all members are, from what each has noted beside its lock."""

    def __init__(self, config, folder, members, complete, progress):
        _, self._total = steps_of(config)
        self._folder, self._members = folder, members
        self.complete, self._progress = complete, progress
        self._next = 0.0

    def look(self):
        """Look at all members."""
        self._next = time.monotonic() + LOOK
        steps = sum(self._reached(member) for member in self._members)
        self._progress(steps, len(self.complete))

    def now_and_then(self):
        """Look at all members if the last look was a while ago."""
        if time.monotonic() >= self._next:
            self.look()

    def _reached(self, member):
        if member in self.complete:
            return self._total
        step = noted(member_lock(self._folder, member)).get("step")
        return reached_step(self._folder, member) if step is None else step


def _run_here(config, folder, members, executor, stop, watch):
    """Run members one after another in this process."""
    for member in members:
        if stop():
            yield Outcome(member=member, status="stopped", reason="not begun")
            continue
        yield run_one(config, member, folder, stop, lambda step: watch.now_and_then())


def _run_by(config, folder, members, executor, stop, watch):
    """Run members by an executor."""
    sign = folder / f".stop-{uuid.uuid4().hex}"
    pending: dict[Future, int] = {}
    stopping = False
    try:
        for member in members:
            call = executor.submit(work, config, member, str(folder), str(sign))
            pending[call] = member
        while pending:
            done, _ = wait(pending, timeout=POLL, return_when=FIRST_COMPLETED)
            if stop() and not stopping:
                # Nothing is cancelled: a cluster would drop what is running as well.
                stopping = True
                _raise_sign(sign)
            for call in done:
                yield _outcome(call, pending.pop(call))
            watch.now_and_then()
    finally:
        with suppress(OSError):
            sign.unlink(missing_ok=True)


def _raise_sign(sign):
    """Tell all workers to stop."""
    try:
        sign.touch()
    except OSError as error:
        log.warning(
            "workers cannot be told to stop (%s); interrupt again to end at once", error
        )


def _outcome(call, member):
    """Outcome of a member from the call that ran it."""
    try:
        error = call.exception()
    except CancelledError:
        error = LostWorker("the cluster dropped it")
    if error is None:
        return call.result()
    # Not the member's own: its worker was lost, or could not even begin.
    reason = str(error) if isinstance(error, EddyshedError) else repr(error)
    return Outcome(member=member, status="failed", reason=reason)


def ensemble_path(folder: Path) -> Path:
    """File that presents all members of a truth folder as one."""
    return folder / "ensemble.h5"


def write_ensemble(config: TruthConfig, folder: Path) -> list[int]:
    """Present the complete members as one file of virtual datasets.

    Parameters
    ----------
    config : TruthConfig
    folder : Path
        The truth folder.

    Returns
    -------
    list of int
        Which members are in it: those that are complete, so that all records are
        of the same length. If there is none, the file is left as it is; of a truth
        of one member no file is made.

    Raises
    ------
    RunFolderError
        If it cannot be written.
    """
    if config.ensemble.members == 1:
        return []
    # Whoever comes last must see what all others have finished.
    with holding(folder / ".ensemble.lock", wait=True):
        members = complete_members(config, folder)
        if not members:
            return []
        paths = [member_paths(folder, member)[0] for member in members]
        attributes = {
            "config_json": json.dumps(truth_table(config, members[0])),
            "members_asked": config.ensemble.members,
        }
        with (
            new_file(
                ensemble_path(folder),
                kind="truth ensemble",
                title=f"{config.name}: truth, all members",
                attributes=attributes,
            ) as file,
            open_file(paths[0], kind="truth") as model,
        ):
            add_scale(file, "member", np.array(members), long_name="ensemble member")
            _add_like(file, model, [path.name for path in paths])
    return members


def _add_like(file: h5py.File, model: h5py.File, sources: Sequence[str]) -> None:
    """Add what one member's index holds, with an axis of members in front."""
    scales = {name: item for name, item in model.items() if item.is_scale}
    for name, item in scales.items():
        add_scale(file, name, item[...], **_attributes(item))
    for name, item in model.items():
        if name in scales:
            continue
        dimensions = [axis[0].name.removeprefix("/") for axis in item.dims]
        if not item.is_virtual:
            values = item.asstr()[...].tolist() if item.dtype.kind == "O" else item[...]
            add_variable(file, name, dimensions, values, **_attributes(item))
            continue
        layout = h5py.VirtualLayout(shape=(len(sources), *item.shape), dtype=item.dtype)
        for row, source in enumerate(sources):
            layout[row] = h5py.VirtualSource(
                source, name, shape=item.shape, dtype=item.dtype
            )
        add_variable(file, name, ["member", *dimensions], layout, **_attributes(item))


def _attributes(item: h5py.Dataset) -> Mapping[str, object]:
    """Attributes of a variable without those that HDF5 keeps for itself."""
    own = ("CLASS", "NAME", "DIMENSION_LIST", "REFERENCE_LIST")
    return {key: value for key, value in item.attrs.items() if key not in own}
