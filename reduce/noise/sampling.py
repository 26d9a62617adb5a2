"""Whether a record is long enough, and sampled well enough, for a fit."""

from __future__ import annotations

import math
import operator

import numpy as np

from eddyshed.solver.errors import DataError

from ..statistics.correlation import integral_time
from ..statistics.jackknife import jackknife_error
from ..statistics.series import checked_step
from .replicates import Replicates

WINDOW_TIMES = 8  # integral times in the default window
FEWEST_BATCHES = 4  # a scatter of fewer is no error
SHORTEST_WINDOW = 4  # samples; fewer are no integral
FEWEST_WINDOWS = 20  # in a record: integrals are then known to a quarter
FEWEST_TIMES = 10  # e-folding times in a record: a rate is then known to a half
FINEST = 1.5  # rate at twice the lag over that at the lag: 2 if smooth, 1 if not


def window_rule(times: np.ndarray, variances: np.ndarray, step: float) -> float:
    """Choose the window of a fit: eight mean integral times, at least four steps.

    Parameters
    ----------
    times : array_like, shape (mode,)
        Integral times [s]; see `eddyshed.reduce.statistics.correlation.integral_time`.
    variances : array_like, shape (mode,)
        Weights of the mean: what carries the energy sets the window.
    step : float
        Time between samples [s].

    Returns
    -------
    float
        Length of the window [s].

    Raises
    ------
    DataError
        If a time or variance is negative or not finite, or shapes differ.

    Notes
    -----
    A window of w integral times leaves a bias of about ``1 / w`` before it is
    corrected, and a relative standard error of about ``sqrt(4 w / 3 N)`` for a
    record of N integral times (the Bartlett estimate at frequency zero). At
    eight the first is small enough to correct without trusting the shape of
    the correlation function, and a longer window costs precision.
    """
    step = checked_step(step, "window rule")
    times, variances = np.asarray(times, float), np.asarray(variances, float)
    if times.shape != variances.shape or times.ndim != 1:
        message = (
            f"window rule: times of shape {times.shape} and variances of shape "
            f"{variances.shape}, allowed are two arrays of shape (mode,)"
        )
        raise DataError(message)
    if not all((np.isfinite(x) & (x >= 0)).all() for x in (times, variances)):
        message = (
            "window rule: a time or variance is negative or not finite, allowed are "
            "numbers of zero or more; take both from one series"
        )
        raise DataError(message)
    total = variances.sum()
    mean = float(times @ variances / total) if total > 0 else 0.0
    return max(WINDOW_TIMES * mean, SHORTEST_WINDOW * step)


def longest_lag(
    series: np.ndarray,
    step: float,
    method: str,
    window: float | None,
    lag: float | None,
    where: str,
) -> tuple[int, list[str]]:
    """Longest lag that the method looks at, in samples, and what to say of it."""
    members, times, size = series.shape
    for name, given, users in (
        ("window", window, ("integral", "product")),
        ("lag", lag, ("regression",)),
    ):
        if given is not None and method not in users:
            message = (
                f'{where}: a {name} of {given} s with method "{method}", allowed is '
                f"one with {' and '.join(users)} only; leave it out"
            )
            raise DataError(message)
    if method == "likelihood":
        return 1, []
    if method == "regression":
        lags = round(lag / step) if lag and math.isfinite(lag) else 0
        if not 1 <= lags <= times // 4:
            message = (
                f"{where}: a lag of {lag} s with a step of {step:.6g} s and members of "
                f"{times} samples, allowed are 1 step to a quarter of a member; a "
                "correlation time or less does well"
            )
            raise DataError(message)
        return lags, []
    if window is not None:
        return _checked_window(series, step, window, where), []
    longest = min(members * times // FEWEST_WINDOWS, times // 2)
    if not size:
        return SHORTEST_WINDOW, []
    rule = window_rule(integral_time(series, step).value, series.var(axis=(0, 1)), step)
    if rule <= (longest + 0.5) * step:
        return _checked_window(series, step, rule, where), []
    if rule > WINDOW_TIMES * longest * step:
        message = (
            f"{where}: a record of {members * times * WINDOW_TIMES * step / rule:.3g} "
            f"integral times, allowed are {FEWEST_WINDOWS} or more; run on, or give a "
            "window, or, if the series is not smooth, use the likelihood"
        )
        raise DataError(message)
    lags = _checked_window(series, step, longest * step, where)
    return lags, [
        f"the record is too short for a window of {WINDOW_TIMES} integral times: it is "
        f"{WINDOW_TIMES * lags * step / rule:.2g} of them, and the rates rest more on "
        "the shape of the correlation"
    ]


def _checked_window(series: np.ndarray, step: float, window: float, where: str) -> int:
    """Return the window in samples, or raise DataError if it does not fit."""
    if not (math.isfinite(window) and window >= (SHORTEST_WINDOW - 0.5) * step):
        message = (
            f"{where}: a window of {window} s with a step of {step:.6g} s, allowed are "
            f"{SHORTEST_WINDOW} steps or more; lengthen the window or sample more often"
        )
        raise DataError(message)
    lags = round(window / step)
    members, times, _ = series.shape
    if members * times < FEWEST_WINDOWS * lags or times < 2 * lags:
        message = (
            f"{where}: {members} members of {times} samples with a window of {lags} "
            f"samples, allowed are {FEWEST_WINDOWS} windows in all and 2 in each "
            f"member; run on to {max(math.ceil(FEWEST_WINDOWS / members), 2) * lags} "
            "samples or shorten the window"
        )
        raise DataError(message)
    return lags


def checked_batches(series: np.ndarray, batches: int, lags: int, where: str) -> int:
    """Return the number of batches, or raise DataError if it does not fit."""
    batches = operator.index(batches)
    most = series.shape[0] * series.shape[1] // lags
    if not FEWEST_BATCHES <= batches <= most:
        message = (
            f"{where}: {batches} batches, allowed are {FEWEST_BATCHES} to {most} (one "
            "window in each); 20 do well"
        )
        raise DataError(message)
    return batches


def check_sampling(fit: Replicates, step: float, where: str) -> None:
    """Raise DataError if the energy-carrying coordinates change within a step."""
    variance = fit.variance[0]
    if not variance.size:
        return
    raw_rate = np.hypot(fit.raw_decay[0], fit.raw_frequency[0])
    rate = float(variance @ raw_rate / variance.sum())
    if rate * step > 1:
        message = (
            f"{where}: a step of {step:.4g} s with an energy-weighted rate of "
            f"{rate:.4g} s-1 or more, allowed is a step of {1 / rate:.4g} s at most; "
            f"{0.3 / rate:.2g} s would do well"
        )
        raise DataError(message)


def check_lag(fit: Replicates, lag: float, record: float, where: str) -> None:
    """Raise DataError unless a rate from this lag says something of others.

    A decay of over one in a lag is lost in the noise of the correlation. The
    correlation of a smooth series falls with the square of the lag, so that
    its rate doubles with the lag: this is no rate.
    """
    variance = fit.variance[0] / fit.variance[0].sum()
    rate = float(fit.raw_decay[0] @ variance)
    if rate * lag > 1:
        message = (
            f"{where}: a lag of {lag:.4g} s with an energy-weighted decay of "
            f"{rate:.4g} s-1, allowed is a lag of {1 / rate:.4g} s at most; sample "
            "more often, or use a shorter lag"
        )
        raise DataError(message)
    if rate * record < FEWEST_TIMES:
        message = (
            f"{where}: a record of {rate * record:.3g} e-folding times (by energy), "
            f"allowed are {FEWEST_TIMES} or more: the rate is too high by four over "
            "the record on average, and not known; run on"
        )
        raise DataError(message)
    excess = (fit.double_window_decay - FINEST * fit.raw_decay) @ variance
    if excess[0] > 3 * jackknife_error(excess):
        wide = float(fit.double_window_decay[0] @ variance)
        message = (
            f"{where}: at a lag of {lag:.4g} s the energy-weighted decay is {rate:.4g} "
            f"s-1, at twice the lag {wide:.4g} s-1, allowed is a change by chance or "
            f"by a factor below {FINEST:g}: the series is smooth at this lag, or "
            'turns, and the rate would be that of the lag; use method = "integral", a '
            "longer lag (regression), or partners if it is a wave"
        )
        raise DataError(message)
