"""The simulated series of a reduced model, on disk."""

from __future__ import annotations

import json
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

from .simulate import Trajectory

KIND = "simulated"


def save(
    path: Path,
    stamp: str,
    title: str,
    series: np.ndarray,
    interval: float,
    trajectory: Trajectory,
    cost: float,
) -> None:
    """Write the series of a reduced model.

    Parameters
    ----------
    path : Path
        The file.
    stamp : str
        Fingerprint of what it was made from.
    title : str
        CF title.
    series : ndarray, shape (member, time, mode)
        Resolved coordinates after the spin-up.
    interval : float
        Sampling interval [s].
    trajectory : Trajectory
        The whole run, for the members that were lost.
    cost : float
        Processor time over model time, per member.
    """
    members, n_time, n_modes = series.shape
    attributes = {
        "fingerprint": stamp,
        "interval": interval,
        "cost": cost,
        "lost": json.dumps([list(pair) for pair in trajectory.lost]),
    }
    with new_file(path, kind=KIND, title=title, attributes=attributes) as file:
        add_scale(file, "member", np.arange(members), long_name="member")
        add_time(file, "time", trajectory.times[-n_time:])
        add_scale(file, "mode", np.arange(n_modes), long_name="resolved mode")
        add_variable(
            file,
            "x",
            ("member", "time", "mode"),
            series,
            long_name="resolved coordinates",
        )


def load(
    path: Path, stamp: str
) -> tuple[np.ndarray, tuple[tuple[int, float], ...], float, float] | None:
    """Read the series back: series, lost members, cost and interval [s].

    Returns
    -------
    tuple or None
        None if the file is missing, damaged, or made from something else.
    """
    try:
        with open_file(path, kind=KIND) as file:
            if file.attrs["fingerprint"] != stamp:
                return None
            lost = tuple((int(k), float(t)) for k, t in json.loads(file.attrs["lost"]))
            return (
                file["x"][:],
                lost,
                float(file.attrs["cost"]),
                float(file.attrs["interval"]),
            )
    except DataError:
        return None
