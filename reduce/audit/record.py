"""Whether the truth is stationary, long enough, and all there."""

from __future__ import annotations

import numpy as np

from ..statistics.correlation import CROSSING, correlation_scales, integral_time
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

    Halves and line are taken over the time of the members.

    Parameters
    ----------
    x : ndarray, shape (member, time, nx)
    step : float
    labels : sequence of str

    Notes
    -----
    With T the record, t the one-sided integral of the correlation and s the
    two-sided one of its square, the variances are ``8 t / T`` for the difference of
    means in standard deviations, ``8 s / T`` for the logarithm of the ratio of
    variances (C. E. Leith 1973, J. Appl. Meteorol. 12:1066) and ``24 t / T`` for the
    change along the line (U. Grenander 1954, Ann. Math. Stat. 25:252). Both times
    are those of the halves, each less a line of its own: what is looked for must not
    hide behind the slowness that it brings. A line lowers the correlation function
    by about ``4 t / (T / 2)``, up to three times t ``24 t / T`` of the integral,
    which is put back (to first order; F. H. C. Marriott and J. A. Pope 1954,
    Biometrika 41:390, for the mean). The errors err too: Student's tails. An integral
    time has the relative variance ``12 t / T``, as a variance of ``T / (6 t)``
    degrees of freedom has.
    """
    members, times, _ = x.shape
    record, half = members * times * step, times // 2
    early, late = x[:, :half], x[:, times - half :]
    flat = np.concatenate([_straight(early), _straight(late)])
    scales = correlation_scales(flat, step)
    whole = scales.time.value / (1 - CROSSING)
    # Mean and line of a half take the fraction 4 t / T of the variance each.
    deviation = flat.std(axis=(0, 1)) * np.sqrt(1 + 8 * whole / record)
    lost = 1 + 24 * whole / record
    time = np.where(np.isfinite(scales.time.error), whole * lost, np.inf)
    squared = np.where(
        np.isfinite(scales.squared.error), scales.squared.value * lost, np.inf
    )
    shift = (late.mean(axis=(0, 1)) - early.mean(axis=(0, 1))) / deviation
    apart = np.log(_straight(late).var(axis=(0, 1)) / _straight(early).var(axis=(0, 1)))
    factor = np.exp(np.abs(apart))
    ramp = np.linspace(-0.5, 0.5, times)
    slope = np.tensordot(ramp, x.mean(axis=0), axes=1) / np.sum(ramp**2)
    known = {
        "places": labels,
        "freedom": np.maximum(record / (6 * whole), 1.0),
        # The end of the correlation is looked for up to half of half a member.
        "more": float(np.max(40 * whole / record, initial=1.1)),
    }
    return (
        Measured(value=np.abs(shift), error=np.sqrt(8 * time / record), **known),
        Measured(value=factor, error=factor * np.sqrt(8 * squared / record), **known),
        Measured(
            value=np.abs(slope) / deviation,
            error=np.sqrt(24 * time / record),
            **known,
        ),
    )


def _straight(part):
    """Series less the line through all members."""
    ramp = np.linspace(-1, 1, part.shape[1])
    centred = part - part.mean(axis=(0, 1))
    slope = np.einsum("t,mtn->n", ramp, centred) / (len(part) * np.sum(ramp**2))
    return centred - ramp[:, np.newaxis] * slope


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
