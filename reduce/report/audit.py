"""Section of the report on the assumptions: verdicts first, then their evidence."""

from __future__ import annotations

import numpy as np

from .evidence import Evidence, estimate_of
from .markup import Note, listed, number, paragraphs, section, sentence, text, unbroken

PANELS = 6  # resolved modes whose quantiles are shown


def audit(note: Note, evidence: Evidence) -> str:
    """What the assumptions come to."""
    found = evidence.audit
    findings = found["findings"]
    return section(
        "What they assume, tested",
        paragraphs(f"<strong>Recommended:</strong> {text(found['recommendation'])}."),
        _verdicts(note, found),
        note.table(
            ["assumption", "verdict", "value", "threshold", "worst at"],
            [_group(finding) for finding in findings if finding["votes"]],
            words=(0, 1, 3, 4),
            caption="Assumptions that count in the verdicts, measured on the truth, "
            "where each is placed worst. A verdict needs the whole 95 % interval on "
            "one side of the threshold, by Student's quantile where the error itself "
            "is known poorly; one that fails at any of several modes needs more, by "
            "Bonferroni. The thresholds are those of the config: they tell a dozen "
            "flows of two kinds apart and were chosen with these in view; they are "
            "experience, not theorems.",
        ),
        _quantiles(note, found["curves"]["quantiles"]),
        _terms(note, found["terms"], evidence.ocean.unit),
        _abscissa(note, found["curves"]["abscissa"]),
        note.table(
            ["explanatory", "verdict", "value", "threshold", "worst at"],
            [_group(finding) for finding in findings if not finding["votes"]],
            words=(0, 1, 3, 4),
            caption="What explains, and does not count: these were seen to tell little "
            "of how well a closure does, or nothing has been seen yet.",
        ),
    )


def _verdicts(note, found):
    """A closure's verdict is the worst of those that it leans on."""
    groups = []
    for entry in found["closures"]:
        head = [
            f"<code>{text(entry['closure'])}</code>",
            f"<strong>{text(entry['verdict'])}</strong>",
            str(len(entry["leaning"])),
        ]
        reasons = "".join(f"<p>{text(sentence(r))}</p>" for r in entry["reasons"])
        groups.append([head, reasons] if reasons else [head])
    return note.table(
        ["closure", "its assumptions", "leans on"],
        groups,
        words=(0, 1),
        caption="Whether the truth bears out what each closure assumes: the worst "
        "verdict of those that it leans on, with the reasons, and their number.",
    )


def _group(finding):
    """Rows of a finding."""
    leaning = listed(finding["closures"]) if finding["closures"] else "none in use"
    words = [
        f"{finding['assumption']} Measured: {finding['statistic']}. Leaning on it: "
        f"{leaning}."
    ]
    if finding["verdict"] == "fails":
        words.append(sentence(f"It fails, so {finding['meaning']}"))
        words.append(sentence(f"What would help: {finding['remedy']}"))
    elif finding["verdict"] == "undecided" and finding["value"] is None:
        words.append(sentence(f"Not known: {finding['settle']}"))
        words.append(sentence(f"If it fails: {finding['meaning']}"))
    elif finding["verdict"] == "undecided":
        words.append(
            f"The error bar crosses the threshold; {finding['settle']} would settle "
            f"it. If it fails: {finding['meaning']}."
        )
    return [
        [
            text(finding["name"]),
            f"<strong>{text(finding['verdict'])}</strong>",
            number(finding["value"], finding["error"]),
            unbroken(f"{finding['sense']} {finding['threshold']:g}"),
            unbroken(finding["where"] or "–"),
        ],
        "".join(f"<p>{text(part)}</p>" for part in words),
    ]


def _quantiles(note, curves):
    """Quantiles of the coupling against those of a normal."""
    if not curves:
        return ""
    normal = np.array(curves["normal"])
    shown = [(m["mode"], estimate_of(m)) for m in curves["modes"][:PANELS]]
    return note.figure(
        lambda figures: figures.quantiles(normal, shown),
        alt="Quantiles of the coupling against those of a normal, a panel for each "
        "resolved mode, with a straight line for a normal.",
        caption="Quantiles of what the unresolved modes do to each resolved one, less "
        "its part linear in the resolved state, in standard deviations, against those "
        "of a normal (line). Grey: two standard errors to either side, leaving out one "
        f"part of the record after the other. {len(shown)} of {len(curves['modes'])} "
        "modes.",
    )


def _terms(note, terms, unit):
    """Sizes of the terms along the truth."""
    if not terms:
        return ""
    shown = {
        side: (list(found), estimate_of(_columns(found)))
        for side, found in terms.items()
    }
    per_second = unit.replace("s-1", "s-2") if "s-1" in unit else f"{unit} s-1"
    return note.figure(
        lambda figures: figures.terms(shown, per_second),
        alt="Bars: root mean square of every term of the resolved and of the "
        "unresolved tendency along the truth, with error bars.",
        caption="How large every term is along the truth, root mean square about its "
        "mean: (a) of the tendency of the resolved modes, (b) of the unresolved ones. "
        "Lines: two standard errors to either side. <code>bare</code> drops what holds "
        "y in (a); the noise stands in for B222(y, y) and A22 y in (b).",
    )


def _abscissa(note, curve):
    """The fast operator along the truth."""
    if not curve:
        return ""
    time, value = np.array(curve["time"]), np.array(curve["numerical"])
    return note.figure(
        lambda figures: figures.abscissa(time, value),
        alt="Numerical abscissa of the fast operator against time, with a line at "
        "zero, above which unresolved modes can grow for a while.",
        caption="Numerical abscissa of the fast operator at the resolved states of the "
        "truth, all members one after the other: the largest rate at which any "
        "departure of the unresolved modes can grow at once. It is exact at each "
        "state, so it has no error bars; that of the share of time above zero is in "
        "the table. The worst spectral abscissa, the rate in the long run at a fixed "
        f"state, is {curve['worst_spectral'] * 86400:.3g} d<sup>-1</sup>.",
    )


def _columns(found):
    """Value and error of named numbers, as two lists."""
    return {key: [one[key] for one in found.values()] for key in ("value", "error")}
