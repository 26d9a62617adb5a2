"""The stages of a study: what each depends on, and what is run again.

A stage reads what lies upstream, writes its own files in one atomic move each
and stamps them with a fingerprint of the config sections that it depends on
and of the stages before it. A stage whose files carry the present fingerprint
is reused; any other is run.
"""

from __future__ import annotations

import logging
import platform
import shutil
from collections.abc import Callable, Iterator, Sequence
from contextlib import AbstractContextManager, ExitStack, contextmanager, nullcontext
from dataclasses import dataclass, field
from importlib.metadata import version
from pathlib import Path

from eddyshed.solver.config import Document, as_table, fingerprint
from eddyshed.solver.ensemble import Outcome, complete_members, ensemble_path
from eddyshed.solver.errors import DataError, EddyshedError, RunFolderError
from eddyshed.solver.files import open_file, replacing
from eddyshed.solver.identity import digest_of, truth_table
from eddyshed.solver.locks import holding
from eddyshed.solver.record import TruthRecord, open_records

from .settings import FileSettings, StudyConfig
from .store import read_fingerprint

log = logging.getLogger(__name__)

LIBRARIES = ("numpy", "scipy", "h5py", "pyfftw")  # what numbers and files depend on


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
    members : range, optional
        Which members of the truth this process is to run; all of the config if not
        given.
    ignore_disk_space : bool
        Go ahead even if the truth will not fit the disk.
    outcomes : list of Outcome
        How the members came out, once the truth was run.
    stop : callable
        Asked by long work whether it should checkpoint and end.
    gentle : callable
        Gives the context in which such work runs.
    """

    document: Document
    folder: Path
    overrides: tuple[str, ...] = ()
    quiet: bool = False
    members: range | None = None
    ignore_disk_space: bool = False
    outcomes: list[Outcome] = field(default_factory=list)
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

    @property
    def asked(self) -> range:
        """The members that this process is to run."""
        if self.members is not None:
            return self.members
        return range(self.config.ensemble.members)

    def records(self) -> list[TruthRecord]:
        """Records of all members of the truth, by number."""
        return open_records(self.truth_folder, range(self.config.ensemble.members))

    def path(self, name: str) -> Path:
        """File of the study."""
        return self.folder / name


@dataclass(frozen=True, slots=True, kw_only=True)
class Stage:
    """One stage.

    Attributes
    ----------
    name : str
        Its name, also that of the command if it has one of its own.
    sections : tuple of str
        Top-level config keys that it depends on by itself.
    after : tuple of str
        Stages that it reads from.
    outputs : tuple of str
        The files that it makes, the one that is written last at the end. Those of
        the truth are told by its members.
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


class Incomplete(EddyshedError, RuntimeError):
    """Some members of the truth did not come to their end."""


def fingerprint_of(study: Study, stages: dict[str, Stage], name: str) -> str:
    """Fingerprint that the files of a stage must carry to be reused."""
    stage = stages[name]
    table = as_table(study.config)
    if name == "truth":
        # A truth is told by its config alone: months of runs outlive a release.
        members = study.config.ensemble.members
        if members == 1:
            return fingerprint(truth_table(study.config))
        return fingerprint(
            {"members": members, "truth": truth_table(study.config, members - 1)}
        )
    return fingerprint(
        {
            "stage": name,
            "version": version("eddyshed"),
            "config": {key: table.get(key) for key in stage.sections},
            **_foreign(study.config, stage),
            "after": {
                other: fingerprint_of(study, stages, other) for other in stage.after
            },
        }
    )


def _foreign(config, stage):
    """Bytes that a stage reads besides the config: of the user's closures and files."""
    found = {}
    hooks = config.closures.hooks if "closures" in stage.sections else {}
    if hooks:
        found["hooks"] = [hook.table() for hook in hooks.values()]
    if "resolved" in stage.sections and isinstance(config.resolved, FileSettings):
        # The path of a file says nothing of what it holds now.
        found["vectors"] = digest_of(Path(config.resolved.path))
    return found


def is_fresh(study: Study, stages: dict[str, Stage], name: str) -> tuple[bool, str]:
    """Whether a stage can be reused, and why not if it cannot."""
    if name == "truth":
        return _is_truth_fresh(study)
    wanted = fingerprint_of(study, stages, name)
    for output in stages[name].outputs:
        path = study.path(output)
        if not path.exists():
            return False, f"{output} is missing"
        if read_fingerprint(path) != wanted:
            return False, f"{output} was made from other settings"
    return True, ""


def _is_truth_fresh(study):
    """Whether all members that were asked for are there, and shown as one."""
    done = complete_members(study.config, study.truth_folder, study.asked)
    missing = [member for member in study.asked if member not in done]
    if missing:
        return False, f"{members_text(missing)} not at the end"
    if study.config.ensemble.members > 1:
        path = ensemble_path(study.truth_folder)
        try:
            with open_file(path, kind="truth ensemble") as file:
                shown = set(file["member"][...].tolist())
        except DataError:
            return False, f"truth/{path.name} is missing"
        if not shown.issuperset(done):
            return False, f"truth/{path.name} does not show all members"
    return True, ""


def members_text(members: Sequence[int]) -> str:
    """Members in words, with their verb, such as ``members 0, 1 and 4 are``."""
    if len(members) == 1:
        return f"member {members[0]} is"
    if len(members) > 2 and members[-1] - members[0] == len(members) - 1:
        return f"members {members[0]} to {members[-1]} are"
    listed = [str(member) for member in members[:12]]
    rest = len(members) - len(listed)
    last = f"{rest} more" if rest else listed.pop()
    return f"members {', '.join(listed)} and {last} are"


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
    with ExitStack() as stack:
        lock = None
        for needed in _upstream(stages, name):
            if needed != "truth" and lock is None:
                # Members have a lock each; all else has one writer.
                lock = stack.enter_context(holding(study.path(".lock")))
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
    """Make the run folder of a study, and note there what is done to it.

    Raises
    ------
    RunFolderError
        If the folder cannot be made or written.
    """
    lines = [f"# with --set {override}\n" for override in study.overrides]
    text = "".join([*lines, study.document.text])
    path = study.path("config.toml")
    if not path.is_file() or path.read_bytes() != text.encode():
        with replacing(path) as temporary:
            temporary.write_text(text, encoding="utf-8")
    try:
        handler = logging.FileHandler(study.path("study.log"), encoding="utf-8")
    except OSError as error:
        message = (
            f"{study.path('study.log')}: cannot be written ({error.strerror}); unlock "
            "the folder, or choose another place with --runs"
        )
        raise RunFolderError(message) from error
    handler.setFormatter(
        logging.Formatter("%(asctime)s %(levelname)s %(name)s: %(message)s")
    )
    root = logging.getLogger("eddyshed")
    root.addHandler(handler)
    try:
        log.info(
            "eddyshed %s, Python %s, %s, config %s",
            version("eddyshed"),
            platform.python_version(),
            ", ".join(f"{name} {version(name)}" for name in LIBRARIES),
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


def available_memory() -> int | None:
    """Memory that new processes can have without swapping [bytes], if known."""
    try:
        for line in Path("/proc/meminfo").read_text(encoding="ascii").splitlines():
            if line.startswith("MemAvailable:"):
                return 1024 * int(line.split()[1])
    except (OSError, ValueError):
        pass
    return None
