"""Section of the report on the reduced models."""

from __future__ import annotations

import numpy as np

from ..benchmark import member_duration
from ..measured import QUANTITIES
from .curves import BARTLETT, Correlation, Distribution, density, large_lag_error
from .evidence import Evidence, summary_of
from .markup import Note, listed, number, paragraphs, section, span, text, unit

DAY = 86400.0
PANELS = 12  # resolved modes whose correlation function is shown
DENSITIES = 6  # resolved modes whose density is shown
BINS = 36
REACH = 4.0  # standard deviations of the truth to either side in a density
TIMES_SHOWN = 5.0  # integral times of a mode that its correlation is shown for


def models(note: Note, evidence: Evidence) -> str:
    """The reduced models against the truth."""
    reasons = [(entry["name"], entry["verdict"]["reason"]) for entry in evidence.failed]
    failed = "".join(
        f"<li><code>{text(name)}</code>: {text(reason)}</li>"
        for name, reason in reasons
    )
    settings = evidence.study.config.benchmark
    return section(
        "The reduced models",
        paragraphs(
            f"Each closure was run as {settings.members} members from states of the "
            f"truth, for {span(member_duration(settings, evidence.length))} each after "
            "a spin-up of their own."
        ),
        _steps(evidence),
        "<p>Without scores, and so without curves, because they give no statistics:"
        f"</p>\n<ul>{failed}</ul>"
        if failed
        else "",
        _knowledge(note, evidence),
        _correlations(note, evidence),
        _distributions(note, evidence),
        _scores(note, evidence),
        _measured(note, evidence) if evidence.measured else "",
    )


def _measured(note, evidence):
    """What is measured, in its own units."""
    names = evidence.split.resolved.measured
    rows = [
        [
            f"{quantity} [{unit(units)}]",
            text(label),
            *(number(value, error) for value, error in pairs),
        ]
        for quantity, units, label, pairs in evidence.measured
    ]
    groups = [
        [row for row in rows if row[0].startswith(quantity)] for quantity in QUANTITIES
    ]
    what = "; ".join(
        f"{text(label)}: {text(long_name)}"
        for label, long_name in zip(names.labels, names.long_names, strict=True)
    )
    closures = [f"<code>{text(e['name'])}</code>" for _, e in evidence.scored]
    return note.table(
        ["quantity", "box", "truth", *closures],
        groups,
        words=(0, 1),
        caption="What is measured, in its own units, with standard errors; it is a "
        f"linear function of the resolved modes, exactly. {what}.",
    )


def _steps(evidence):
    """What half the time step changes, for each closure that has statistics."""
    lines = [
        f"<li><code>{text(entry['name'])}</code>: {text(found['sentence'])}</li>"
        for entry in evidence.closures
        if (found := entry["step"]) is not None
    ]
    if not lines:
        return ""
    return (
        "<p>A short run of each at half its time step, compared in means and "
        f"variances:</p>\n<ul>{''.join(lines)}</ul>"
    )


def _correlations(note, evidence):
    """Correlation functions of the resolved modes."""
    divided = evidence.split
    labels = divided.resolved.labels
    error = large_lag_error(divided.fine_x, divided.fine_step)
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
        reach = REACH * truth[:, :, mode].std()
        edges = np.linspace(-reach, reach, BINS + 1)
        shown.append(
            Distribution(
                label=labels[mode],
                edges=edges,
                truth=density(truth[:, :, mode], edges),
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
        caption="Every score, mode by mode, with standard errors. The distance is that "
        "of Wasserstein, in standard deviations of the truth; it is never negative, "
        "and two records of one process are at a distance of about its error. * not "
        "within sampling error; † not within tolerance.",
    )


def _knowledge(note, evidence):
    """What each closure found out about itself when it was made."""
    groups = []
    for entry in evidence.closures:
        rows = [
            [
                f"<code>{text(entry['name'])}</code>",
                text(name),
                "unknown" if value is None else f"{value:.3g}",
            ]
            for name, value in entry["facts"].items()
        ]
        said = "".join(
            f"<p>{text(_capital(words))}.</p>"
            for words in entry["notes"]
            if words not in evidence.noise.notes  # said of the noise already
        )
        if rows and said:
            rows.append(said)
        elif said:
            rows = [[f"<code>{text(entry['name'])}</code>", "–", "–"], said]
        if rows:
            groups.append(rows)
    if not groups:
        return ""
    return note.table(
        ["closure", "number", "value"],
        groups,
        words=(0, 1),
        caption="What each closure found out when it was made, and what to know before "
        "believing it. Sizes of terms are root mean squares along the truth over that "
        "of the tendency of the mode, in the mode where that is most; white noise "
        "counts as the tendency of a coupling with its intensity and the integral time "
        "of the real one.",
    )


def _capital(words):
    return f"{words[:1].upper()}{words[1:].rstrip('.')}"


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
    length = settings.members * member_duration(settings, evidence.length)
    return (
        f" The closures' curves rest on records {length / evidence.length:.2g} times "
        "as long as that of the truth."
    )


def _names(evidence):
    """Names of all closures, by place."""
    return [entry["name"] for entry in evidence.closures]


def _how_many(count, total):
    """The first so many of the resolved modes."""
    if count == total:
        return "the resolved modes"
    return f"the first {count} of {total} resolved modes"
