"""Whether the fitted noise is one, and whether its structure is adequate."""

from __future__ import annotations

import numpy as np

from ..noise.fit import NoiseFit
from .batches import Batches
from .findings import Assumption, Measured

DERIVED = ("coloured", "white")
DECAY = Assumption(
    name="noise: decay",
    sentence="Every fitted mode of the noise decays.",
    closures=DERIVED,
    statistic="fitted decay rate of the mode over the median of all",
    setting="decay",
    sense="at least",
    meaning="a rate that may as well be zero makes noise that never forgets",
    remedy="run a longer truth, or lower [unresolved] variance",
)
REPAIR = Assumption(
    name="noise: repair",
    sentence="The fit is a noise: it asks for no negative variance.",
    closures=DERIVED,
    statistic="share of the noise variance that was changed to make it positive (a "
    "fact of this fit, not an estimate, so without an error)",
    setting="repair",
    sense="at most",
    meaning="the fitted rate and the covariance contradict each other",
    remedy="take a diagonal fit, or a longer truth",
)
STRUCTURE = Assumption(
    name="noise: structure",
    sentence="The unresolved modes are independent of one another, as a diagonal fit "
    "has them.",
    closures=DERIVED,
    statistic="share of the squared covariance, at lags of nought and one correlation "
    "time, between modes that the fit keeps apart",
    setting="structure",
    sense="at most",
    meaning="products of different unresolved modes have a mean and a memory that "
    "the noise lacks",
    remedy="fit correlated modes together, or choose empirical orthogonal functions",
    votes=False,
)


def decay(noise: NoiseFit, partners: np.ndarray, labels) -> Measured:
    """Fitted decay rates, relative to their median, one for each unit."""
    first = np.flatnonzero((partners < 0) | (np.arange(len(partners)) < partners))
    scale = float(np.median(np.abs(noise.decay.value[first])))
    return Measured(
        value=noise.decay.value[first] / scale,
        error=noise.decay.error[first] / scale,
        places=[labels[k] for k in first],
        freedom=max(1, noise.batches - 1),
    )


def repair(noise: NoiseFit) -> Measured:
    """What the fit had to change, which is known exactly."""
    return Measured(
        value=np.array([noise.repair]), error=np.zeros(1), places=["all modes"]
    )


def structure(
    y: np.ndarray, lag: int, partners: np.ndarray, batches: Batches
) -> Measured:
    """Share of the squared covariance that a diagonal fit leaves out.

    Parameters
    ----------
    y : ndarray, shape (time, ny)
        At consecutive records.
    lag : int
        In records.
    partners : ndarray of int, shape (ny,)
    batches : Batches

    Notes
    -----
    Squares of sample covariances are too large by their variance. Products of the
    covariances of different batches are not: with S the sum over n batches of a
    covariance and Q that of its squares, ``(S**2 - Q) / (n (n - 1))``.
    """
    y = y - y.mean(axis=0)
    count = y.shape[1]
    apart = ~np.eye(count, dtype=bool)
    paired = np.flatnonzero(partners >= 0)
    apart[paired, partners[paired]] = False
    parts = np.array_split(y, max(2, batches.number))
    covariances = np.array(
        [
            [p.T @ p / len(p), p[lag:].T @ p[: len(p) - lag] / max(1, len(p) - lag)]
            for p in parts
        ]
    )
    total, squares = covariances.sum(axis=0), (covariances**2).sum(axis=0)

    def share(total, squares, number):
        cross = (total**2 - squares) / (number * (number - 1))
        return float(cross[:, apart].sum() / max(cross.sum(), 1e-300))

    number = len(parts)
    value, error = share(total, squares, number), np.inf
    if batches.number:
        left = [share(total - c, squares - c**2, number - 1) for c in covariances]
        error = batches.widening * np.sqrt((number - 1) * np.var(left))
    return Measured(
        value=np.array([value]),
        error=np.array([error]),
        places=["all modes"],
        freedom=batches.freedom,
        more=batches.more,
    )
