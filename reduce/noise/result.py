"""What a fit of Ornstein-Uhlenbeck noise hands over."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from eddyshed.solver.errors import DataError

from ..statistics.estimate import Estimate
from .ornstein_uhlenbeck import OrnsteinUhlenbeck

POSITIVE = ("decay", "variance", "noise", "eigen_decay")
SIGNED = ("frequency", "eigen_frequency")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False, repr=False)
class NoiseFit:
    """An Ornstein-Uhlenbeck process fitted to a series, and how well it is known.

    Errors are from leaving out one batch after the other; see `interval`.

    Parameters
    ----------
    process : OrnsteinUhlenbeck
        The fit.
    method : {"integral", "product", "likelihood", "regression"}
        What it was fitted by.
    structure : {"real diagonal", "complex diagonal", "blocks", "full"}
        Form of the rate matrix.
    window : float
        Longest lag that the fit has looked at [s], whole steps: the window of
        the integral, the lag of the regression, or one step.
    step : float
        Time between samples [s].
    record : float
        Length of all members together [s].
    batches : int
        Number of parts of the record that the errors come from.
    decay : Estimate, shape (n,)
        Diagonal of the rate matrix [s-1].
    frequency : Estimate, shape (n,)
        Frequency w [s-1] of the pair that a coordinate belongs to, equal for
        both: the pair turns as ``exp(-i w t)``, the coordinate of lower index
        being the real part. Zero for an unpaired coordinate, and in matrices.
    variance : Estimate, shape (n,)
        Diagonal of the covariance.
    noise : Estimate, shape (n,)
        Diagonal of the diffusion: the variance that the noise feeds in a second.
    eigen_decay, eigen_frequency : Estimate, shape (n,)
        Real and imaginary parts of the eigenvalues of the rate matrix [s-1]:
        what decays and turns by itself. In a diagonal these are `decay` and
        plus and minus `frequency`, in the order of the coordinates; in a
        matrix they come by rising decay.
    rate_error : ndarray, shape (n, n)
        Standard errors of all entries of the rate matrix.
    raw_decay, raw_frequency : Estimate, shape (n,)
        Before the correction for the window, or for the bias of a regression.
    double_window_decay : Estimate, shape (n,)
        The decay from a window, or lag, of twice the length. It differs from
        `decay` by chance only, if the series is an Ornstein-Uhlenbeck
        process. NaN where the lag matrix at twice the lag has no logarithm.
    uncorrected : ndarray of bool, shape (n,)
        Coordinates whose rate could not be corrected and is the raw one.
    repair : float
        Share of the noise variance that had to be changed for it to be
        positive: 0 if nothing had to, at most 0.05.
    notes : tuple of str
        What to know before using the fit.
    """

    process: OrnsteinUhlenbeck
    method: str
    structure: str
    window: float
    step: float
    record: float
    batches: int
    decay: Estimate
    frequency: Estimate
    variance: Estimate
    noise: Estimate
    eigen_decay: Estimate
    eigen_frequency: Estimate
    rate_error: np.ndarray
    raw_decay: Estimate
    raw_frequency: Estimate
    double_window_decay: Estimate
    uncorrected: np.ndarray
    repair: float
    notes: tuple[str, ...]

    def __repr__(self):
        return (
            f"NoiseFit({self.method}, {self.structure}, window {self.window:.4g} s, "
            f"{self.process!r}, {len(self.notes)} notes)"
        )

    def interval(
        self, name: str, confidence: float = 0.95
    ) -> tuple[np.ndarray, np.ndarray]:
        """Confidence interval of an estimate.

        Parameters
        ----------
        name : str
            "decay", "frequency", "variance", "noise", "eigen_decay" or
            "eigen_frequency".
        confidence : float
            Share of cases in which the interval holds the true value.

        Returns
        -------
        low, high : ndarray, shape (n,)

        Raises
        ------
        DataError
            If there is no such estimate or confidence.

        Notes
        -----
        By Student's quantile. A batch of length b holds about ``g b``
        independent squares of a series of decay g, whose sum has an excess
        kurtosis of ``12 / (g b)``: the scatter of so few squares has not
        ``batches - 1`` degrees of freedom but
        ``2 / (2 / (batches - 1) + 12 / (g b batches))``.

        The interval of a decay or variance lies about its logarithm: a record
        that underrates it underrates its error as well, and intervals about
        the value miss the truth above more often than they should.
        """
        if name not in POSITIVE + SIGNED or not 0 < confidence < 1:
            message = (
                f'interval of "{name}" with confidence {confidence}, allowed are '
                f"{', '.join(POSITIVE + SIGNED)} and a confidence between 0 and 1"
            )
            raise DataError(message)
        found = getattr(self, name)
        decay = self.eigen_decay if name.startswith("eigen") else self.decay
        squares = np.maximum(decay.value * self.record / self.batches, 1.0)
        freedom = 2 / (2 / (self.batches - 1) + 12 / (squares * self.batches))
        times = special.stdtrit(freedom, (1 + confidence) / 2)
        if name in SIGNED:
            return found.value - times * found.error, found.value + times * found.error
        factor = np.exp(times * found.error / found.value)
        return found.value / factor, found.value * factor
