"""From findings to a verdict on each closure, and a recommendation in words."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from .findings import Finding

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
    open_ones = [name for name in order if known[name].verdict == "undecided"]
    if open_ones:
        name = open_ones[0]
        waiting = [
            f
            for f in findings
            if f.votes and name in f.closures and f.verdict == "undecided"
        ]
        more = max(f.more for f in waiting)
        names = ", ".join(f.name for f in waiting)
        if not math.isfinite(more):
            how = "; ".join(dict.fromkeys(f.settle for f in waiting))
            return f"no closure can be recommended yet; for {name}: {names}: {how}"
        return (
            f"no closure can be recommended yet: {name} fails nowhere with {cutoff}, but "
            f"{names} {'is' if len(waiting) == 1 else 'are'} open; collect about "
            f"{max(more, 1.1):.2g} times the truth"
        )
    if not order:
        return "no closure whose assumptions are known is in use"
    # All fail: what would have to change for the one that fails least.
    failing = {
        name: [
            f
            for f in findings
            if f.votes and name in f.closures and f.verdict == "fails"
        ]
        for name in order
    }
    name = min(order, key=lambda n: len(failing[n]))
    changes = "; ".join(dict.fromkeys(f.remedy for f in failing[name]))
    return (
        f"no closure is to be trusted with {cutoff}; {name} fails least "
        f"({', '.join(f.name for f in failing[name])}): {changes}"
    )


