"""What a reader must know before using a fit of an Ornstein-Uhlenbeck process."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy import special

from ..statistics.jackknife import jackknife_error
from .replicates import Replicates
from .structures import ENOUGH

REMARKABLE = 3.0  # standard errors
BEYOND = 0.03  # share of processes that are what they seem, on 20 windows, with more
CHANCE = 0.01  # probability of a false remark


def notes_on(
    fit: Replicates,
    method: str,
    blocks: list[np.ndarray],
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
    method : str
        What it was fitted by.
    blocks : list of ndarray of int
        Coordinates of each matrix; none in a diagonal.
    window, step, record : float
        Longest lag of the fit, time between samples and length of the
        record [s].
    names : sequence of str
        Names of the coordinates.

    Returns
    -------
    tuple of str
        One sentence for each matter; none if all is well.
    """
    lagged = method in ("likelihood", "regression")
    uncorrected = (
        "the bias of the rate could not be taken off; use a longer record"
        if lagged
        else "the rate has no correction for the window and is the raw one; use a "
        "longer window, or a shorter step if neighbouring samples are unrelated"
    )
    twice = "lag" if lagged else "window"
    corrected = ~fit.uncorrected
    raw_rate = np.hypot(fit.raw_decay[0], fit.raw_frequency[0])
    findings = (
        (fit.uncorrected, uncorrected),
        (
            corrected & (fit.decay[0] * window < 1) & (not lagged),
            "the window is shorter than one e-folding time, so that the rate rests on "
            "the shape of the correlation, not on its integral; use a longer window",
        ),
        (
            corrected & _remarkable(fit.double_window_decay - fit.decay, fit.unit),
            f"the decay from twice the {twice} differs by over {REMARKABLE:g} standard "
            "errors, which chance does not explain: the correlation is not that of an "
            "Ornstein-Uhlenbeck process",
        ),
        (
            np.isnan(fit.double_window_decay[0]),
            "at twice the lag no process has such a lag matrix: the correlation is not "
            "that of an Ornstein-Uhlenbeck process, or the record is short",
        ),
        (
            _remarkable(fit.imbalance, fit.unit),
            f"the two parts of a pair differ in variance by over {REMARKABLE:g} "
            "standard errors, which chance does not explain; they are given their mean",
        ),
        (
            (raw_rate * step > 1) & (not lagged),
            "the series turns or decays within one step, so that its rate is a guess; "
            "use a shorter step",
        ),
        (
            (fit.raw_decay[0] * window > 1) & lagged,
            "the series decays within one lag, so that its rate is a guess; use a "
            "shorter lag",
        ),
    )
    notes = tuple(
        f"{_listed(marked, names)}: {text}" for marked, text in findings if marked.any()
    )
    if fit.repair:
        notes += (
            "the fit asked for noise of negative variance: "
            f"{100 * fit.repair:.2g} % of the noise variance was changed to repair it",
        )
    width = max((len(block) for block in blocks), default=0)
    if width < 2:
        return notes
    time = (1 / fit.eigenvalues[0].real).mean()
    samples = record / time / width
    if samples < ENOUGH:
        notes += (
            f"the record holds {samples:.3g} effective samples for each coordinate of "
            f"a matrix of {width}, which asks for {ENOUGH}; fit a diagonal, or fewer "
            "coordinates",
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
    if seen and special.bdtrc(seen - 1, number, BEYOND) < CHANCE:
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
