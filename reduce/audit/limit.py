"""Whether noise with memory and its limit without are the same closure here."""

from __future__ import annotations

import numpy as np

from eddyshed.solver.errors import DataError

from ..simulation import simulate, step_rule
from .findings import Assumption, Measured

MEMBERS = 16
TIMES = 100  # longest correlation times of the modes, all members together
SPIN_UP = 3  # of them for each member, before its record

LIMIT = Assumption(
    name="limit: white for coloured",
    sentence="The noise is quick enough for its limit without memory to do as well.",
    closures=("white",),
    statistic="|ln| of the variance of the white closure over that of the coloured "
    "one, both simulated",
    setting="limit_distance",
    sense="at most",
    meaning="the memory of the noise matters: what the white closure gets wrong is "
    "the limit, not the fit",
    remedy="take the coloured closure",
    source="simulation of both closures",
)


def limit_distance(
    models: dict, x: np.ndarray, step: float, time: float, labels, rng
) -> Measured:
    """Simulate both closures, and compare the variances of the modes.

    Parameters
    ----------
    models : dict of str to model
        ``coloured`` and ``white``.
    x : ndarray, shape (member, time, nx)
        States of the truth, to start from; all members together are no longer
        than it.
    step : float
        Between records [s].
    time : float
        Longest correlation time of the modes [s].
    labels : sequence of str
    rng : numpy.random.Generator

    Returns
    -------
    Measured
        Errors are from the scatter among members.

    Raises
    ------
    DataError
        If one of the two is not in use, or is lost on the way.
    """
    missing = [name for name in ("coloured", "white") if name not in models]
    if missing:
        message = (
            f"the {' and the '.join(missing)} closure "
            f"{'is' if len(missing) == 1 else 'are'} not in [closures] use"
        )
        raise DataError(message)
    flat = x.reshape(-1, x.shape[2])
    length = min(TIMES * time, len(flat) * step) / MEMBERS
    records, skip = max(8, int(length / step)), int(np.ceil(SPIN_UP * time / step))
    starts = flat[rng.integers(len(flat), size=MEMBERS)]
    value, relative = [], []
    for name in ("coloured", "white"):
        short, every = step_rule(models[name], flat.std(axis=0), interval=step)
        path = simulate(
            models[name],
            starts,
            step=short,
            n_steps=(skip + records) * every,
            every=every,
            streams=rng.spawn(MEMBERS),
            bound=100 * float(np.abs(flat).max()),
        )
        if path.lost:
            message = f"the {name} closure left the range of the truth 100 times over"
            raise DataError(message)
        series = path.series[:, skip + 1 :]
        variances = np.mean((series - series.mean(axis=(0, 1))) ** 2, axis=1)
        mean = variances.mean(axis=0)
        if np.any(mean <= 0):
            message = f"the {name} closure comes to rest"
            raise DataError(message)
        value.append(mean)
        relative.append(variances.std(axis=0, ddof=1) / np.sqrt(MEMBERS) / mean)
    return Measured(
        value=np.abs(np.log(value[1] / value[0])),
        error=np.hypot(*relative),
        places=labels,
        freedom=MEMBERS - 1,
    )
