"""What an audit looks at: the divided truth, what was fitted, and samples of it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from eddyshed.solver.errors import DataError
from eddyshed.solver.record import TruthRecord

from ..contract import Model
from ..noise.fit import NoiseFit
from ..operators import Operators
from ..split import Split
from ..statistics.correlation import correlation_scales
from ..statistics.series import checked_series
from .batches import FEWEST, Batches
from .memory import LagFindings, lag_findings
from .normality import detrended
from .perturbation import numerical_abscissa
from .sizes import Terms, terms_of

SPREAD = 8000  # records, over all the truth, that pointwise statistics are taken from
STRETCHED = 2000  # records, in stretches of consecutive ones, for terms of the equation
ABSCISSAS = 400  # states at which the fast operator is looked at
WHERE = "audit"


@dataclass(frozen=True, kw_only=True, eq=False)
class Material:
    """A divided truth and what was fitted to it.

    Attributes
    ----------
    model : Model
        The equation.
    split : Split
    operators : Operators
    noise : NoiseFit
    coupling : ndarray, shape (member, time, nx)
        What the unresolved modes do to the resolved ones [state unit s-1].
    y : ndarray, shape (member, time, ny)
        Unresolved coordinates.
    records : sequence of TruthRecord
        Where full states are read from.
    models : dict of str to model
        Reduced models of the study, by the names of their closures.
    """

    model: Model
    split: Split
    operators: Operators
    noise: NoiseFit
    coupling: np.ndarray
    y: np.ndarray
    records: Sequence[TruthRecord]
    models: Mapping[str, object]

    @property
    def labels(self) -> tuple[str, ...]:
        """Names of the resolved modes."""
        return self.split.resolved.labels

    @property
    def fast_labels(self) -> tuple[str, ...]:
        """Names of the unresolved modes."""
        return self.split.unresolved.labels

    @cached_property
    def x(self) -> np.ndarray:
        """Resolved coordinates that can be used, or a DataError that names one."""
        return checked_series(self.split.x, "resolved modes", self.labels)

    @cached_property
    def felt(self) -> np.ndarray:
        """The coupling, if it can be used."""
        return checked_series(self.coupling, "coupling", self.labels)

    @cached_property
    def unexplained(self) -> np.ndarray:
        """The coupling less its part linear in x."""
        left = detrended(self.felt, self.x)
        # Of a coupling that is a function of x, round-off is left.
        if np.any(left.std(axis=(0, 1)) < 1e-10 * self.felt.std(axis=(0, 1))):
            mode = int(np.argmin(left.std(axis=(0, 1)) / self.felt.std(axis=(0, 1))))
            message = (
                f"coupling of mode {self.labels[mode]} is a linear function of the "
                "resolved modes, so there is no noise in it"
            )
            raise DataError(message)
        return left

    @cached_property
    def fast(self) -> np.ndarray:
        """Unresolved coordinates that can be used, or a DataError that says why not."""
        if self.y.shape[2] == 0:
            message = "there are no unresolved modes, so nothing can be said of them"
            raise DataError(message)
        return checked_series(self.y, "unresolved modes", self.fast_labels)

    @cached_property
    def lags(self) -> LagFindings:
        """Correlations of the leading unresolved units."""
        partners = self.split.unresolved.partners
        return lag_findings(self.fast, self.split.step, partners, "unresolved modes")

    @cached_property
    def fast_scales(self):
        """Correlation times of the unresolved modes."""
        return correlation_scales(self.fast, self.split.step)

    @cached_property
    def batches(self) -> Batches:
        """Cut by the slowest of all modes, resolved or not."""
        scales = correlation_scales(self.x, self.split.step)
        time = max(scales.time.value.max(), scales.squared.value.max())
        if self.y.shape[2]:
            # The slowest of many is the slowest by chance; the energy knows.
            weights = self.fast.var(axis=(0, 1))
            fast = self.fast_scales
            time = max(time, *(weights @ t.value / weights.sum() for t in
                               (fast.time, fast.squared)))  # fmt: skip
        return Batches.by(float(time), self.split.length)

    @cached_property
    def spread(self) -> tuple[np.ndarray, np.ndarray]:
        """X and y at records spread over the truth: (time, nx), (time, ny)."""
        flat_x = self.x.reshape(-1, self.x.shape[2])
        flat_y = self.fast.reshape(len(flat_x), -1)
        every = -(-len(flat_x) // SPREAD)
        return flat_x[::every], flat_y[::every]

    @property
    def stretch_count(self) -> int:
        """Number of stretches: one in each batch."""
        return max(FEWEST, self.batches.number)

    @cached_property
    def stretches(self) -> tuple[np.ndarray, np.ndarray]:
        """Members and records of the stretches, one after the other."""
        members, times, _ = self.split.x.shape
        number = self.stretch_count
        # A stretch stays within one member, in the middle of its batch.
        long = max(8, min(STRETCHED // number, members * times // number, times))
        edges = np.linspace(0, members * times, number + 1)
        middles = (edges[:-1] + edges[1:]) / 2
        member = np.minimum(middles // times, members - 1).astype(int)
        start = np.clip((middles - member * times - long / 2).astype(int), 0, None)
        start = np.minimum(start, times - long)
        record = start[:, None] + np.arange(long)
        return np.repeat(member, long), record.ravel()

    @cached_property
    def abscissa(self) -> np.ndarray:
        """Numerical abscissa of the fast operator at every so many of `spread`."""
        x, rate = self.spread[0], self.noise.process.rate
        return numerical_abscissa(x[:: -(-len(x) // ABSCISSAS)], self.operators, rate)

    @cached_property
    def terms(self) -> Terms:
        """Terms of the equation along the stretches."""
        member, record = self.stretches
        long = len(member) // self.stretch_count
        states = np.concatenate(
            [
                self.records[member[k]].read(int(record[k]), int(record[k]) + long)
                for k in range(0, len(member), long)
            ]
        )
        _ = self.fast
        return terms_of(self.model, self.split, self.operators, states, self.stretches)
