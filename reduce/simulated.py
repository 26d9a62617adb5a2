"""The simulated series of a reduced model, in memory and on disk."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from eddyshed.solver.errors import DataError
from eddyshed.solver.files import (
    add_scale,
    add_time,
    add_variable,
    new_file,
    open_file,
)

KIND = "simulated"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Simulated:
    """Series of a reduced model after its spin-up.

    Attributes
    ----------
    series : ndarray, shape (member, time, mode)
        Resolved coordinates, not centred; NaN once a member was lost.
    start : float
        Model time of the first record [s].
    step : float
        Sampling interval [s].
    lost : tuple of (int, float)
        Members that blew up, and when [s].
    cost : float
        Processor time over model time, per member.
    """

    series: np.ndarray
    start: float
    step: float
    lost: tuple[tuple[int, float], ...]
    cost: float


def save(path: Path, stamp: str, title: str, run: Simulated) -> None:
    """Write the series of a reduced model.

    Parameters
    ----------
    path : Path
        The file.
    stamp : str
        Fingerprint of what it was made from.
    title : str
        CF title.
    run : Simulated
        What to write.
    """
    members, n_time, n_modes = run.series.shape
    attributes = {
        "fingerprint": stamp,
        "step": run.step,
        "cost": run.cost,
        "lost": json.dumps([list(pair) for pair in run.lost]),
    }
    with new_file(path, kind=KIND, title=title, attributes=attributes) as file:
        add_scale(file, "member", np.arange(members), long_name="member")
        add_time(file, "time", run.start + run.step * np.arange(n_time))
        add_scale(file, "mode", np.arange(n_modes), long_name="resolved mode")
        add_variable(
            file,
            "x",
            ("member", "time", "mode"),
            run.series,
            units="m s-1",
            long_name="resolved coordinates",
        )


def load(path: Path, stamp: str) -> Simulated | None:
    """Read the series back.

    Returns
    -------
    Simulated or None
        None if the file is missing, damaged, or made from something else.
    """
    try:
        with open_file(path, kind=KIND) as file:
            if file.attrs["fingerprint"] != stamp:
                return None
            return Simulated(
                series=file["x"][:],
                start=float(file["time"][0]),
                step=float(file.attrs["step"]),
                lost=tuple(
                    (int(k), float(t)) for k, t in json.loads(file.attrs["lost"])
                ),
                cost=float(file.attrs["cost"]),
            )
    except (DataError, OSError, KeyError, RuntimeError):  # what h5py may raise
        return None
