"""Whether the truth is stationary, long enough, and all there."""

from __future__ import annotations

import math

import numpy as np

from ..statistics.correlation import integral_time
from ..statistics.stationarity import stationarity
from .batches import Batches
from .findings import Assumption, Measured

LEANING = ("bare", "bare_mean", "damped", "residual", "coloured", "white")

LENGTH = Assumption(
    name="record: length",
    sentence="The truth is long enough for its statistics to be known.",
    closures=LEANING,
    statistic="length of the truth in correlation times of the mode",
    setting="length",
    sense="at least",
    meaning="neither the fit nor the score can be trusted",
    remedy="run a longer truth, or more members",
    logarithmic=True,
)
SHIFT = Assumption(
    name="record: means",
    sentence="The mean does not change along the truth.",
    closures=LEANING,
    statistic="absolute difference of the means of its halves, in standard deviations",
    setting="mean_shift",
    sense="at most",
    meaning="the truth drifts, and a part of its variance is the drift",
    remedy="start later (a longer [time] spin_up)",
)
SPREAD = Assumption(
    name="record: variances",
    sentence="The variance does not change along the truth.",
    closures=LEANING,
    statistic="factor between the variances of its halves, the larger over the smaller",
    setting="variance_factor",
    sense="at most",
    meaning="there is no one variance that a closure could have",
    remedy="start later (a longer [time] spin_up), or run longer",
    logarithmic=True,
)
TREND = Assumption(
    name="record: trend",
    sentence="The truth has no trend.",
    closures=LEANING,
    statistic="absolute change of the least-squares line, in standard deviations",
    setting="trend",
    sense="at most",
    meaning="the truth drifts, and a part of its variance is the drift",
    remedy="start later (a longer [time] spin_up)",
)
LEFT_OUT = Assumption(
    name="record: in no mode",
    sentence="Nothing that matters is in no mode at all.",
    closures=("coloured", "white"),
    statistic="share of the variance that is in neither resolved nor unresolved modes",
    setting="left_out",
    sense="at most",
    meaning="the noise stands in for less than what was dropped",
    remedy="raise [unresolved] variance",
    votes=False,
)
SAMPLE = Assumption(
    name="record: noise",
    sentence="Every coefficient of the noise rests on many independent values.",
    closures=("coloured", "white"),
    statistic="length of the truth over twice the correlation time of the unresolved "
    "mode",
    setting="noise_sample",
    sense="at least",
    meaning="rates of the noise are guesses",
    remedy="run a longer truth, or lower [unresolved] variance",
    logarithmic=True,
)


def length(x: np.ndarray, step: float, labels) -> Measured:
    """Length in correlation times."""
    time = integral_time(x, step)
    value = x.shape[0] * x.shape[1] * step / time.value
    return Measured(
        value=value,
        error=value * time.error / time.value,
        places=labels,
        freedom=np.maximum(value / 6, 1.0),
    )


def shifts(x: np.ndarray, step: float, labels) -> tuple[Measured, Measured, Measured]:
    """Difference of means, factor between variances, change along the line.

    Parameters
    ----------
    x : ndarray, shape (member, time, nx)
    step : float
    labels : sequence of str
    """
    found = stationarity(x, step)
    factor = np.exp(np.abs(found.variance_shift.value))
    shortest = float(found.length.min())
    known = {
        "places": labels,
        "freedom": found.freedom,
        # The end of the correlation is looked for up to half of half a member.
        "more": max(1.1, 40 / shortest) if shortest else math.inf,
    }
    return (
        Measured(
            value=np.abs(found.mean_shift.value), error=found.mean_shift.error, **known
        ),
        Measured(value=factor, error=factor * found.variance_shift.error, **known),
        Measured(value=np.abs(found.trend.value), error=found.trend.error, **known),
    )


def left_out_share(energies: np.ndarray, batches: Batches) -> Measured:
    """Share of the variance in no mode; energies (time, 2): left out, and all."""
    value, error = batches.jackknife(
        *batches.means(energies), lambda mean: mean[:1] / mean[1]
    )
    return Measured(
        value=value,
        error=error,
        places=["all modes"],
        freedom=batches.freedom,
        more=batches.more,
    )
