"""Section of the report on the fitted noise."""

from __future__ import annotations

import dataclasses

import numpy as np

from ..split import unresolved_series
from ..statistics.estimate import Estimate
from .curves import (
    BARTLETT,
    Correlation,
    large_lag_error,
    process_correlation,
    rotating_units,
    unit_correlation,
)
from .evidence import Evidence
from .markup import Note, paragraphs, section, span, text

LARGEST = 3  # modes whose correlation function is shown
WITH_ERRORS = 12  # modes with error bars


# What the noise has in common with the modes that it stands in for.
KEPT = {
    "integral": "integrals of their lag covariances, which is what a slow mode feels "
    "of them through linear terms",
    "product": "integrals of their squared correlation functions, which is what a slow "
    "mode feels of them through products",
    "likelihood": "lag covariances that make their samples most likely",
    "regression": "lag covariances at the longest of these lags",
}


def noise(note: Note, evidence: Evidence) -> str:
    """What stands in for the unresolved modes."""
    fit = evidence.noise
    if not fit.process.size:
        return section(
            "The noise", paragraphs("Every mode is resolved: there is no noise to fit.")
        )
    units = rotating_units(evidence.split.unresolved.partners)
    variance = np.array([fit.variance.value[list(one)].sum() for one in units])
    order = np.argsort(-variance, kind="stable")
    units = [units[k] for k in order]
    notes = "".join(f"<li>{text(words)}</li>" for words in fit.notes)
    pairs = sum(len(one) == 2 for one in units)
    return section(
        "The noise",
        paragraphs(
            "The unresolved modes are replaced by an Ornstein–Uhlenbeck process "
            f"({text(fit.structure)} rates) that keeps their variances and the "
            f"{KEPT[fit.method]}, by lags up to {span(fit.window)}. It has "
            f"{fit.process.size} coordinates"
            + (
                f"; {2 * pairs} of them form {pairs} pairs, the two parts of a wave "
                "that decays and turns at one rate."
                if pairs
                else ", each with a rate of its own."
            )
        ),
        f"<p>What the fit has to say of itself:</p>\n<ul>{notes}</ul>" if notes else "",
        _rates(note, evidence, units, variance[order]),
        _noise_correlations(note, evidence, units[:LARGEST]),
    )


def _rates(note, evidence, units, variance):
    """Decay times and frequencies against variance."""
    fit = evidence.noise
    first = [one[0] for one in units]
    marked = fit.uncorrected[first].astype(bool)
    crosses = (
        " Crosses: rates that could not be corrected for the window."
        if any(marked)
        else ""
    )
    bars = min(WITH_ERRORS, len(units))
    turns = fit.frequency.value.any()
    return note.figure(
        lambda figures: figures.noise(
            shares=variance / evidence.split.total_variance,
            decay=Estimate(fit.decay.value[first], fit.decay.error[first]),
            frequency=Estimate(fit.frequency.value[first], fit.frequency.error[first]),
            marked=marked,
            with_errors=bars,
        ),
        alt="Scatter plot against share of variance, on logarithmic axes: decay time"
        + (", and beside it frequency." if turns else "."),
        caption="(a) Decay time "
        + ("and (b) frequency ω " if turns else "")
        + "of the fitted noise, one point for each pair or single mode, against its "
        "share of the variance of the truth. "
        + ("A pair turns as exp(−iωt). " if turns else "")
        + f"Bars: two standard errors to either side, for the {bars} largest."
        f"{crosses}",
    )


def _noise_correlations(note, evidence, units):
    """Correlation functions of the largest unresolved modes."""
    fit, whole = evidence.noise, evidence.split
    chosen = np.array([mode for one in units for mode in one])
    part = dataclasses.replace(whole, unresolved=whole.unresolved.take(chosen))
    series = unresolved_series(part, evidence.ocean, evidence.records)
    error = large_lag_error(series, fit.step)
    lags = min(round(fit.window / fit.step), series.shape[1] - 1)
    fine = 8 * lags + 1
    shown, at = [], 0
    for one in units:
        columns = slice(at, at + len(one))
        at += len(one)
        curve = process_correlation(fit.process, one, fit.step / 8, fine)
        shown.append(
            Correlation(
                label=_name(whole.unresolved.labels, one),
                lags=np.arange(lags + 1) * fit.step,
                truth=unit_correlation(series[..., columns], lags),
                error=float(error[columns].max()),
                curves={0: (np.arange(fine) * fit.step / 8, curve)},
                longest=lags * fit.step,
            )
        )
    return note.figure(
        lambda figures: figures.noise_correlations(shown),
        alt="Correlation functions of the largest unresolved modes: dots for the "
        "truth, a line for the fitted noise.",
        caption=f"Correlation functions of the {len(units)} unresolved modes or pairs "
        "of largest variance, over the window of the fit: truth (dots; grey, two "
        f"standard errors to either side by Bartlett's large-lag formula, {BARTLETT}) "
        "and fitted noise (line). Of a pair the real part is shown. The fit keeps the "
        f"{KEPT[fit.method]}, and not the shape of the curve.",
    )


def _name(labels, unit_of):
    """Label of a mode; of a pair the wave without its part."""
    if len(unit_of) == 1:
        return labels[unit_of[0]]
    return " / ".join(labels[mode] for mode in unit_of)
