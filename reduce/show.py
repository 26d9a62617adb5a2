"""What a file or run folder of ours holds, in words."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np

from eddyshed.solver.errors import DataError
from eddyshed.solver.files import open_file
from eddyshed.solver.quantities import format_quantity

from .diffusion import DiffusionModel
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
        if facts["kind"] in ("truth", "truth segment"):
            facts.update(_truth(file))
        else:
            facts["parts"] = ", ".join(file)
        return facts


def _truth(file):
    """Facts of a truth file."""
    config = json.loads(file.attrs["config_json"])
    step, total = config["time"]["step"], int(file.attrs["steps_total"])
    facts = {
        "member": str(file.attrs["member"]),
        "ocean": str(config["ocean"]["kind"]),
        "grid": " x ".join(str(n) for n in config["grid"]["points"]),
        "box": " x ".join(format_quantity(v, "m") for v in config["grid"]["lengths"]),
    }
    if "steps_done" in file.attrs:
        done = int(file.attrs["steps_done"])
        facts["reached"] = (
            f"{format_quantity(done * step, 's')} of "
            f"{format_quantity(total * step, 's')}, {100 * done / total:.0f} %"
            + (", complete" if file.attrs["complete"] else "")
        )
    for name in ("time", "resolved_time", "fields_time"):
        if name in file and len(file[name]):
            times = file[name]
            words = f"{len(times)} records"
            if len(times) > 1:
                words += f", every {format_quantity(times[1] - times[0], 's')}"
            facts[name.removesuffix("time").rstrip("_") or "state"] = words
    return facts


def _folder(path):
    """Facts of a run folder."""
    if not (path / "config.toml").is_file():
        message = f"{path}: not a run folder of ours (it holds no config.toml)"
        raise DataError(message)
    facts = {"run folder": path.name}
    for file in sorted((path / "truth").glob("member-*.h5")):
        facts[f"truth/{file.name}"] = describe(file).get("reached", "unknown")
    for name in (
        "split.h5",
        "closures.h5",
        "audit.json",
        "benchmark.json",
        "report.html",
    ):
        facts[name] = "there" if (path / name).is_file() else "not there yet"
    return facts
