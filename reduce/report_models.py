"""Sections of the report on the fitted noise and the reduced models."""

from __future__ import annotations

import dataclasses

import numpy as np

from eddyshed.solver.quantities import format_quantity

from .estimate import Estimate
from .evidence import Evidence, summary_of
from .markup import Note, listed, number, paragraphs, section, text, unit
from .measures import (
    Correlation,
    Distribution,
    density,
    large_lag_error,
    process_correlation,
    rotating_units,
    unit_correlation,
)
from .split import unresolved_series

DAY = 86400.0
LARGEST = 3  # unresolved modes whose correlation function is shown
WITH_ERRORS = 12  # unresolved modes with error bars
PANELS = 12  # resolved modes whose correlation function is shown
DENSITIES = 6  # resolved modes whose density is shown
BINS = 36
REACH = 4.0  # standard deviations of the truth to either side in a density
TIMES_SHOWN = 5.0  # integral times of a mode that its correlation is shown for
BARTLETT = "Bartlett 1946, J. R. Stat. Soc. Suppl. 8:27"


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
            "integrals of their lag covariances over a window of "
            f"{format_quantity(fit.window, 's')}. Of its {fit.process.size} "
            f"coordinates {2 * pairs} form {pairs} pairs, the two parts of a wave that "
            "decays and turns at one rate."
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
    return note.figure(
        lambda figures: figures.noise(
            shares=variance / evidence.split.total_variance,
            decay=Estimate(fit.decay.value[first], fit.decay.error[first]),
            frequency=Estimate(fit.frequency.value[first], fit.frequency.error[first]),
            marked=marked,
            with_errors=bars,
        ),
        alt="Two scatter plots against share of variance: decay time, on a logarithmic "
        "axis, and frequency.",
        caption="(a) Decay time and (b) frequency of the fitted noise, one point for "
        "each pair or single mode, against its share of the variance of the truth. A "
        "pair turns as exp(−iωt). "
        f"Bars: two standard errors to either side, for the {bars} largest."
        f"{crosses}",
    )


def _noise_correlations(note, evidence, units):
    """Correlation functions of the largest unresolved modes."""
    fit, whole = evidence.noise, evidence.split
    chosen = np.array([mode for one in units for mode in one])
    part = dataclasses.replace(whole, unresolved=whole.unresolved.take(chosen))
    series = unresolved_series(part, evidence.ocean, evidence.record)
    error = large_lag_error(series[np.newaxis], fit.step)
    lags = min(round(fit.window / fit.step), len(series) - 1)
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
                truth=unit_correlation(series[:, columns], lags),
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
        "area under the curve, not its shape at short lags.",
    )


def models(note: Note, evidence: Evidence) -> str:
    """The reduced models against the truth."""
    reasons = [(entry["name"], entry["verdict"]["reason"]) for entry in evidence.failed]
    failed = "".join(
        f"<li><code>{text(name)}</code>: {text(reason)}</li>"
        for name, reason in reasons
    )
    members = evidence.study.config.benchmark.members
    return section(
        "The reduced models",
        paragraphs(
            f"Each closure was run as {members} members from states of the truth; what "
            "follows is what they did after a spin-up of their own."
        ),
        "<p>Without scores, and so without curves, because they give no statistics:"
        f"</p>\n<ul>{failed}</ul>"
        if failed
        else "",
        _correlations(note, evidence),
        _distributions(note, evidence),
        _scores(note, evidence),
    )


def _correlations(note, evidence):
    """Correlation functions of the resolved modes."""
    divided = evidence.split
    labels = divided.resolved.labels
    error = large_lag_error(divided.fine_x[np.newaxis], divided.fine_step)
    count = min(PANELS, len(labels))
    shown = []
    for mode in range(count):
        longest = TIMES_SHOWN * float(evidence.truth.integral_time.value[mode])
        longest = min(longest, float(evidence.lags[-1]))
        shown.append(
            Correlation(
                label=labels[mode],
                lags=evidence.lags,
                truth=evidence.correlations["truth"][:, mode],
                error=float(error[mode]),
                curves={
                    place: (
                        evidence.lags,
                        evidence.correlations[entry["name"]][:, mode],
                    )
                    for place, entry in evidence.scored
                },
                longest=longest,
            )
        )
    return note.figure(
        lambda figures: figures.correlations(shown, _names(evidence)),
        alt="Correlation functions against lag in days, a panel for each resolved "
        "mode, with a curve for the truth and for each closure that has scores.",
        caption=f"Correlation functions of {_how_many(count, len(labels))}. Black: the "
        "truth; grey: two standard errors to either side by Bartlett's large-lag "
        "formula, the root of the integral time of the squared correlation over the "
        f"length of the record ({BARTLETT}), which is too wide at the shortest lags. "
        "Axes end at five integral times of the mode, or earlier where fewer are "
        f"known.{_theirs(evidence)}",
    )


def _distributions(note, evidence):
    """Marginal densities of the resolved modes."""
    labels, truth = evidence.split.resolved.labels, evidence.split.fine_x
    count = min(DENSITIES, len(labels))
    series = {
        place: evidence.simulated(entry["name"]) for place, entry in evidence.scored
    }
    gone = [
        evidence.closures[place]["name"]
        for place, found in series.items()
        if found is None
    ]
    shown = []
    for mode in range(count):
        reach = REACH * truth[:, mode].std()
        edges = np.linspace(-reach, reach, BINS + 1)
        shown.append(
            Distribution(
                label=labels[mode],
                edges=edges,
                truth=density(truth[np.newaxis, :, mode], edges),
                curves={
                    place: density(found[:, :, mode], edges).value
                    for place, found in series.items()
                    if found is not None
                },
            )
        )
    missing = (
        f" The series of {listed([text(name) for name in gone])} are no longer on disk."
        if gone
        else ""
    )
    return note.figure(
        lambda figures: figures.distributions(
            shown, _names(evidence), evidence.ocean.unit
        ),
        alt="Densities against amplitude, a panel for each resolved mode, with a curve "
        "for the truth and for each closure that has scores.",
        caption=f"Densities of {_how_many(count, len(labels))}, less the mean of the "
        f"truth, in {BINS} bins up to four standard deviations of the truth. Black: "
        "the truth; grey: two standard errors to either side by batch means. Axes end "
        "not far above the peak of the truth: the curve of a closure with too little "
        "variance goes on beyond."
        f"{_theirs(evidence)}{missing}",
    )


def _scores(note, evidence):
    """Every score."""
    day = {"mean": 1.0, "variance": 1.0, "integral_time": DAY}
    summaries = [("truth", evidence.truth, {})] + [
        (
            entry["name"],
            summary_of(entry["summary"]),
            {score["quantity"]: score for score in entry["scores"]},
        )
        for _, entry in evidence.scored
    ]

    def cells(summary, scores, mode):
        row = []
        for quantity, scale in day.items():
            found = getattr(summary, quantity)
            mark = _marks(scores.get(quantity.replace("_", " ")), mode)
            row.append(
                number(float(found.value[mode]), float(found.error[mode]), scale=scale)
                + mark
            )
        distance = scores.get("distribution")
        if distance is None:
            return [*row, "–"]
        difference = distance["difference"]
        shown = number(difference["value"][mode], difference["error"][mode])
        return [*row, shown + _marks(distance, mode)]

    groups = []
    for mode, label in enumerate(evidence.split.resolved.labels):
        groups.append(
            [
                text(label),
                *(
                    [
                        f"<code>{text(name)}</code>" if scores else name,
                        *cells(summary, scores, mode),
                    ]
                    for name, summary, scores in summaries
                ),
            ]
        )
    return note.table(
        [
            "model",
            f"mean [{unit(evidence.ocean.unit)}]",
            f"variance [({unit(evidence.ocean.unit)})<sup>2</sup>]",
            "integral time [d]",
            "distance of distributions",
        ],
        groups,
        caption="Every score, mode by mode, with standard errors. Means are less that "
        "of the full states of the truth. The distance is that of Wasserstein, in "
        "standard deviations of the truth; it is never negative, and two records of "
        "one process are at a distance of about its error. * not within sampling "
        "error; † not within tolerance.",
    )


def _marks(score, mode):
    """What a score does not pass."""
    if score is None:
        return ""
    marks = ("" if score["sampling"][mode] else "*") + (
        "" if score["close"][mode] else "†"
    )
    return f"&nbsp;{marks}" if marks else ""


def _theirs(evidence):
    """How well the curves of the closures are known."""
    if not evidence.scored:
        return ""
    settings = evidence.study.config.benchmark
    length = settings.members * (settings.duration or evidence.length / 2)
    return (
        f" The closures' curves rest on records {length / evidence.length:.2g} times "
        "as long as that of the truth."
    )


def _names(evidence):
    """Names of all closures, by place."""
    return [entry["name"] for entry in evidence.closures]


def _name(labels, unit_of):
    """Label of a mode; of a pair the wave without its part."""
    if len(unit_of) == 1:
        return labels[unit_of[0]]
    return " / ".join(labels[mode] for mode in unit_of)


def _how_many(count, total):
    """The first so many of the resolved modes."""
    if count == total:
        return "the resolved modes"
    return f"the first {count} of {total} resolved modes"
