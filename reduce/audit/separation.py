"""Whether the resolved modes are slower than what drives them."""

from __future__ import annotations

import numpy as np

from ..statistics.correlation import CROSSING, integral_time
from .findings import Assumption, Measured

SEPARATION = Assumption(
    name="separation",
    sentence="Each resolved mode changes more slowly than what drives it from the "
    "unresolved modes.",
    closures=("damped", "residual", "white"),
    statistic="correlation time of the mode over that of its coupling",
    setting="separation",
    sense="at least",
    meaning="noise without memory cannot be told from the mode itself: expect wrong "
    "correlation times and wrong correlations at short lags",
    remedy="keep fewer, slower modes, or take a closure that remembers (coloured)",
    logarithmic=True,
)


def separation(x: np.ndarray, unexplained: np.ndarray, step: float, labels) -> Measured:
    """Ratio of the correlation times of the modes and of what drives them.

    Parameters
    ----------
    x, unexplained : ndarray, shape (member, time, nx)
        The modes, and the coupling less its part linear in them.
    step : float
    labels : sequence of str

    Returns
    -------
    Measured

    Notes
    -----
    What the mean takes away lowers a sample correlation function by about
    ``2 t / T`` (one-sided integral time t, record T), and with it the integral up
    to three times t by ``8 t / T`` of itself, to first order (F. H. C. Marriott
    and J. A. Pope 1954, Biometrika 41:390); it is put back. The logarithm of the
    ratio is closer to a normal than the ratio, and its error has the degrees of
    freedom of a variance that is known as well, ``T / (6 t)``. Both times end at the
    same correlation of 0.05.
    """
    slow, fast = integral_time(x, step), integral_time(unexplained, step)
    length = x.shape[0] * x.shape[1] * step

    def whole(time):
        full = time.value / (1 - CROSSING)
        return time.value * (1 + 8 * full / length), time.error / time.value

    (upper, spread), (lower, other) = whole(slow), whole(fast)
    ratio = upper / lower
    slowest = np.maximum(slow.value, fast.value)
    # Half of the record is the longest lag that is looked at: 40 times and more.
    missing = float(np.max(40 * slowest / length, initial=1.1))
    return Measured(
        value=ratio,
        error=ratio * np.hypot(spread, other),
        freedom=length / (6 * slowest),
        places=labels,
        more=missing,
    )
