"""Scores of a reduced model against the truth, each with errors from both sides.

Two statements are made and never merged. *Within sampling error*: the
difference is no larger than the two finite records leave open. *Within
tolerance*: the difference is small enough for use, by bounds in the config.
With a long truth every approximate closure fails the first; with a short one
every closure passes it, and the score says so.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import erfc

from .settings import BenchmarkSettings
from .statistics.correlation import Estimate, integral_time
from .statistics.resampling import kolmogorov_smirnov, moments, wasserstein

SAMPLING = 2.0  # standard errors within which two numbers agree
QUANTITIES = ("mean", "variance", "integral time", "distribution")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Summary:
    """Statistics of one set of series of the resolved modes.

    Attributes
    ----------
    mean, variance, integral_time : Estimate, shape (mode,)
        In the state unit, its square, and seconds.
    """

    mean: Estimate
    variance: Estimate
    integral_time: Estimate


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Score:
    """One quantity of a closure against the truth, for every mode.

    Attributes
    ----------
    quantity : str
        One of `QUANTITIES`.
    difference : Estimate, shape (mode,)
        Mean: difference in standard deviations of the truth. Variance and
        integral time: logarithm of the ratio. Distribution: Wasserstein
        distance in standard deviations of the truth.
    sampling : ndarray of bool, shape (mode,)
        Within sampling error.
    tolerance : float
        Bound on the difference.
    close : ndarray of bool, shape (mode,)
        Within tolerance.
    p_value : ndarray, shape (mode,)
        Probability of a larger difference if there were none.
    """

    quantity: str
    difference: Estimate
    sampling: np.ndarray
    tolerance: float
    close: np.ndarray
    p_value: np.ndarray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Verdict:
    """What the scores of a closure come to.

    Attributes
    ----------
    word : str
        ``indistinguishable``, ``close``, ``undecided``, ``off``, ``at rest`` or
        ``failed``.
    reason : str
        Why, in a sentence.
    within_sampling, within_tolerance, count : int
        How many scores pass each statement, of how many.
    """

    word: str
    reason: str
    within_sampling: int
    within_tolerance: int
    count: int


def summarise(series: np.ndarray, step: float, rng: np.random.Generator) -> Summary:
    """Statistics of series of the resolved modes.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
        In the state unit.
    step : float
        Sampling interval [s].
    rng : numpy.random.Generator
        For the bootstrap.

    Returns
    -------
    Summary

    Raises
    ------
    DataError
        If a mode is constant or the series too short.
    """
    found = moments(series, step, rng=rng)
    return Summary(
        mean=found.mean,
        variance=found.variance,
        integral_time=integral_time(series, step),
    )


def score(
    settings: BenchmarkSettings,
    truth: np.ndarray,
    truth_step: float,
    truth_summary: Summary,
    reduced: np.ndarray,
    reduced_step: float,
    reduced_summary: Summary,
    rng: np.random.Generator,
) -> list[Score]:
    """Set a reduced model against the truth.

    Parameters
    ----------
    settings : BenchmarkSettings
        The tolerances.
    truth, reduced : ndarray, shape (member, time, mode)
        Series of the resolved modes in the same coordinates.
    truth_step, reduced_step : float
        Sampling intervals [s].
    truth_summary, reduced_summary : Summary
        Their statistics.
    rng : numpy.random.Generator
        For the bootstrap.

    Returns
    -------
    list of Score
        One for each of `QUANTITIES`.
    """
    deviation = np.sqrt(truth_summary.variance.value)
    mean = Estimate(
        (reduced_summary.mean.value - truth_summary.mean.value) / deviation,
        np.hypot(reduced_summary.mean.error, truth_summary.mean.error) / deviation,
    )
    distance = wasserstein(reduced, truth, reduced_step, truth_step, rng=rng)
    test = kolmogorov_smirnov(reduced, truth, reduced_step, truth_step)
    scores = [
        _by_error("mean", mean, settings.mean_tolerance),
        _by_error(
            "variance",
            log_ratio(reduced_summary.variance, truth_summary.variance),
            settings.variance_tolerance,
        ),
        _by_error(
            "integral time",
            log_ratio(reduced_summary.integral_time, truth_summary.integral_time),
            settings.time_tolerance,
        ),
    ]
    scores.append(
        Score(
            quantity="distribution",
            difference=distance,
            sampling=test.p_value > 0.05,
            tolerance=settings.distribution_tolerance,
            close=distance.value < settings.distribution_tolerance,
            p_value=test.p_value,
        )
    )
    return scores


def log_ratio(a: Estimate, b: Estimate) -> Estimate:
    """Logarithm of a ratio of positive estimates, errors to first order."""
    return Estimate(
        np.log(a.value / b.value), np.hypot(a.error / a.value, b.error / b.value)
    )


def _by_error(quantity, difference, tolerance):
    """Score a difference whose error is known and near normal."""
    with np.errstate(invalid="ignore"):
        z = np.abs(difference.value) / difference.error
    z = np.where(np.isfinite(difference.error), z, 0.0)
    return Score(
        quantity=quantity,
        difference=difference,
        sampling=z < SAMPLING,
        tolerance=tolerance,
        close=np.abs(difference.value) < tolerance,
        p_value=erfc(z / np.sqrt(2)),
    )


def judge(scores: list[Score], labels: tuple[str, ...]) -> Verdict:
    """Sum up the scores of a closure.

    Parameters
    ----------
    scores : list of Score
        All its scores.
    labels : tuple of str
        Names of the modes.

    Returns
    -------
    Verdict

    Notes
    -----
    *Indistinguishable*: nine scores in ten lie within sampling error, and the
    smallest p-value stands up to Holm's correction for the number of scores
    at five percent (Holm 1979, Scand. J. Statist. 6:65). *Close*: every mean,
    variance and distribution lies within tolerance. *Off*: one of them is
    beyond its tolerance by more than two standard errors. *Undecided*:
    none of these, or an error is not known because a mode keeps its memory for
    longer than the record can tell; longer records would. Integral times are
    scored and counted but not asked of a close closure: one that gets the slow
    modes' memory wrong can still serve for their climate.
    """
    sampling = np.concatenate([s.sampling for s in scores])
    close = np.concatenate([s.close for s in scores])
    p_values = np.concatenate([s.p_value for s in scores])
    asked = [s for s in scores if s.quantity != "integral time"]
    counts = {
        "within_sampling": int(sampling.sum()),
        "within_tolerance": int(close.sum()),
        "count": len(sampling),
    }
    unknown = [s for s in asked if not np.all(np.isfinite(s.difference.error))]
    if unknown:
        word, reason = "undecided", _furthest(asked, labels)
        reason += (
            ", with an error that is not known: a mode keeps its memory for longer "
            "than the record can tell"
        )
    elif sampling.mean() >= 0.9 and p_values.min() > 0.05 / len(p_values):
        word, reason = "indistinguishable", _furthest(scores, labels)
        wide = [s for s in asked if np.any(s.difference.error > s.tolerance / 2)]
        if wide:
            names = " and ".join(s.quantity for s in wide)
            reason += (
                f"; but the records are too short to tell: errors of the {names} are "
                "above half the tolerance"
            )
    elif all(s.close.all() for s in asked):
        word, reason = "close", _furthest(scores, labels)
    elif any(np.any(_excess(s) > SAMPLING) for s in asked):
        word, reason = "off", _furthest(asked, labels)
    else:
        word, reason = "undecided", _furthest(asked, labels)
        reason += ", by less than its sampling error"
    return Verdict(word=word, reason=reason, **counts)


def _excess(score):
    """Standard errors by which each mode is beyond its tolerance."""
    beyond = np.abs(score.difference.value) - score.tolerance
    return beyond / score.difference.error


def _furthest(scores, labels):
    """Name the mode and quantity furthest from the truth, by its tolerance."""
    worst = max(
        scores, key=lambda s: float(np.max(np.abs(s.difference.value))) / s.tolerance
    )
    mode = int(np.argmax(np.abs(worst.difference.value)))
    size = abs(worst.difference.value[mode]) / worst.tolerance
    return (
        f"furthest from the truth: {worst.quantity} of {labels[mode]}, at {size:.2g} "
        "of its tolerance"
    )
