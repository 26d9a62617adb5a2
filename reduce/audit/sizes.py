"""How large every term of the equation is along the truth."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..contract import Model, dual_vectors
from ..operators import Operators
from ..split import Split
from ..statistics.correlation import integral_time
from .batches import Batches
from .findings import Assumption, Measured

COUPLING = Assumption(
    name="sizes: coupling",
    sentence="What the unresolved modes do to the resolved ones is negligible.",
    closures=("bare", "bare_mean"),
    statistic="rms of the coupling, less its mean, over that of the resolved tendency",
    setting="coupling_ratio",
    sense="at most",
    meaning="the truncation drops a term as large as those that it keeps",
    remedy="take a closure that stands something in for it",
    logarithmic=True,
)
REPLACED = Assumption(
    name="sizes: replaced term",
    sentence="The term that noise replaces is the largest that moves the unresolved "
    "modes.",
    closures=("coloured", "white"),
    statistic="rms of B222(y, y) over that of 2 B212(x, y)",
    setting="replaced_ratio",
    sense="at least",
    meaning="what is kept of the unresolved dynamics outweighs what is called noise",
    remedy="look at the size of the perturbation, which predicts better",
    votes=False,
    logarithmic=True,
)
QUICK = Assumption(
    name="sizes: replaced time",
    sentence="The term that noise replaces is quicker than the modes that it moves.",
    closures=("coloured", "white"),
    statistic="correlation time of B222(y, y) over that of y, both weighted by "
    "variance",
    setting="replaced_time",
    sense="at most",
    meaning="the noise that moves the unresolved modes is not white to them",
    remedy="none is needed while they are quick beside the resolved modes",
    votes=False,
    logarithmic=True,
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Terms:
    """Terms of both tendencies at a sample of states, by their names.

    Attributes
    ----------
    slow, fast : dict of str to ndarray, shape (time, nx or ny)
        They add up to ``tendency`` [state unit s-1].
    slow_tendency, fast_tendency : ndarray, shapes (time, nx), (time, ny)
    left_out : ndarray, shape (time, 2)
        Twice the energy in no mode, and in all (of departures from the mean).
    """

    slow: dict[str, np.ndarray]
    fast: dict[str, np.ndarray]
    slow_tendency: np.ndarray
    fast_tendency: np.ndarray
    left_out: np.ndarray


def terms_of(
    model: Model,
    split: Split,
    operators: Operators,
    states: np.ndarray,
    rows: tuple[np.ndarray, np.ndarray],
) -> Terms:
    """Terms of the equation at some states of the truth.

    Parameters
    ----------
    model : Model
    split : Split
    operators : Operators
    states : ndarray, shape (time, size)
        Full states.
    rows : tuple of ndarray of int, shape (time,)
        Their members and records.

    Returns
    -------
    Terms
    """
    slow_dual = dual_vectors(model, split.resolved.vectors)
    fast_dual = dual_vectors(model, split.unresolved.vectors)
    times = split.times[rows[1]]
    anomalies = states - split.mean
    x, y = anomalies @ slow_dual, anomalies @ fast_dual
    slow_tendency = split.tendency[rows]
    quadratic = {
        "slow": np.einsum("ijk,tj,tk->ti", operators.B111, x, x, optimize=True),
        "mixed": 2 * np.einsum("ijm,tj,tm->ti", operators.B112, x, y, optimize=True),
        "fast": np.einsum("imn,tm,tn->ti", operators.B122, y, y, optimize=True),
    }
    slow = {
        "F1 + A11 x": operators.F1 + x @ operators.A11.T,
        "B111(x, x)": quadratic["slow"],
        "A12 y": y @ operators.A12.T,
        "2 B112(x, y)": quadratic["mixed"],
        "B122(y, y)": quadratic["fast"],
    }
    slow["in no mode"] = slow_tendency - sum(slow.values())
    steady = model.forcing(float(times[0]))
    fast_states = y @ split.unresolved.vectors.T
    own = model.linear(fast_states) + 2 * model.bilinear(split.mean, fast_states)
    rates = model.linear(states) + model.bilinear(states, states)
    fast_tendency = (rates + steady) @ fast_dual
    fast = {
        "A21 x + B211(x, x)": x @ operators.A21.T
        + np.einsum("mjk,tj,tk->tm", operators.B211, x, x, optimize=True),
        "2 B212(x, y)": 2
        * np.einsum("mjn,tj,tn->tm", operators.B212, x, y, optimize=True),
        "A22 y": own @ fast_dual,
        "B222(y, y)": model.bilinear(fast_states, fast_states) @ fast_dual,
    }
    fast["in no mode"] = fast_tendency - operators.F2 - sum(fast.values())
    total = model.inner(anomalies, anomalies)
    held = np.sum(x**2, axis=1) + np.sum(y**2, axis=1)
    return Terms(
        slow=slow,
        fast=fast,
        slow_tendency=slow_tendency,
        fast_tendency=fast_tendency,
        left_out=np.stack([np.maximum(total - held, 0.0), total], axis=-1),
    )


def sizes(terms: dict[str, np.ndarray], batches: Batches) -> dict[str, dict]:
    """Root mean square of each term about its mean, with its error: plain data."""
    result = {}
    for name, values in terms.items():
        centred = values - values.mean(axis=0)
        squares = np.mean(centred**2, axis=1)[:, np.newaxis]
        value, error = batches.jackknife(*batches.means(squares), np.sqrt)
        result[name] = {"value": float(value[0]), "error": float(error[0])}
    return result


def replaced_time(
    replaced: np.ndarray, y: np.ndarray, step: float, stretches: int
) -> Measured:
    """Correlation time of the replaced term over that of the modes it moves.

    Parameters
    ----------
    replaced, y : ndarray, shape (time, ny)
        Stretches of consecutive records, of equal length, one after the other.
    step : float
    stretches : int
    """

    def weighted(part):
        series = part.reshape(stretches, -1, part.shape[1])
        times = integral_time(series, step)
        weights = series.var(axis=(0, 1))
        weights /= weights.sum()
        # Modes are many and their times known alike: the errors of all count once.
        return times.value @ weights, np.sqrt((times.error**2) @ weights**2)

    upper, spread = weighted(replaced)
    lower, other = weighted(y)
    ratio = upper / lower
    return Measured(
        value=np.array([ratio]),
        error=np.array([ratio * np.hypot(spread / upper, other / lower)]),
        places=["all modes"],
        freedom=stretches - 1,
        more=2.0,
    )
