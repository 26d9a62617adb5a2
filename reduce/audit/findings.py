"""What a finding is, and how an interval becomes a verdict."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import stats

CONFIDENCE = 1.96  # standard errors to either side: a two-sided 95 % interval
FAR = 100  # times the data: beyond it a number would promise too much
TAIL = 0.025  # probability beyond one end of it


@dataclass(frozen=True, slots=True, kw_only=True)
class Assumption:
    """What is assumed, and how a finding about it reads.

    Attributes
    ----------
    name : str
        Short name.
    sentence : str
        What is assumed.
    closures : tuple of str
        Which closures lean on it.
    statistic : str
        What is measured.
    setting : str
        Key of the threshold in `AuditSettings`.
    sense : str
        ``at least`` or ``at most``.
    meaning : str
        What it means if it fails.
    remedy : str
        What to change if it fails.
    votes : bool
        Whether it counts in the verdict on a closure. Those that do not were
        seen to tell nothing of how well a closure does, or to tell it less well
        than others, and only explain.
    logarithmic : bool
        Whether the interval is one of the logarithm: for ratios, whose errors
        are proportional to them.
    source : str
        What must be longer for a smaller error.
    """

    name: str
    sentence: str
    closures: tuple[str, ...]
    statistic: str
    setting: str
    sense: str
    meaning: str
    remedy: str
    votes: bool = True
    logarithmic: bool = False
    source: str = "truth"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Measured:
    """A statistic at several places, each value with its error.

    Attributes
    ----------
    value, error : ndarray, shape (place,)
        Estimate and standard error; infinite where the record is too short to
        know the error.
    freedom : float or ndarray, shape (place,)
        Degrees of freedom that the errors rest on; infinite for a normal.
    places : sequence of str
        Modes, or whatever the statistic is taken for.
    tries : int
        How many numbers each value is the largest of.
    more : float
        How many times more truth would make the errors known, where they are
        not.
    """

    value: np.ndarray
    error: np.ndarray
    places: Sequence[str]
    freedom: float | np.ndarray = math.inf
    tries: int = 1
    more: float = math.inf


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """One assumption, tested.

    Attributes
    ----------
    name : str
        Short name.
    assumption : str
        What is assumed, in a sentence.
    closures : tuple of str
        Which closures of the study lean on it.
    votes : bool
        Whether it counts in their verdicts; otherwise it is explanatory.
    statistic : str
        What was measured.
    value, error : float
        Its value and standard error.
    quantile : float
        Standard errors to either side of the interval that was compared.
    threshold : float
        The bound it is compared with.
    sense : str
        ``at least`` or ``at most``.
    where : str
        The mode (or other place) that the value belongs to.
    verdict : str
        ``holds``, ``fails`` or ``undecided``.
    meaning : str
        What it means if it fails.
    remedy : str
        What to change if it fails.
    more : float
        If undecided, how many times the truth would settle it (infinite if it
        cannot be said); else 1.
    settle : str
        The same in words; empty if settled.
    details : dict of str to list
        The statistic and its error place by place.
    """

    name: str
    assumption: str
    closures: tuple[str, ...]
    votes: bool
    statistic: str
    value: float
    error: float
    quantile: float
    threshold: float
    sense: str
    where: str
    verdict: str
    meaning: str
    remedy: str
    more: float
    settle: str
    details: dict[str, list]


def decide(
    value: float,
    error: float,
    threshold: float,
    sense: str,
    quantile: float = CONFIDENCE,
) -> tuple[str, float]:
    """Compare a confidence interval with a threshold.

    Parameters
    ----------
    value, error : float
        Statistic and standard error; the error may be infinite.
    threshold : float
        The bound.
    sense : str
        ``at least`` or ``at most``.
    quantile : float
        Standard errors from the value to either end of the interval.

    Returns
    -------
    verdict : str
        ``holds``, ``fails`` or ``undecided``.
    more : float
        How many times more data would settle it, if errors fall with the
        square root of the length and the value stays; 1 if settled.

    Examples
    --------
    >>> decide(5.0, 0.5, 3.0, "at least")
    ('holds', 1.0)
    >>> verdict, more = decide(4.0, 1.0, 3.0, "at least")
    >>> verdict, round(more, 1)
    ('undecided', 3.8)
    """
    distance = value - threshold if sense == "at least" else threshold - value
    if abs(distance) > quantile * error:
        return ("holds" if distance > 0 else "fails"), 1.0
    if distance == 0 or not math.isfinite(error):
        return "undecided", math.inf
    errors = quantile * error / distance
    return "undecided", errors * errors  # a power would raise if it overflowed


def judge(
    assumption: Assumption,
    measured: Measured,
    threshold: float,
    used: Sequence[str],
) -> Finding:
    """Make a finding of a statistic at several places.

    Parameters
    ----------
    assumption : Assumption
    measured : Measured
        At one place or more.
    threshold : float
    used : sequence of str
        Closures of the study.

    Returns
    -------
    Finding

    Notes
    -----
    The assumption fails if it fails at any place, so each place gets its share
    of the 2.5 % that a true one may fail with (C. E. Bonferroni 1936, Pubbl. Ist.
    Sup. Sci. Econ. Comm. Firenze 8:3; the first step of S. Holm 1979, Scand. J.
    Statist. 6:65, which is all that "any" needs). It holds if it holds at every
    place, for which no correction is needed (R. L. Berger 1982, Technometrics
    24:295).
    """
    value = np.asarray(measured.value, dtype=float)
    error = np.where(np.isfinite(value), measured.error, np.inf).astype(float)
    shown = np.where(np.isfinite(value), value, np.nan)
    if assumption.logarithmic:
        with np.errstate(divide="ignore", invalid="ignore"):
            spread = np.where(np.isinf(error), np.inf, error / np.abs(value))
            value, bound = np.log(value), math.log(threshold)
    else:
        spread, bound = error, threshold
    value = np.nan_to_num(value, nan=bound, posinf=bound, neginf=bound)
    spread = np.where(np.isnan(spread), np.inf, spread)
    freedom = np.broadcast_to(measured.freedom, value.shape)
    # With half a degree of freedom Student's quantile is a number that says nothing.
    freedom = np.maximum(freedom, 1.0)
    one = stats.t.ppf(1 - TAIL / measured.tries, freedom)
    many = stats.t.ppf(1 - TAIL / (measured.tries * value.size), freedom)
    sign = 1 if assumption.sense == "at least" else -1
    distance = sign * (value - bound)
    with np.errstate(invalid="ignore"):
        fails = distance < -many * spread
        holds = distance > one * spread
    if fails.any():
        score = np.where(fails, distance / np.maximum(spread, 1e-300), np.inf)
        place, quantiles = int(score.argmin()), many
    elif holds.all():
        place, quantiles = int(distance.argmin()), one
    else:
        # Unknown errors first, then what lies worst.
        score = np.where(holds, np.inf, distance)
        score = np.where(np.isinf(spread), -np.inf, score)
        place = int(score.argmin())
        quantiles = np.where(distance < 0, many, one)
    verdict, more = decide(
        float(value[place]),
        float(spread[place]),
        bound,
        assumption.sense,
        float(quantiles[place]),
    )
    if verdict == "undecided" and not np.isfinite(spread[place]):
        more = measured.more
    return Finding(
        name=assumption.name,
        assumption=assumption.sentence,
        closures=tuple(name for name in assumption.closures if name in used),
        votes=assumption.votes,
        statistic=assumption.statistic,
        value=float(shown[place]),
        error=float(error[place]),
        quantile=float(quantiles[place]),
        threshold=threshold,
        sense=assumption.sense,
        where=str(measured.places[place]),
        verdict=verdict,
        meaning=assumption.meaning,
        remedy=assumption.remedy,
        more=more,
        settle="" if verdict != "undecided" else _settle(more, assumption.source),
        details={
            "mode": list(measured.places),
            "value": shown.tolist(),
            "error": error.tolist(),
        },
    )


def unknown(
    assumption: Assumption, threshold: float, used: Sequence[str], why: str
) -> Finding:
    """A finding about which nothing can be said, with the reason."""
    return Finding(
        name=assumption.name,
        assumption=assumption.sentence,
        closures=tuple(name for name in assumption.closures if name in used),
        votes=assumption.votes,
        statistic=assumption.statistic,
        value=math.nan,
        error=math.inf,
        quantile=CONFIDENCE,
        threshold=threshold,
        sense=assumption.sense,
        where="",
        verdict="undecided",
        meaning=assumption.meaning,
        remedy=assumption.remedy,
        more=math.inf,
        settle=why,
        details={"mode": [], "value": [], "error": []},
    )


def _settle(more: float, source: str) -> str:
    """What would settle an open verdict."""
    if not math.isfinite(more):
        return f"a {source} many times longer: this one is too short to say how long"
    return times(more, source)


def times(more: float, source: str) -> str:
    """How much more it takes, in words: two figures, and an end to counting."""
    if more > FAR:
        return f"over {FAR} times the {source}"
    return f"about {float(f'{max(more, 1.1):.2g}'):g} times the {source}"
