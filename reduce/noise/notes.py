"""What a reader must know before using a fit of an Ornstein-Uhlenbeck process."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy import special

from .integral_matching import Replicates
from .lag_integrals import jackknife_error

REMARKABLE = 3.0  # standard errors
CHANCE = 0.01  # probability of more, as measured on processes that are what they seem
SAMPLES_PER_COORDINATE = 50  # effective samples that a full matrix asks for


def notes_on(
    fit: Replicates,
    structure: str,
    window: float,
    step: float,
    record: float,
    names: Sequence[str],
) -> tuple[str, ...]:
    """Say which coordinates must not be taken as they stand, and why.

    Parameters
    ----------
    fit : Replicates
        The fit.
    structure : {"diagonal", "full"}
        Form of its rate matrix.
    window, step, record : float
        Length of the window of the fit, time between samples and length of
        the record [s].
    names : sequence of str
        Names of the coordinates.

    Returns
    -------
    tuple of str
        One sentence for each matter; none if all is well.
    """
    corrected = ~fit.uncorrected
    raw_rate = np.hypot(fit.raw_decay[0], fit.raw_frequency[0])
    findings = (
        (
            fit.uncorrected,
            "the rate has no correction for the window and is the raw one; use a "
            "longer window, or a shorter step if neighbouring samples are unrelated",
        ),
        (
            corrected & (fit.decay[0] * window < 1),
            "the window is shorter than one e-folding time, so that the rate rests on "
            "the shape of the correlation, not on its integral; use a longer window",
        ),
        (
            corrected & _remarkable(fit.double_window_decay - fit.decay, fit.unit),
            f"the decay from twice the window differs by over {REMARKABLE:g} standard "
            "errors, which chance does not explain: the correlation is not that of an "
            "Ornstein-Uhlenbeck process",
        ),
        (
            _remarkable(fit.imbalance, fit.unit),
            f"the two parts of a pair differ in variance by over {REMARKABLE:g} "
            "standard errors, which chance does not explain; they are given their mean",
        ),
        (
            raw_rate * step > 1,
            "the series turns or decays within one step, so that its rate is a guess; "
            "use a shorter step",
        ),
    )
    notes = tuple(
        f"{_listed(marked, names)}: {text}" for marked, text in findings if marked.any()
    )
    if structure == "diagonal" or not names:
        return notes
    time = (1 / np.linalg.eigvals(fit.rate).real).mean()
    samples = record / time / len(names)
    if samples < SAMPLES_PER_COORDINATE:
        notes += (
            f"the record holds {samples:.3g} effective samples for each coordinate of "
            f"a full matrix, which asks for {SAMPLES_PER_COORDINATE}; fit a diagonal, "
            "or fewer coordinates",
        )
    return notes


def _remarkable(replicates: np.ndarray, unit: np.ndarray) -> np.ndarray:
    """Mark coordinates that are farther from zero, or more often, than by chance.

    If more units (pairs, single coordinates) are beyond three standard errors
    than chance explains, these are marked; else those beyond what the farthest
    of so many would be by chance (Bonferroni, Student's distribution).
    """
    error = jackknife_error(replicates)
    distance = np.abs(replicates[0]) / np.where(error > 0, error, np.inf)
    far = distance > REMARKABLE
    number = np.unique(unit).size
    seen = np.unique(unit[far]).size
    if seen and special.bdtrc(seen - 1, number, CHANCE) < CHANCE:
        return far
    farthest = special.stdtrit(len(replicates) - 2, 1 - CHANCE / (2 * max(number, 1)))
    return distance > max(farthest, REMARKABLE)


def _listed(marked: np.ndarray, names: Sequence[str]) -> str:
    """Name up to three of the marked coordinates, and count them."""
    which = np.flatnonzero(marked)
    listed = ", ".join(names[k] for k in which[:3])
    return f"{which.size} of {len(names)} coordinates ({listed}" + (
        ", ...)" if which.size > 3 else ")"
    )
