"""Findings: whether the truth bears out what the closures assume.

A finding sets a statistic, with its standard error, against a threshold. Its
verdict compares the confidence interval with the threshold, not the point:
*holds* or *fails* only if the whole interval lies on one side, else
*undecided*, with how many times more truth would settle it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from .settings import AuditSettings
from .split import Split
from .statistics.correlation import Estimate, integral_time
from .statistics.resampling import moments

CONFIDENCE = 1.96  # standard errors to either side: a two-sided 95 % interval


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
        Which closures lean on it.
    statistic : str
        What was measured.
    value, error : float
        Its value and standard error.
    threshold : float
        The bound it is compared with.
    sense : str
        ``at least`` or ``at most``.
    where : str
        The mode that the value belongs to.
    verdict : str
        ``holds``, ``fails`` or ``undecided``.
    meaning : str
        What it means if it fails.
    settle : str
        If undecided, what would settle it; else empty.
    details : dict of str to list
        The statistic and its error mode by mode.
    """

    name: str
    assumption: str
    closures: tuple[str, ...]
    statistic: str
    value: float
    error: float
    threshold: float
    sense: str
    where: str
    verdict: str
    meaning: str
    settle: str
    details: dict[str, list]


def decide(
    value: float, error: float, threshold: float, sense: str
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
    if abs(distance) > CONFIDENCE * error:
        return ("holds" if distance > 0 else "fails"), 1.0
    if distance == 0 or not math.isfinite(error):
        return "undecided", math.inf
    errors = CONFIDENCE * error / distance
    return "undecided", errors * errors  # a power would raise if it overflowed


def audit(
    settings: AuditSettings,
    split: Split,
    coupling: np.ndarray,
    rng: np.random.Generator,
) -> list[Finding]:
    """Test what the closures assume.

    Parameters
    ----------
    settings : AuditSettings
        The thresholds.
    split : Split
        The divided truth.
    coupling : ndarray, shape (member, time, nx)
        What the unresolved modes do to the resolved ones: their full tendency
        less that of the truncated model [state unit s-1].
    rng : numpy.random.Generator
        For the bootstrap.

    Returns
    -------
    list of Finding

    Raises
    ------
    DataError
        If a resolved mode or its coupling is constant.
    """
    time_x = integral_time(split.x, split.step)
    unexplained = detrended(coupling, split.x)
    time_r = integral_time(unexplained, split.step)
    shape = moments(unexplained, split.step, rng=rng)
    length = split.length
    ratio = time_x.value / time_r.value
    separation = Estimate(
        ratio,
        ratio * np.hypot(time_x.error / time_x.value, time_r.error / time_r.value),
    )
    records = Estimate(
        length / time_x.value, length / time_x.value * time_x.error / time_x.value
    )
    labels = split.resolved.labels
    every = ("residual", "coloured", "white")
    return [
        _worst(
            "separation",
            "Each resolved mode changes more slowly than what drives it from the "
            "unresolved modes.",
            ("residual", "white"),
            "correlation time of the mode over that of its coupling",
            separation,
            settings.separation,
            "at least",
            labels,
            "noise fitted to the coupling cannot be told from the mode itself: "
            "expect wrong correlation times at short lags",
        ),
        _worst(
            "normality: tails",
            "What the unresolved modes do to the resolved ones is Gaussian: its tails.",
            every,
            "kurtosis of the coupling less its part linear in the resolved state "
            "(3 for a normal)",
            shape.kurtosis,
            settings.kurtosis,
            "at most",
            labels,
            "rare strong bursts are replaced by mild noise: expect extremes and "
            "fourth moments to be off",
        ),
        _worst(
            "normality: symmetry",
            "What the unresolved modes do to the resolved ones is Gaussian: "
            "its symmetry.",
            every,
            "absolute skewness of the coupling less its part linear in the "
            "resolved state (0 for a normal)",
            Estimate(np.abs(shape.skewness.value), shape.skewness.error),
            settings.skewness,
            "at most",
            labels,
            "pushes one way are stronger than the other way: expect skewed modes "
            "to be reproduced without their skewness",
        ),
        _worst(
            "truth length",
            "The truth is long enough for its statistics to be known.",
            every,
            "length of the truth in correlation times of the mode",
            records,
            settings.length,
            "at least",
            labels,
            "neither the fit nor the score can be trusted: run a longer truth",
        ),
    ]


def detrended(coupling: np.ndarray, x: np.ndarray) -> np.ndarray:
    """Coupling less its mean and its least-squares part linear in x.

    Parameters
    ----------
    coupling, x : ndarray, shape (member, time, nx)

    Returns
    -------
    ndarray, shape (member, time, nx)
    """
    anomalies = coupling - coupling.mean(axis=(0, 1))
    centred = x - x.mean(axis=(0, 1))
    modes = x.shape[-1]
    slope, *_ = np.linalg.lstsq(
        centred.reshape(-1, modes), anomalies.reshape(-1, modes), rcond=None
    )
    return anomalies - centred @ slope


def _worst(
    name, assumption, closures, statistic, estimate, threshold, sense, labels, meaning
):
    """Finding of the mode that is worst placed against a threshold."""
    pick = np.argmin if sense == "at least" else np.argmax
    mode = int(pick(estimate.value))
    value, error = float(estimate.value[mode]), float(estimate.error[mode])
    verdict, more = decide(value, error, threshold, sense)
    settle = ""
    if verdict == "undecided":
        settle = (
            f"about {max(more, 1.1):.1f} times the truth"
            if math.isfinite(more)
            else "a truth many times longer: this one is too short to say how long"
        )
    return Finding(
        name=name,
        assumption=assumption,
        closures=closures,
        statistic=statistic,
        value=value,
        error=error,
        threshold=threshold,
        sense=sense,
        where=labels[mode],
        verdict=verdict,
        meaning=meaning,
        settle=settle,
        details={
            "mode": list(labels),
            "value": estimate.value.tolist(),
            "error": estimate.error.tolist(),
        },
    )
