"""The simulated series of a reduced model, in memory and on disk."""

from __future__ import annotations

import json
from dataclasses import asdict, dataclass
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

from .step_check import StepCheck

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
    noisy : bool
        Whether anything random drives the model.
    step_check : StepCheck or None
        What half the step changes; None where there are no statistics to compare.
    """

    series: np.ndarray
    start: float
    step: float
    lost: tuple[tuple[int, float], ...]
    cost: float
    noisy: bool = True
    step_check: StepCheck | None = None


def save(
    path: Path, stamp: str, title: str, run: Simulated, unit: str = "m s-1"
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
    run : Simulated
        What to write.
    unit : str
        Of resolved coordinates.
    """
    members, n_time, n_modes = run.series.shape
    attributes = {
        "fingerprint": stamp,
        "step": run.step,
        "cost": run.cost,
        "noisy": int(run.noisy),
        "step_check": json.dumps(run.step_check and asdict(run.step_check)),
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
            units=unit,
            long_name="resolved coordinates",
        )


def _check_of(table: dict | None) -> StepCheck | None:
    return None if table is None else StepCheck(**table)


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
                noisy=bool(file.attrs["noisy"]),
                step_check=_check_of(json.loads(file.attrs["step_check"])),
            )
    except (DataError, OSError, KeyError, RuntimeError):  # what h5py may raise
        return None
