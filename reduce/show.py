"""What a file or run folder of ours holds, in words."""

from __future__ import annotations

import json
from collections import Counter
from contextlib import suppress
from pathlib import Path

import numpy as np

from eddyshed.solver.config import parse_config
from eddyshed.solver.errors import ConfigError, DataError
from eddyshed.solver.files import open_file
from eddyshed.solver.locks import is_held, member_lock, noted
from eddyshed.solver.quantities import format_quantity
from eddyshed.solver.segments import member_paths, reached_step

from .diffusion import DiffusionModel
from .settings import StudyConfig
from .split import Split
from .store import read_json, read_one
from .written import written


def equation(path: Path, name: str) -> str:
    """Write out the reduced equation of a closure without memory.

    Parameters
    ----------
    path : Path
        A run folder.
    name : str
        The closure.

    Returns
    -------
    str

    Raises
    ------
    DataError
        If it is no run folder, or has no such equation.
    """
    closures = path / "closures.h5"
    if not closures.is_file():
        message = (
            f"{path}: holds no closures.h5; give a run folder in which eddyshed reduce "
            "has been run"
        )
        raise DataError(message)
    with open_file(closures, kind="closures") as file:
        kind = DiffusionModel.__name__
        known = [part for part in file if file[part].attrs.get("holds") == kind]
    if name not in known:
        message = (
            f"{closures}: has no equation without unresolved modes named {name!r}; it "
            f"has {', '.join(known) or 'none: put white among [closures] use'}"
        )
        raise DataError(message)
    split = read_one(path / "split.h5", "split", "split", Split)
    model = read_one(closures, "closures", name, DiffusionModel)
    return written(model, np.sqrt(split.resolved.variance))


def describe(path: Path) -> dict[str, str]:
    """Describe a file or run folder.

    Parameters
    ----------
    path : Path
        A run folder, or a file in one.

    Returns
    -------
    dict of str to str
        Facts by name.

    Raises
    ------
    DataError
        If it is not ours, or damaged.
    """
    if path.is_dir():
        return _folder(path)
    if path.suffix == ".json":
        content = read_json(path)
        if "fingerprint" not in content:
            message = f"{path}: a JSON file, but not one that eddyshed wrote"
            raise DataError(message)
        return {
            "file": path.name,
            "holds": ", ".join(key for key in content if key != "fingerprint"),
            "fingerprint": content["fingerprint"],
        }
    with open_file(path) as file:
        facts = {
            "file": path.name,
            "kind": str(file.attrs["eddyshed_kind"]),
            "title": str(file.attrs["title"]),
            "made by": str(file.attrs["source"]),
        }
        if facts["kind"] in ("truth", "truth segment", "truth ensemble"):
            facts.update(_truth(file))
        else:
            facts["parts"] = ", ".join(file)
        if facts["kind"] == "flow":
            facts["means over"] = _sampling(file["sampling"].attrs)
        return facts


def _truth(file):
    """Facts of a truth file."""
    config = json.loads(file.attrs["config_json"])
    step = config["time"]["step"]
    facts = {"member": str(file.attrs["member"])} if "member" in file.attrs else {}
    if "member" in file:
        members = file["member"][...].tolist()
        facts["members"] = ", ".join(map(str, members))
        facts["members asked for"] = str(file.attrs["members_asked"])
    facts |= {
        "ocean": str(config["ocean"]["kind"]),
    }
    if "grid" in config:
        grid = config["grid"]
        facts["grid"] = " x ".join(map(str, grid["points"]))
        facts["box"] = " x ".join(format_quantity(v, "m") for v in grid["lengths"])
    if "steps_done" in file.attrs:
        done, total = int(file.attrs["steps_done"]), int(file.attrs["steps_total"])
        facts["reached"] = _reached(done, total, step)
        if file.attrs["complete"]:
            facts["reached"] += ", complete"
    for name in ("time", "resolved_time", "fields_time"):
        if name in file and len(file[name]):
            times = file[name]
            words = f"{len(times)} records"
            if len(times) > 1:
                words += f", every {format_quantity(times[1] - times[0], 's')}"
            facts[name.removesuffix("time").rstrip("_") or "state"] = words
    return facts


def _sampling(found):
    """What the means of a flow come from."""
    return (
        f"{found['recorded']} states of each of {found['members']} member(s); spectra, "
        f"fluxes and gyres over {found['sampled']}, one every "
        f"{format_quantity(float(found['interval']), 's')}"
    )


def _folder(path):
    """Facts of a run folder."""
    if not (path / "config.toml").is_file():
        message = f"{path}: not a run folder of ours (it holds no config.toml)"
        raise DataError(message)
    facts = {"run folder": path.name}
    truth = path / "truth"
    names = (
        found.stem.removeprefix(".").removeprefix("member-")
        for pattern in ("member-*.h5", ".member-*.lock")
        for found in truth.glob(pattern)
    )
    there = {int(name) for name in names if name.isdecimal()}
    asked = range(_members_asked(path / "config.toml"))
    states = {m: _member(truth, m) for m in sorted(there.union(asked))}
    if len(states) > 1:
        counts = Counter(kind for kind, _ in states.values())
        facts["members"] = f"{len(states)}: " + ", ".join(
            f"{count} {kind}" for kind, count in counts.items()
        )
    for member, (kind, words) in states.items():
        facts[f"member {member}"] = f"{kind}{words}"
    for name in (
        *(["truth/ensemble.h5"] if len(states) > 1 else []),
        "flow.h5",
        "split.h5",
        "closures.h5",
        "audit.json",
        "benchmark.json",
        "report.html",
    ):
        facts[name] = "there" if (path / name).is_file() else "not there yet"
    return facts


def _members_asked(path):
    """Members in the config that a run folder keeps; one if it cannot be read."""
    text = path.read_text(encoding="utf-8")
    mark = "# with --set "
    overrides = [
        line.removeprefix(mark) for line in text.splitlines() if line.startswith(mark)
    ]
    try:
        config = parse_config(text, StudyConfig, str(path), overrides).config
    except ConfigError:  # of another version: what is there is told all the same
        return 1
    return config.ensemble.members


def _member(truth, member):
    """State of a member in a word or two, and the rest of the sentence."""
    lock = member_lock(truth, member)
    note = noted(lock)
    index, segments = member_paths(truth, member)
    step, done = note.get("step"), reached_step(truth, member)
    words = ""
    if done:
        with open_file(max(segments.glob("segment-*.h5"))) as file:
            total = int(file.attrs["steps_total"])
            length = json.loads(file.attrs["config_json"])["time"]["step"]
        with suppress(DataError), open_file(index, kind="truth") as file:
            total = int(file.attrs["steps_total"])  # it may have been made longer
        words = f", last checkpoint at {_reached(done, total, length)}"
        if done == total and not is_held(lock):
            return "complete", f", {format_quantity(total * length, 's')}"
    if is_held(lock):
        return "at work", words + (f", now at step {step}" if step else "")
    if "failed" in note:
        return "failed", f"{words}: {note['failed']}"
    return ("stopped", words) if done else ("not begun", "")


def _reached(done, total, length):
    """How far a run is, in words."""
    return (
        f"{format_quantity(done * length, 's')} of "
        f"{format_quantity(total * length, 's')}, {100 * done / total:.0f} %"
    )
