"""From findings to a verdict on each closure, and a recommendation in words."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from .findings import Finding, times

WORSE = {"holds": 0, "undecided": 1, "fails": 2}
# From what keeps most of the equation to what keeps least.
PREFERRED = ("coloured", "white", "residual", "damped", "bare_mean", "bare")


@dataclass(frozen=True, slots=True, kw_only=True)
class ClosureVerdict:
    """Whether the truth bears out what a closure leans on.

    Attributes
    ----------
    closure : str
    verdict : str
        The worst of the findings that vote and that it leans on.
    reasons : tuple of str
        A sentence for each that does not hold.
    leaning : tuple of str
        Names of the findings.
    """

    closure: str
    verdict: str
    reasons: tuple[str, ...]
    leaning: tuple[str, ...]


def closure_verdicts(
    findings: Sequence[Finding], used: Sequence[str]
) -> list[ClosureVerdict]:
    """Verdict on each closure of a study.

    A closure whose assumptions are not known (a user's own, a diagnostic)
    is undecided, and the reason says so.
    """
    result = []
    for name in used:
        leaning = [f for f in findings if f.votes and name in f.closures]
        if not leaning:
            reason = "what it assumes is not known to the audit"
            result.append(
                ClosureVerdict(
                    closure=name, verdict="undecided", reasons=(reason,), leaning=()
                )
            )
            continue
        worst = max(leaning, key=lambda f: WORSE[f.verdict])
        result.append(
            ClosureVerdict(
                closure=name,
                verdict=worst.verdict,
                reasons=tuple(
                    reason_of(f)
                    for f in sorted(leaning, key=lambda f: -WORSE[f.verdict])
                    if f.verdict != "holds"
                ),
                leaning=tuple(f.name for f in leaning),
            )
        )
    return result


def reason_of(finding: Finding) -> str:
    """Why a finding does not hold, in a sentence."""
    place = f" at {finding.where}" if finding.where else ""
    if not math.isfinite(finding.value):
        return f"{finding.name} is undecided: {finding.settle}"
    error = f" +- {finding.error:.2g}" if math.isfinite(finding.error) else ""
    number = (
        f"{finding.value:.3g}{error}{place}, must be {finding.sense} "
        f"{finding.threshold:.3g}"
    )
    if finding.verdict == "fails":
        return f"{finding.name} fails ({number}): {finding.meaning}"
    return f"{finding.name} is undecided ({number}): {finding.settle} settles it"


def recommendation(
    findings: Sequence[Finding], verdicts: Sequence[ClosureVerdict], cutoff: str
) -> str:
    """Which closure, at which cutoff; else what to collect or change.

    Parameters
    ----------
    findings : sequence of Finding
    verdicts : sequence of ClosureVerdict
    cutoff : str
        What is kept, in words.
    """
    known = {v.closure: v for v in verdicts if v.leaning}
    order = [name for name in PREFERRED if name in known]
    holds = [name for name in order if known[name].verdict == "holds"]
    if holds:
        others = f" ({', '.join(holds[1:])} would do as well)" if holds[1:] else ""
        return (
            f"use {holds[0]}, with {cutoff}{others}: every assumption that it leans on "
            "holds"
        )
    if not order:
        return "no closure whose assumptions are known is in use"
    failing = {name: _named(findings, name, "fails") for name in order}
    open_ones = [name for name in order if not failing[name]]
    words = []
    if open_ones:
        words.append(_waiting(open_ones[0], findings, cutoff))
    broken = [name for name in order if failing[name]]
    if broken:
        # What would have to change for the one that fails least.
        name = min(broken, key=lambda n: len(failing[n]))
        changes = "; ".join(dict.fromkeys(f.remedy for f in failing[name]))
        words.append(
            f"{', '.join(broken)} {'is' if len(broken) == 1 else 'are'} not to be "
            f"trusted with {cutoff}; {name} fails least "
            f"({', '.join(f.name for f in failing[name])}): {changes}"
        )
    return ". ".join(words)


def _named(findings, closure, verdict):
    """Findings that vote on a closure with a verdict."""
    return [
        f
        for f in findings
        if f.votes and closure in f.closures and f.verdict == verdict
    ]


def _waiting(name, findings, cutoff):
    """What an open verdict waits for."""
    waiting = _named(findings, name, "undecided")
    names = ", ".join(f.name for f in waiting)
    unknown = [
        f for f in waiting if not math.isfinite(f.more) or "truth" not in f.settle
    ]
    if unknown:
        how = "; ".join(dict.fromkeys(f.settle for f in unknown))
        return f"no closure can be recommended yet; for {name}: {names}: {how}"
    more = max(f.more for f in waiting)
    return (
        f"no closure can be recommended yet: {name} fails nowhere with {cutoff}, but "
        f"{names} {'is' if len(waiting) == 1 else 'are'} open; collect "
        f"{times(more, 'truth')}"
    )
