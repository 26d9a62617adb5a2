"""Whether half the time step gives a reduced model the same statistics.

The rule for the step is about the equation; this is about the run: a short one
at half the step goes on from where the long one ended, and its means and
variances are set beside those of the long one.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.stats import norm

from eddyshed.solver.quantities import format_quantity

from .statistics.estimate import Estimate
from .statistics.resampling import moments

LEVEL = 0.01  # of a false alarm, over all modes and quantities together


@dataclass(frozen=True, slots=True, kw_only=True)
class StepCheck:
    """The quantity that half the step changes most, by its standard error.

    Attributes
    ----------
    step : float
        Of the run that is scored [s]; the check takes half of it.
    quantity : str
        ``mean``, in standard deviations, or ``variance``, as the logarithm of the
        ratio.
    mode : int
        Which mode.
    difference, error : float
        Half the step less the whole; standard error, from both runs.
    compared : int
        Numbers that were compared.
    agrees : bool
        Whether no difference is significant at one percent, with Bonferroni's
        correction for how many there are.
    """

    step: float
    quantity: str
    mode: int
    difference: float
    error: float
    compared: int
    agrees: bool

    def sentence(self, labels: tuple[str, ...]) -> str:
        """What the check found, in words."""
        found = Estimate(self.difference, self.error)
        what = {"mean": "standard deviations", "variance": "in its logarithm"}
        words = f"{self.quantity} of {labels[self.mode]} by {found} "
        words += what[self.quantity]
        step = format_quantity(self.step, "s")
        if not math.isfinite(self.error):
            return (
                f"half the step of {step}: the runs are too short to tell whether it "
                "changes anything"
            )
        if self.agrees:
            return (
                f"half the step of {step} changes nothing beyond sampling (most the "
                f"{words})"
            )
        return (
            f"half the step of {step} changes the {words}: the step is too long, or "
            "the model drifts, and its scores hold that error"
        )


def compare_steps(
    whole: np.ndarray,
    half: np.ndarray,
    *,
    interval: float,
    step: float,
    rng: np.random.Generator,
) -> StepCheck:
    """Compare the statistics of two runs of a model.

    Parameters
    ----------
    whole, half : ndarray, shape (member, time, mode)
        Series at the step and at half of it; no mode is constant.
    interval : float
        Between their records [s].
    step : float
        The step [s].
    rng : numpy.random.Generator
        For the bootstrap.

    Returns
    -------
    StepCheck
    """
    a, b = (moments(series, interval, rng=rng) for series in (whole, half))
    deviation = np.sqrt(a.variance.value)
    difference = np.stack(
        [
            (b.mean.value - a.mean.value) / deviation,
            np.log(b.variance.value / a.variance.value),
        ]
    )
    error = np.stack(
        [
            np.hypot(a.mean.error, b.mean.error) / deviation,
            np.hypot(
                a.variance.error / a.variance.value, b.variance.error / b.variance.value
            ),
        ]
    )
    z = np.abs(difference) / error
    quantity, mode = np.unravel_index(int(np.argmax(z)), z.shape)
    bound = norm.isf(LEVEL / (2 * z.size))
    return StepCheck(
        step=step,
        quantity=("mean", "variance")[quantity],
        mode=int(mode),
        difference=float(difference[quantity, mode]),
        error=float(error[quantity, mode]),
        compared=z.size,
        agrees=bool(z.max() < bound),
    )
