"""Whether the noise is Gaussian: the coupling, the unresolved modes, their squares."""

from __future__ import annotations

import numpy as np

from ..statistics.correlation import integral_time
from ..statistics.resampling import central_moments, shape_of
from .batches import Batches
from .findings import Assumption, Measured

NOISY = ("residual", "coloured", "white")

TAILS = Assumption(
    name="normality: tails",
    sentence="What the unresolved modes do to the resolved ones is Gaussian: its "
    "tails.",
    closures=NOISY,
    statistic="kurtosis of the coupling less its part linear in the resolved state "
    "(3 for a normal)",
    setting="kurtosis",
    sense="at most",
    meaning="rare strong bursts are replaced by mild noise: expect extremes and "
    "fourth moments to be off",
    remedy="keep the modes that burst, or those that they feed on",
)
SYMMETRY = Assumption(
    name="normality: symmetry",
    sentence="What the unresolved modes do to the resolved ones is Gaussian: its "
    "symmetry.",
    closures=NOISY,
    statistic="absolute skewness of the coupling less its part linear in the resolved "
    "state (0 for a normal)",
    setting="skewness",
    sense="at most",
    meaning="pushes one way are stronger than the other way: expect skewed modes to "
    "be reproduced without their skewness",
    remedy="keep the modes that push one way",
    votes=False,
)
JOINT = Assumption(
    name="normality: all together",
    sentence="What the unresolved modes do to the resolved ones is jointly Gaussian.",
    closures=NOISY,
    statistic="mean fourth power of the Mahalanobis length of the coupling, over that "
    "of a normal (Mardia 1970, Biometrika 57:519)",
    setting="joint_kurtosis",
    sense="at most",
    meaning="bursts come in several modes at once, even if none has heavy tails alone",
    remedy="look at the tails mode by mode, and keep what bursts",
    votes=False,
)
UNRESOLVED = Assumption(
    name="normality: unresolved modes",
    sentence="The unresolved modes are Gaussian.",
    closures=("coloured", "white"),
    statistic="kurtosis of the unresolved modes, mean weighted by variance (3 for a "
    "normal)",
    setting="unresolved_kurtosis",
    sense="at most",
    meaning="the noise has the variance of the unresolved modes and not their extremes",
    remedy="look whether the coupling has heavy tails too: only that reaches x",
    votes=False,
)
FOURTH = Assumption(
    name="fourth moments",
    sentence="Products of unresolved modes vary as much as those of the fitted "
    "Gaussian noise.",
    closures=("coloured", "white"),
    statistic="|ln| of the variance of the quadratic coupling over that under the "
    "fitted noise (0 for a normal)",
    setting="fourth_moments",
    sense="at most",
    meaning="the quadratic coupling is replaced by one that is too strong or too weak, "
    "and the variance of the modes is off by as much",
    remedy="keep the modes with the largest products, or fit blocks of modes together",
)


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


def shape(
    series: np.ndarray, step: float, labels, rng: np.random.Generator
) -> tuple[Measured, Measured]:
    """Kurtosis and absolute skewness of each mode; see `shape_of` for their errors."""
    skewness, excess, size = shape_of(series, step, rng=rng)
    length = series.shape[0] * series.shape[1] * step
    known = {
        "places": labels,
        "freedom": np.maximum(size / 8, 1.0),
        "more": float(
            np.max(40 * integral_time(series, step).value / length, initial=1.1)
        ),
    }
    return (
        Measured(value=excess.value + 3, error=excess.error, **known),
        Measured(value=np.abs(skewness.value), error=skewness.error, **known),
    )


def mardia_ratio(rows: np.ndarray) -> float:
    """Mardia's kurtosis of rows in p dimensions, over ``p (p + 2)`` of a normal."""
    width = rows.shape[1]
    rows = rows - rows.mean(axis=0)
    inverse = np.linalg.pinv(rows.T @ rows / len(rows))
    lengths = np.sum((rows @ inverse) * rows, axis=1)
    return float(np.mean(lengths**2) / (width * (width + 2)))


def joint(series: np.ndarray, step: float) -> Measured:
    """Mardia's kurtosis over that of a normal (K. V. Mardia 1970, Biometrika 57:519).

    The record is whitened anew for each batch that is left out.
    """
    batches = Batches.of(series, step, "normality")
    flat = series.reshape(-1, series.shape[-1])
    replicates = [[mardia_ratio(flat)]]
    if batches.number:
        parts = np.array_split(np.arange(len(flat)), batches.number)
        replicates += [[mardia_ratio(np.delete(flat, part, axis=0))] for part in parts]
    return Measured(
        value=np.array(replicates[0]),
        error=batches.error(np.array(replicates)),
        places=["all modes"],
        freedom=batches.freedom,
        more=batches.more,
    )


def unresolved(y: np.ndarray, batches: Batches) -> Measured:
    """Mean kurtosis of the unresolved modes, weighted by variance; y flat in time."""
    centred = y - y.mean(axis=0)
    powers = np.stack([centred**k for k in (1, 2, 3, 4)], axis=-1)

    def weighted(means):
        _, variance, _, kurtosis = np.moveaxis(central_moments(means), -1, 0)
        return variance @ kurtosis / variance.sum()

    value, error = batches.jackknife(*batches.means(powers), weighted)
    return Measured(
        value=value,
        error=error,
        places=["all modes"],
        freedom=batches.freedom,
        more=batches.more,
    )


def fourth_moments(
    products: np.ndarray, expected: np.ndarray, batches: Batches, labels
) -> Measured:
    """Variance of the quadratic coupling against that of Gaussian noise.

    Parameters
    ----------
    products : ndarray, shape (time, nx)
        ``B122(y, y)`` along the truth.
    expected : ndarray, shape (nx,)
        Its variance under the fitted noise, ``2 tr(M C M C)`` (L. Isserlis 1918,
        Biometrika 12:134).
    batches : Batches
    labels : sequence of str
    """
    scale = np.sqrt(np.where(expected > 0, expected, 1.0))
    scaled = (products - products.mean(axis=0)) / scale
    pairs = np.stack([scaled, scaled**2], axis=-1)

    def ratio(means):
        return np.log(np.maximum(means[:, 1] - means[:, 0] ** 2, 1e-300))

    value, error = batches.jackknife(*batches.means(pairs), ratio)
    return Measured(
        value=np.abs(value),
        error=error,
        places=labels,
        freedom=batches.freedom,
        more=batches.more,
    )
