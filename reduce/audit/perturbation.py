"""Whether the resolved state only perturbs the fast operator, and how far.

The fast operator is what moves the unresolved modes at a fixed resolved
state: ``2 B212(x, .) - rate``. Derivations in the limit of fast noise expand
in its first part over its second.
"""

from __future__ import annotations

import numpy as np

from ..noise.fit import NoiseFit
from ..operators import Operators
from .batches import Batches
from .findings import Assumption, Measured

DERIVED = ("coloured", "white")
KAPPA = Assumption(
    name="perturbation: operator",
    sentence="The resolved state is a small perturbation of the fast operator.",
    closures=DERIVED,
    statistic="rms norm of 2 B212(x, .) over the norm of the fitted rate (Frobenius)",
    setting="operator_ratio",
    sense="at most",
    meaning="the resolved modes, not the noise, decide how the unresolved ones decay: "
    "expect variances to be off by factors",
    remedy="keep the modes that the resolved ones turn or stretch most, or fewer "
    "resolved modes of large amplitude",
    logarithmic=True,
)
FORCING = Assumption(
    name="perturbation: forcing",
    sentence="The resolved state hardly forces the unresolved modes.",
    closures=DERIVED,
    statistic="rms of A21 x + B211(x, x), less its mean, over that of the unresolved "
    "tendency",
    setting="forcing_ratio",
    sense="at most",
    meaning="the unresolved modes are driven, not noise: expect variances to be off "
    "by factors",
    remedy="keep the modes that are driven",
    logarithmic=True,
)
ABSCISSA = Assumption(
    name="perturbation: growth",
    sentence="The fast operator damps along the truth.",
    closures=DERIVED,
    statistic="share of time in which the numerical abscissa of 2 B212(x, .) - rate is "
    "positive",
    setting="growth_share",
    sense="at most",
    meaning="unresolved modes can grow for a while on the resolved state; the usual "
    "derivations drop this",
    remedy="look at the size of the perturbation, which predicts better",
    votes=False,
)


def operator_ratio(
    x: np.ndarray, operators: Operators, noise: NoiseFit, batches: Batches
) -> Measured:
    """Size of ``2 B212(x, .)`` over that of the rate; x flat in time."""
    size = float(np.linalg.norm(noise.process.rate))
    flat = operators.B212.transpose(1, 0, 2).reshape(operators.nx, -1)
    gram = 4 * flat @ flat.T
    squares = np.einsum("ti,ij,tj->t", x, gram, x)[:, np.newaxis]

    def ratio(mean):
        return np.sqrt(np.maximum(mean, 0.0)) / size

    value, error = batches.jackknife(*batches.means(squares), ratio)
    weights = noise.process.rate / size**2
    known = np.where(np.isfinite(noise.rate_error), noise.rate_error, 0.0)
    relative = np.sqrt(np.sum((weights * known) ** 2))
    return Measured(
        value=value,
        error=np.hypot(error, value * relative),
        places=["all modes"],
        freedom=batches.freedom,
        more=batches.more,
    )


def ratio_of_sizes(
    top: np.ndarray, bottom: np.ndarray, batches: Batches, place: str
) -> Measured:
    """Root mean square of one series over that of another, less their means.

    Parameters
    ----------
    top, bottom : ndarray, shape (time, ...)
        Of equal shapes, or of any that are summed over all but time.
    batches : Batches
    place : str
    """

    def squares(values):
        values = (values - values.mean(axis=0)).reshape(len(values), -1)
        return np.sum(values**2, axis=1)

    both = np.stack([squares(top), squares(bottom)], axis=-1)

    def ratio(mean):
        return np.sqrt(mean[:1] / max(mean[1], 1e-300))

    value, error = batches.jackknife(*batches.means(both), ratio)
    return Measured(
        value=value,
        error=error,
        places=[place],
        freedom=batches.freedom,
        more=batches.more,
    )


def numerical_abscissa(
    x: np.ndarray, operators: Operators, rate: np.ndarray
) -> np.ndarray:
    """Largest growth rate at once of ``2 B212(x, .) - rate``, for each x [s-1].

    The largest eigenvalue of its symmetric part (L. N. Trefethen and M. Embree
    2005, Spectra and Pseudospectra, ch. 17).
    """
    result = np.empty(len(x))
    halves = operators.B212.transpose(1, 0, 2)
    halves = halves + halves.transpose(0, 2, 1)
    fixed = (rate + rate.T) / 2
    for k, one in enumerate(x):
        result[k] = np.linalg.eigvalsh(np.tensordot(one, halves, axes=1) - fixed)[-1]
    return result


def spectral_abscissa(
    x: np.ndarray, operators: Operators, rate: np.ndarray
) -> np.ndarray:
    """Largest growth rate in the long run, at fixed x, for each x [s-1]."""
    tensor = 2 * operators.B212.transpose(1, 0, 2)
    return np.array(
        [
            np.linalg.eigvals(np.tensordot(one, tensor, axes=1) - rate).real.max()
            for one in x
        ]
    )


def growth_share(abscissa: np.ndarray, batches: Batches) -> Measured:
    """Share of the values that are positive."""
    positive = (abscissa > 0).astype(float)[:, np.newaxis]
    value, error = batches.jackknife(*batches.means(positive), lambda mean: mean)
    # No event in n independent values is a share of up to 3 / n (the rule of three).
    least = 1.5 / max(1, batches.number)
    if np.isclose(value[0], np.round(value[0])):
        error = np.maximum(error, least / 2) if batches.number else error
    return Measured(
        value=value,
        error=error,
        places=["all modes"],
        freedom=batches.freedom,
        more=batches.more,
    )
