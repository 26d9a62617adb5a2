"""The stages of a study: what each depends on, and what is run again.

A stage reads what lies upstream, writes its own files in one atomic move each
and stamps them with a fingerprint of the config sections that it depends on
and of the stages before it. A stage whose files carry the present fingerprint
is reused; any other is run.
"""

from __future__ import annotations

import fcntl
import hashlib
import logging
import platform
import shutil
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, contextmanager, nullcontext
from dataclasses import dataclass, field
from importlib.metadata import version
from pathlib import Path

from eddyshed.solver.config import Document, as_table, fingerprint
from eddyshed.solver.errors import DataError, RunFolderError
from eddyshed.solver.files import replacing
from eddyshed.solver.record import TruthRecord, open_record
from eddyshed.solver.segments import member_paths
from eddyshed.solver.truth import truth_table

from .settings import FileSettings, StudyConfig
from .store import read_fingerprint

log = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True, kw_only=True)
class Study:
    """A config and the run folder that belongs to it.

    Attributes
    ----------
    document : Document
        The config as read.
    folder : Path
        ``<runs>/<name>``.
    overrides : tuple of str
        Keys that the command line overrode; noted in the folder's config.
    quiet : bool
        No progress.
    stop : callable
        Asked by long work whether it should checkpoint and end.
    gentle : callable
        Gives the context in which such work runs.
    """

    document: Document
    folder: Path
    overrides: tuple[str, ...] = ()
    quiet: bool = False
    stop: Callable[[], bool] = field(default=lambda: False)
    gentle: Callable[[], AbstractContextManager] = field(default=nullcontext)

    @property
    def config(self) -> StudyConfig:
        """The config."""
        return self.document.config

    @property
    def truth_folder(self) -> Path:
        """Where the truth runs are."""
        return self.folder / "truth"

    def records(self) -> list[TruthRecord]:
        """Records of the truth runs, one for each member."""
        return [open_record(member_paths(self.truth_folder, 0)[0])]

    def path(self, name: str) -> Path:
        """File of the study."""
        return self.folder / name


@dataclass(frozen=True, slots=True, kw_only=True)
class Stage:
    """One stage.

    Attributes
    ----------
    name : str
        Its name, also that of the command.
    sections : tuple of str
        Top-level config keys that it depends on by itself.
    after : tuple of str
        Stages that it reads from.
    outputs : tuple of str
        The files that it makes, the one that is written last at the end.
    run : callable
        ``run(study, fingerprint)``.
    """

    name: str
    sections: tuple[str, ...]
    after: tuple[str, ...]
    outputs: tuple[str, ...]
    run: Callable[[Study, str], None]


class Interrupted(Exception):
    """Work was asked to stop, and stopped with a checkpoint."""


def fingerprint_of(study: Study, stages: dict[str, Stage], name: str) -> str:
    """Fingerprint that the files of a stage must carry to be reused."""
    stage = stages[name]
    table = as_table(study.config)
    if name == "truth":
        # A truth is told by its config alone: months of runs outlive a release.
        return fingerprint(truth_table(study.config))
    inputs = [study.config.resolved] if "resolved" in stage.sections else []
    return fingerprint(
        {
            "stage": name,
            "version": version("eddyshed"),
            "config": {key: table.get(key) for key in stage.sections},
            # The path of a file says nothing of what it holds now.
            **{
                f"contents of {each.path}": _digest(Path(each.path))
                for each in inputs
                if isinstance(each, FileSettings)
            },
            "after": {
                other: fingerprint_of(study, stages, other) for other in stage.after
            },
        }
    )


def _digest(path):
    """SHA-256 of a file; empty if there is none to read."""
    try:
        with path.open("rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()
    except OSError:
        return ""


def is_fresh(study: Study, stages: dict[str, Stage], name: str) -> tuple[bool, str]:
    """Whether a stage can be reused, and why not if it cannot."""
    wanted = fingerprint_of(study, stages, name)
    for output in stages[name].outputs:
        path = study.path(output)
        if not path.exists():
            return False, f"{output} is missing"
        if name == "truth":
            try:
                record = open_record(path)
            except DataError as error:
                return False, str(error)
            if not record.complete or fingerprint(record.config) != wanted:
                return False, "the run is not at its end"
        elif read_fingerprint(path) != wanted:
            return False, f"{output} was made from other settings"
    return True, ""


def bring_up_to_date(study: Study, stages: dict[str, Stage], name: str) -> None:
    """Run a stage and all that it needs, as far as they are missing or stale.

    Parameters
    ----------
    study : Study
        The study.
    stages : dict of Stage
        All stages.
    name : str
        The stage that is wanted.

    Raises
    ------
    Interrupted
        If the truth run was asked to stop.
    """
    for needed in _upstream(stages, name):
        fresh, why = is_fresh(study, stages, needed)
        if fresh:
            log.info("%s: up to date, reused", needed)
            continue
        log.info("%s: running, because %s", needed, why)
        stages[needed].run(study, fingerprint_of(study, stages, needed))


def _upstream(stages, name):
    """Names of a stage and of all before it, each once, in the order of running."""
    needed = [part for other in stages[name].after for part in _upstream(stages, other)]
    return list(dict.fromkeys([*needed, name]))


@contextmanager
def opened(study: Study) -> Iterator[None]:
    """Hold the run folder of a study: one process at a time writes there.

    Raises
    ------
    RunFolderError
        If the folder cannot be made or written, or another process holds it.
    """
    try:
        study.folder.mkdir(parents=True, exist_ok=True)
        lock = (study.folder / ".lock").open("w")
    except OSError as error:
        message = (
            f"{study.folder}: cannot be written ({error.strerror}); choose another "
            "place with --runs"
        )
        raise RunFolderError(message) from error
    with lock:
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError as error:
            message = (
                f"{study.folder}: another process is at work there; wait for it, or "
                "give this study another name"
            )
            raise RunFolderError(message) from error
        with replacing(study.path("config.toml")) as temporary:
            lines = [f"# with --set {override}\n" for override in study.overrides]
            text = "".join([*lines, study.document.text])
            temporary.write_text(text, encoding="utf-8")
        handler = logging.FileHandler(study.path("study.log"), encoding="utf-8")
        handler.setFormatter(
            logging.Formatter("%(asctime)s %(levelname)s %(name)s: %(message)s")
        )
        root = logging.getLogger("eddyshed")
        root.addHandler(handler)
        try:
            log.info(
                "eddyshed %s, Python %s, config %s",
                version("eddyshed"),
                platform.python_version(),
                study.document.source,
            )
            yield
        finally:
            root.removeHandler(handler)
            handler.close()


def free_bytes(folder: Path) -> int:
    """Free space on the disk that a folder lies, or will lie, on."""
    while not folder.exists():
        folder = folder.parent
    return shutil.disk_usage(folder).free
