"""What makes a truth run the run it is: its config, and the files named there."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Mapping
from pathlib import Path

from .config import as_table, differing_keys
from .errors import DataError
from .initial import file_read
from .settings import TruthConfig
from .topography import HeightFile

TRUTH_SECTIONS = (
    "seed",
    "grid",
    "ocean",
    "forcing",
    "stirring",
    "initial",
    "time",
    "output",
)


def truth_table(config: TruthConfig, member: int = 0) -> dict[str, object]:
    """Return all that a member depends on, in SI.

    Parameters
    ----------
    config : TruthConfig
    member : int
        Which one. How many there are, and where they run, is no part of it; the
        perturbation is one of every member but the first.

    Returns
    -------
    dict
        Sections of the config; under ``files`` the SHA-256 of the contents of the
        files that they name, if they name any.

    Raises
    ------
    DataError
        If such a file cannot be read.
    """
    table = as_table(config)
    found = {key: table[key] for key in TRUTH_SECTIONS if key in table}
    if member > 0 and config.ensemble.perturbation is not None:
        found["perturbation"] = table["ensemble"]["perturbation"]
    files = dict(_contents(config))
    return found | ({"files": files} if files else {})


def differences(made: Mapping, now: Mapping) -> list[str]:
    """What has changed between two results of :func:`truth_table`, in words.

    Parameters
    ----------
    made, now : mapping
        Of the run on disk, and of the config.

    Returns
    -------
    list of str
        One entry for each key and each file. A duration that moved is none: a run
        can always go on.
    """
    old_files, new_files = made.get("files", {}), now.get("files", {})
    now = {key: value for key, value in now.items() if key != "files"}
    made = {key: value for key, value in made.items() if key != "files"}
    now["time"] = {**now["time"], "duration": made["time"]["duration"]}
    changed = [
        f"{path} has other contents now"
        for path, digest in new_files.items()
        if old_files.get(path, digest) != digest
    ]
    return [*differing_keys(made, now), *changed]


def _contents(config: TruthConfig) -> Iterator[tuple[str, str]]:
    """Name, as the config gives it, and SHA-256 of each file that a run reads."""
    shapes = getattr(config.ocean, "topography", {})
    for shape in shapes.values():
        if isinstance(shape, HeightFile):
            yield shape.path, digest_of(Path(shape.path))
    read = file_read(config.initial)
    if read is not None:
        yield config.initial.path, digest_of(read)


def digest_of(path: Path) -> str:
    """SHA-256 of a file.

    Raises
    ------
    DataError
        If it cannot be read.
    """
    try:
        with path.open("rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()
    except OSError as error:
        message = f"{path}: cannot be read ({error.strerror})"
        raise DataError(message) from error
