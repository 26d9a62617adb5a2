"""Forcing that varies in time, as the reduction sees it.

A model whose F depends on time declares how, by a member `variations`:
pairs of a function of time (seasonal, a ramp or a step; see
:mod:`eddyshed.solver.time_functions`) and a pattern, such that
``F(t) - sum of function(t) * pattern`` does not depend on t. The reduction
takes the time mean of F over the truth into its constants, and here is the
rest: for each pattern its resolved and its unresolved part, and the function
of time, less its mean over the truth.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from eddyshed.solver.errors import ContractError
from eddyshed.solver.time_functions import Ramp, Seasonal, Step, TimeFunction

FUNCTIONS: dict[str, type[TimeFunction]] = {
    "seasonal": Seasonal,
    "ramp": Ramp,
    "step": Step,
}
# F less its declared variations, relative to F: sums of a few patterns.
ROUND_OFF = 1e-10


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Variation:
    """Departures of the forcing from its mean over the truth.

    ::

        F1(t) = F1 + sum_k (functions[k](t) - means[k]) resolved[k]
        F2(t) = F2 + sum_k (functions[k](t) - means[k]) unresolved[k]

    Attributes
    ----------
    functions : tuple of dict
        Each a ``kind`` (seasonal, ramp, step) and the fields of the class of
        that name in :mod:`eddyshed.solver.time_functions`, times in seconds.
    means : ndarray, shape (pattern,)
        Mean of each function over the truth.
    resolved : ndarray, shape (pattern, nx)
        Resolved part of each pattern [state unit s-1].
    unresolved : ndarray, shape (pattern, ny)
        Unresolved part.

    Notes
    -----
    A closure passes it on to its model as it is if it steps the unresolved
    coordinates, and by :meth:`without_unresolved` if it does not know them. One
    that has eliminated them keeps what F2 does to x: y that follows F2 is
    ``rate^-1 F2(t)``, which acts on x as y does (see
    :mod:`eddyshed.reduce.homogenised`).
    """

    functions: tuple[dict[str, Any], ...]
    means: np.ndarray
    resolved: np.ndarray
    unresolved: np.ndarray

    def driver(self) -> Callable[[float], np.ndarray]:
        """Make a fast function of time [s]: what to add to the tendency of (x, y).

        It returns an array of shape (nx + ny,) [state unit s-1].
        """
        functions = self.parsed
        patterns = np.hstack([self.resolved, self.unresolved])
        constant = self.means @ patterns

        def added(t):
            return np.array([f.factor(t) for f in functions]) @ patterns - constant

        return added

    def factors_at(self) -> Callable[[float], np.ndarray]:
        """Make a fast function of time [s]: the functions, less their means.

        It returns an array of shape (pattern,).
        """
        functions, means = self.parsed, self.means

        def factors(t):
            return np.array([f.factor(t) for f in functions]) - means

        return factors

    def factors(self, times: np.ndarray) -> np.ndarray:
        """Functions at times [s], less their means, shape (time, pattern)."""
        factors = self.factors_at()
        rows = [factors(t) for t in times.tolist()]
        return np.array(rows).reshape(len(times), len(self.means))

    @property
    def parsed(self) -> tuple[TimeFunction, ...]:
        """The functions of time."""
        return tuple(
            FUNCTIONS[each["kind"]](
                **{key: value for key, value in each.items() if key != "kind"}
            )
            for each in self.functions
        )

    def without_unresolved(self, ny: int = 0) -> Variation:
        """Return the resolved part, beside `ny` coordinates that are not forced."""
        unresolved = np.zeros((len(self.means), ny))
        return dataclasses.replace(self, unresolved=unresolved)

    @property
    def notes(self) -> tuple[str, ...]:
        """What a reader of any result under this forcing must know."""
        notes = [
            "the forcing varies in time: means are over the whole truth, whatever the "
            "season, and variances hold what follows the clock"
        ]
        if self.is_transient:
            notes.append(
                "a ramp or step changes the forcing for good: what is fitted to the "
                "truth is fitted to before and after alike, and reduced models are "
                "run over the same window of time as the truth, from its first state"
            )
        return tuple(notes)

    @property
    def is_transient(self) -> bool:
        """Whether a ramp or a step changes the forcing for good."""
        return any(each["kind"] != "seasonal" for each in self.functions)

    @property
    def fastest(self) -> float:
        """Largest angular frequency of a season [s-1]; zero if there is none."""
        periods = [f.period for f in self.parsed if isinstance(f, Seasonal)]
        return 2 * np.pi / min(periods, default=np.inf)

    @property
    def largest(self) -> np.ndarray:
        """Largest departure of each function from its mean, shape (pattern,)."""
        ends = [
            (1 - f.amplitude, 1 + f.amplitude)
            if isinstance(f, Seasonal)
            else (f.before, f.after)
            for f in self.parsed
        ]
        departures = np.reshape(ends, (-1, 2)) - self.means[:, np.newaxis]
        return np.abs(departures).max(axis=1)

    def alike(self, times: np.ndarray) -> np.ndarray:
        """Which times have the phase of all seasons that the first one has.

        Parameters
        ----------
        times : ndarray, shape (time,)
            Evenly spaced [s].

        Returns
        -------
        ndarray of int
            Indices; of times that straddle the phase the nearer is taken. The
            first is always among them.
        """
        is_alike = np.ones(len(times), dtype=bool)
        for function in self.parsed:
            if isinstance(function, Seasonal):
                # Half an interval, unless that is a sizeable part of the period.
                near = min(times[1] - times[0], function.period / 8) / 2
                since = np.mod(times - times[0] + near, function.period)
                is_alike &= since < 2 * near
        is_alike[0] = True
        return np.flatnonzero(is_alike)

    def cycle(self, series: np.ndarray, times: np.ndarray) -> np.ndarray:
        """Part of a series that follows the clock of the forcing.

        Parameters
        ----------
        series : ndarray, shape (member, time, mode)
            Of mean zero.
        times : ndarray, shape (time,)
            [s]

        Returns
        -------
        ndarray, shape (time, mode)
            By least squares, over all members: the first two harmonics of each
            season; for a ramp or a step the function itself.
        """
        columns = []
        for k, function in enumerate(self.parsed):
            if isinstance(function, Seasonal):
                for harmonic in (1, 2):
                    angle = 2 * np.pi * harmonic * times / function.period
                    columns += [np.cos(angle), np.sin(angle)]
            else:
                columns.append(self.factors(times)[:, k])
        design = np.column_stack([np.ones(len(times)), *columns])
        design -= design.mean(axis=0) * (np.arange(design.shape[1]) > 0)
        weights, *_ = np.linalg.lstsq(design, series.mean(axis=0), rcond=None)
        return design[:, 1:] @ weights[1:]


def mean_forcing(model: Any, times: np.ndarray) -> np.ndarray:
    """Time mean of F, shape (size,).

    Parameters
    ----------
    model : Model
    times : ndarray, shape (time,)
        Times of the truth's records [s].

    Raises
    ------
    ContractError
        If F varies and the model does not declare how.
    """
    first = float(times[0])
    declared = variations_of(model)
    steady = model.forcing(first) - _sum(declared, first)
    for t in times[[len(times) // 3, len(times) // 2, -1]].tolist():
        forcing = model.forcing(t)
        off = np.abs(forcing - _sum(declared, t) - steady).max()
        if not off <= ROUND_OFF * max(np.abs(forcing).max(), np.abs(steady).max()):
            what = "does not vary as its variations say" if declared else "varies"
            message = (
                f"model {type(model).__name__}: its forcing {what}: at {t:.6g} s it "
                f"is off by {off:.3g}; let the member variations be pairs of a "
                "Seasonal, Ramp or Step and the pattern that it multiplies"
            )
            raise ContractError(message)
    return steady + sum(
        (_mean(function, times) * pattern for function, pattern in declared),
        np.zeros(model.size),
    )


def project_variation(
    model: Any, times: np.ndarray, dual_x: np.ndarray, dual_y: np.ndarray
) -> Variation | None:
    """Variation of a model's forcing in a split basis; None if it is steady.

    Parameters
    ----------
    model : Model
    times : ndarray, shape (time,)
        Times of the truth's records [s].
    dual_x, dual_y : ndarray, shapes (size, nx), (size, ny)
        As :func:`eddyshed.reduce.contract.dual_vectors` returns them.
    """
    declared = variations_of(model)
    if not declared:
        return None
    kinds = {kind: name for name, kind in FUNCTIONS.items()}
    patterns = np.array([pattern for _, pattern in declared])
    return Variation(
        functions=tuple(
            {"kind": kinds[type(function)], **dataclasses.asdict(function)}
            for function, _ in declared
        ),
        means=np.array([_mean(function, times) for function, _ in declared]),
        resolved=patterns @ dual_x,
        unresolved=patterns @ dual_y,
    )


def variations_of(model: Any) -> tuple[tuple[TimeFunction, np.ndarray], ...]:
    """Variations that a model declares.

    Raises
    ------
    ContractError
        If they are not what they must be.
    """
    declared = tuple(getattr(model, "variations", ()))
    for each in declared:
        is_pair = isinstance(each, tuple) and len(each) == 2
        if not (
            is_pair
            and isinstance(each[0], tuple(FUNCTIONS.values()))
            and np.shape(each[1]) == (model.size,)
        ):
            message = (
                f"model {type(model).__name__}: variations holds {each!r}; each must "
                "be a pair of a Seasonal, Ramp or Step of "
                "eddyshed.solver.time_functions and a pattern of shape "
                f"({model.size},)"
            )
            raise ContractError(message)
    return declared


def _mean(function, times):
    return float(np.mean([function.factor(t) for t in times.tolist()]))


def _sum(declared, t):
    return sum(function.factor(t) * pattern for function, pattern in declared)
