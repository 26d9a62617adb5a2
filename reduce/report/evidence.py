"""What a report is written from: the files of a study, read once."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from eddyshed.solver.record import TruthRecord

from ..flow.parts import Flow, read_flow
from ..measured import measured_rows
from ..noise.fit import NoiseFit
from ..preflight import model_of
from ..scores import Summary
from ..simulated import load
from ..split import Split
from ..stages import read_noise, read_split, simulation_stamp
from ..statistics.estimate import Estimate
from ..store import read_json
from ..study import Study


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Evidence:
    """The results of a study.

    Attributes
    ----------
    study : Study
        The study.
    ocean : ocean
        The model that made the truth, in the inner product of the reduction.
    records : list of TruthRecord
        The members of the truth.
    flow : Flow or None
        What it did; None of a user's own model, which has no space.
    split : Split
        The truth divided.
    noise : NoiseFit
        The fitted noise.
    audit : dict
        As `eddyshed.reduce.audit.Audit`, field by field.
    truth : Summary
        Statistics of the resolved modes of the truth.
    truth_cost : float
        Its processor time over model time.
    closures : list of dict
        As the benchmark wrote them.
    measured : list
        Rows of what is measured, as `eddyshed.reduce.measured.measured_rows`.
    lags : ndarray, shape (lag,)
        Lags of the correlation functions [s].
    correlations : dict of str to ndarray, shape (lag, mode)
        Of the truth, and of each closure that has scores.
    """

    study: Study
    ocean: Any
    records: list[TruthRecord]
    flow: Flow | None
    split: Split
    noise: NoiseFit
    audit: dict[str, Any]
    truth: Summary
    truth_cost: float
    closures: list[dict[str, Any]]
    measured: list[list[Any]]
    lags: np.ndarray
    correlations: dict[str, np.ndarray]

    @property
    def length(self) -> float:
        """Length of the truth, all members together [s]."""
        return self.split.length

    @property
    def scored(self) -> list[tuple[int, dict[str, Any]]]:
        """Closures that have scores, each with its place among all."""
        return [
            (place, entry)
            for place, entry in enumerate(self.closures)
            if entry["summary"] is not None
        ]

    @property
    def failed(self) -> list[dict[str, Any]]:
        """Closures that have none."""
        return [entry for entry in self.closures if entry["summary"] is None]

    def simulated(self, name: str) -> np.ndarray | None:
        """Series of a closure less the mean of the truth; None if not on disk.

        Returns
        -------
        ndarray, shape (member, time, mode), or None
        """
        path = self.study.path(f"simulated/{name}.h5")
        found = load(path, simulation_stamp(self.study, name))
        if found is None:
            return None
        return found.series - self.split.resolved_mean


def gather(study: Study) -> Evidence:
    """Read the results of a study.

    Raises
    ------
    DataError
        If a file is missing or damaged.
    """
    benchmark = read_json(study.path("benchmark.json"))
    found = dict(benchmark["correlation"])
    lags = np.array(found.pop("lags"))
    ocean = model_of(study.config)
    return Evidence(
        study=study,
        ocean=ocean,
        records=study.records(),
        flow=None if ocean.waves is None else read_flow(study.path("flow.h5")),
        split=read_split(study),
        noise=read_noise(study),
        audit=read_json(study.path("audit.json")),
        truth=summary_of(benchmark["truth"]["summary"]),
        truth_cost=benchmark["truth"]["cost"],
        closures=benchmark["closures"],
        measured=measured_rows(benchmark),
        lags=lags,
        correlations={name: np.array(values) for name, values in found.items()},
    )


def estimate_of(table: dict[str, list]) -> Estimate:
    """Estimate from JSON, where an infinite error became null."""
    value = [np.nan if x is None else x for x in table["value"]]
    error = [np.inf if x is None else x for x in table["error"]]
    return Estimate(value, error)


def summary_of(table: dict[str, dict[str, list]]) -> Summary:
    """Summary from JSON."""
    return Summary(**{name: estimate_of(part) for name, part in table.items()})
