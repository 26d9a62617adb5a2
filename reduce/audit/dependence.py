"""Whether the unresolved modes know of the resolved ones."""

from __future__ import annotations

import numpy as np

from .batches import Batches
from .findings import Assumption, Measured

MEAN = Assumption(
    name="dependence: mean",
    sentence="The mean of the unresolved modes does not depend on the resolved state.",
    closures=("coloured", "white", "residual"),
    statistic="share of the unresolved variance that a quadratic function of the "
    "resolved state explains",
    setting="dependence",
    sense="at most",
    meaning="part of what was to be noise is a function of the resolved state: expect "
    "wrong means and wrong variances together",
    remedy="keep the modes that follow the resolved ones",
)
ENERGY = Assumption(
    name="dependence: variance",
    sentence="The energy of the unresolved modes does not depend on the resolved "
    "state.",
    closures=("coloured", "white", "residual"),
    statistic="share of the variance of the unresolved energy that a quadratic "
    "function of the resolved state explains",
    setting="energy_dependence",
    sense="at most",
    meaning="the noise should be stronger in some states than in others",
    remedy="a closure whose noise the resolved modes modulate (coloured) takes part "
    "of it in",
    votes=False,
)


def quadratic_features(x: np.ndarray) -> np.ndarray:
    """X and its products, less their means, in standard deviations: (time, feature)."""
    first, second = np.triu_indices(x.shape[1])
    features = np.concatenate([x, x[:, first] * x[:, second]], axis=1)
    features = features - features.mean(axis=0)
    spread = features.std(axis=0)
    return features[:, spread > 0] / spread[spread > 0]


def explained(
    x: np.ndarray, target: np.ndarray, batches: Batches, place: str
) -> Measured:
    """Share of the variance of a target that x explains, out of sample.

    Parameters
    ----------
    x : ndarray, shape (time, nx)
    target : ndarray, shape (time, m)
    batches : Batches
        Each is predicted by a regression on all others.
    place : str
        Name of the target.

    Notes
    -----
    Of p coefficients and n independent values, a regression explains ``p / n``
    too much of what it was fitted to and ``p / n`` too little of what it was not;
    the mean of both shares is shown. Half their difference goes into the error:
    without it a short record would seem to know.
    """
    features = quadratic_features(x)
    target = target - target.mean(axis=0)
    parts = np.array_split(np.arange(len(x)), max(2, batches.number))
    ridge = 1e-10 * len(x) * np.eye(features.shape[1])
    grams = np.array([features[p].T @ features[p] for p in parts])
    crosses = np.array([features[p].T @ target[p] for p in parts])
    gram, cross = grams.sum(axis=0), crosses.sum(axis=0)
    whole = np.linalg.solve(gram + ridge, cross)
    rows = []
    for part, one, other in zip(parts, grams, crosses, strict=True):
        slope = np.linalg.solve(gram - one + ridge, cross - other)
        truth = target[part]
        outside = np.sum((truth - features[part] @ slope) ** 2)
        inside = np.sum((truth - features[part] @ whole) ** 2)
        rows.append([outside, inside, np.sum(truth**2)])
    rows = np.array(rows)

    def share(sums):
        return np.array([1 - (sums[0] + sums[1]) / (2 * sums[2])])

    value, error = batches.jackknife(rows, np.ones(len(rows)), share)
    total = rows.sum(axis=0)
    optimism = (total[0] - total[1]) / total[2] / 2
    return Measured(
        value=value,
        error=np.hypot(error, optimism),
        places=[place],
        freedom=batches.freedom,
        more=batches.more,
    )
