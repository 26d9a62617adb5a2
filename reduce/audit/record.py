"""Whether the truth is stationary, long enough, and all there."""

from __future__ import annotations

import numpy as np

from ..stationarity import Stationarity
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


def length(found: Stationarity, labels) -> Measured:
    """Length in correlation times."""
    return Measured(
        value=found.length.value,
        error=found.length.error,
        places=labels,
        freedom=np.maximum(found.length.value / 4, 1.0),
    )


def shifts(found: Stationarity, labels) -> tuple[Measured, Measured, Measured]:
    """Difference of means, factor between variances, change along the line.

    The errors err too: Student's tails, with one degree of freedom for every four
    correlation times.
    """
    freedom = np.maximum(found.length.value / 4, 1.0)
    # An error that is not known needs a lag of half a member to see the end of
    # the correlation: 40 correlation times.
    more = float(np.max(40 / np.maximum(found.length.value, 1e-9), initial=1.1))
    factor = np.exp(np.abs(found.variance_shift.value))

    def measured(value, error):
        return Measured(
            value=value, error=error, places=labels, freedom=freedom, more=more
        )

    return (
        measured(np.abs(found.mean_shift.value), found.mean_shift.error),
        measured(factor, factor * found.variance_shift.error),
        measured(np.abs(found.trend.value), found.trend.error),
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
