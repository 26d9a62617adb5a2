"""Gusts: patterns multiplied by Ornstein-Uhlenbeck processes in time.

A gust is no function of time, so it is not part of F: it pushes the state
while a step is made, with the mean that it has over the step. Its value now is
part of the run's state and so of every checkpoint.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

SERIES_BELOW = 0.5  # ratio of step to decorrelation time: above it no digits cancel


@dataclass(frozen=True, slots=True, kw_only=True)
class GustStep:
    """One step of unit-variance Ornstein-Uhlenbeck noise and of its mean over it.

    The value goes from x to ``decay x + d1 n1``, and its mean over the step is
    ``carry x + d2 n1 + d3 n2``, with n1, n2 independent standard normals.

    Attributes
    ----------
    decay, carry : float
        Of the value, in the next value and in the mean.
    value_normal : float
        d1
    mean_shared, mean_own : float
        d2, d3
    """

    decay: float
    carry: float
    value_normal: float
    mean_shared: float
    mean_own: float


def gust_step(ratio: float) -> GustStep:
    """Coefficients of one exact step.

    Parameters
    ----------
    ratio : float
        Step over decorrelation time.

    Returns
    -------
    GustStep

    Notes
    -----
    Value and integral are jointly normal; with x = ratio and a = exp(-x) the
    integral, in decorrelation times, has mean ``(1 - a) value``, variance
    ``2 x - 3 + 4 a - a^2`` and covariance ``(1 - a)^2`` with the next value
    (Gillespie 1996, Phys. Rev. E 54:2084).
    """
    x = ratio
    lost = -math.expm1(-x)  # 1 - a
    value_variance = -math.expm1(-2 * x)
    shared = lost**2 / math.sqrt(value_variance)
    own = _integral_variance(x) - shared**2
    return GustStep(
        decay=math.exp(-x),
        carry=lost / x,
        value_normal=math.sqrt(value_variance),
        mean_shared=shared / x,
        mean_own=math.sqrt(max(own, 0.0)) / x,
    )


def _integral_variance(x):
    """``2 x - 3 + 4 exp(-x) - exp(-2 x)``, which starts as 2 x^3 / 3."""
    if x >= SERIES_BELOW:
        return 2 * x + 4 * math.expm1(-x) - math.expm1(-2 * x)
    return math.fsum((-x) ** k * (4 - 2.0**k) / math.factorial(k) for k in range(3, 24))


class GustProcess:
    """A forcing of random strength: independent processes, one for each pattern.

    Parameters
    ----------
    patterns : ndarray, shape (n_patterns, size)
        Tendencies [state unit s-1] that are multiplied with processes of mean
        zero and variance one; or shape (size,) or (n,), see `where`.
    decorrelation : float
        e-folding time of each process's correlation [s].
    step : float
        Time step [s].
    rng : numpy.random.Generator
        The processes' own stream.
    where : ndarray of int, shape (n,), optional
        Coordinates with a process each; `patterns` then holds their standard
        deviations, shape (n,).

    Attributes
    ----------
    value : ndarray
        The processes now: from their stationary distribution at first.

    Notes
    -----
    Value and mean over a step are exact samples whatever the step is. The
    state feels the mean of each step, constant through it: what is lost is how
    the gust varies within a step, and the statistics of the state converge
    with weak order two.
    """

    def __init__(
        self,
        patterns: np.ndarray,
        decorrelation: float,
        step: float,
        rng: np.random.Generator,
        where: np.ndarray | None = None,
    ):
        self.rng = rng
        self._patterns = patterns
        self._where = where
        self._step = gust_step(step / decorrelation)
        self.value = rng.standard_normal(len(patterns))

    def add_push(self, push: np.ndarray) -> None:
        """Advance by a step, and add the mean tendency over it to `push`.

        Parameters
        ----------
        push : ndarray, shape (size,)
        """
        s = self._step
        first, second = self.rng.standard_normal((2, len(self.value)))
        mean = s.carry * self.value + s.mean_shared * first + s.mean_own * second
        self.value = s.decay * self.value + s.value_normal * first
        if self._where is None:
            push += mean @ self._patterns
        else:
            push[self._where] += self._patterns * mean
