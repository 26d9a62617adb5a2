"""What the command prints on stdout: tables for people, plain data for machines."""

from __future__ import annotations

import os
from collections import Counter
from dataclasses import asdict
from typing import Any

from eddyshed.solver.ensemble import Outcome, complete_members, ensemble_path
from eddyshed.solver.forecast import Forecast
from eddyshed.solver.progress import clock
from eddyshed.solver.quantities import format_quantity
from eddyshed.solver.settings import TruthConfig

from .measured import measured_rows
from .stages import read_noise, read_split, split_notes
from .store import plain, read_json
from .study import Study, available_memory, members_text

CAUTION = (
    "A toy ocean: no coastlines, no thermodynamics, nothing observed. "
    "Not a forecast of any place."
)


def columns(rows: list[list[str]]) -> str:
    """Lay out rows of text in columns; the first row is the heading."""
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    lines = [
        "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True))
        for row in rows
    ]
    lines.insert(1, "  ".join("-" * width for width in widths))
    return "\n".join(line.rstrip() for line in lines)


def pair(value: float | None, error: float | None, *, scale: float = 1.0) -> str:
    """Write a number with its standard error in brackets, in its last digits."""
    if value is None or error is None:
        return "unknown"
    if error == 0:
        return f"{value / scale:.3g}"
    from .statistics.correlation import Estimate

    return format(Estimate(value / scale, error / scale))


def forecast_json(found: Forecast, free: int) -> dict[str, Any]:
    """Return a forecast as plain data."""
    return {
        **plain(found),
        "scales": [list(scale) for scale in found.scales],
        "seconds": found.seconds,
        "wall_seconds": found.wall_seconds(processors()),
        "free_bytes": free,
    }


def processors() -> int:
    """How many processors this process may use."""
    return len(os.sched_getaffinity(0))


def forecast_table(config: TruthConfig, found: Forecast, free: int) -> str:
    """Write a forecast for people."""
    rows = [["what", "value"]]
    rows += [[name, _scale(value, unit)] for name, value, unit in found.scales]
    rows += [
        ["coordinates of the state", str(found.coordinates)],
        [
            "truth run",
            f"{found.steps} steps of {format_quantity(config.time.step, 's')}",
        ],
    ]
    workers = found.workers or 1
    if found.members > 1:
        where = f"{workers} at a time" if found.workers else "on a cluster"
        rows.append(["members", f"{found.members}, {where}"])
    each = " each" if workers > 1 else ""
    rows += [
        [
            "processor time of the truth",
            format_quantity(found.seconds, "s")
            + f" ({1e6 * found.seconds_per_step:.0f} microseconds a step)",
        ],
        ["time on the clock", _wall(found)],
        [
            "disk",
            f"{found.disk_bytes / 1e6:.0f} MB of {free / 1e6:.0f} MB free",
        ],
        ["memory", f"{found.memory_bytes / 1e6:.0f} MB{each}"],
    ]
    text = columns(rows)
    warnings = list(found.warnings)
    memory = available_memory()
    if memory is not None and workers * found.memory_bytes > memory:
        warnings.append(
            f"{workers * found.memory_bytes / 1e6:.0f} MB of memory are needed and "
            f"{memory / 1e6:.0f} MB available; try fewer [engine] workers, or a "
            "shorter [output] checkpoint_every"
        )
    for warning in warnings:
        text += f"\nwarning: {warning}"
    return f"{text}\n{CAUTION}"


def _wall(found):
    """Forecast of the time on the clock, in words."""
    seconds = found.wall_seconds(processors())
    if seconds is None:
        return "as the cluster has workers"
    return f"{clock(seconds)}, if nothing else runs here"


def _scale(value, unit):
    """Write a scale; an infinite one stands for something that there is not."""
    if value == float("inf"):
        return "none"
    return f"{value:.4g}" if unit == "1" else format_quantity(value, unit)


def stage_json(study: Study, command: str) -> dict[str, Any]:
    """Return what a command made, as plain data."""
    result: dict[str, Any] = {"study": study.config.name, "folder": str(study.folder)}
    if command in ("truth", "study"):
        result["truth"] = truth_json(study)
    if command in ("audit", "report", "study"):
        result["audit"] = read_json(study.path("audit.json"))
    if command in ("benchmark", "report", "study"):
        result["benchmark"] = read_json(study.path("benchmark.json"))
    return result


def stage_table(study: Study, command: str) -> str:
    """Write what a command made, for people."""
    parts = {
        "truth": truth_table,
        "reduce": _reduce,
        "audit": lambda study: _audit(study, explanatory=command == "audit"),
        "benchmark": _benchmark,
        "report": _report,
    }
    asked = ("audit", "benchmark", "report") if command == "study" else (command,)
    return "\n\n".join(parts[name](study) for name in asked)


def truth_json(study: Study) -> dict[str, Any]:
    """Return how the members of the truth came out, as plain data."""
    outcomes = outcomes_of(study)
    counts = Counter(outcome.status for outcome in outcomes)
    return {
        "counts": dict(counts),
        "members": [asdict(outcome) for outcome in outcomes],
        "missing": _missing(study),
    }


def outcomes_of(study: Study) -> list[Outcome]:
    """How the members came out; of a truth that was there already, all skipped."""
    return study.outcomes or [
        Outcome(member=member, status="skipped") for member in study.asked
    ]


def _missing(study):
    """Members of the config that are not complete, asked for now or not."""
    done = complete_members(study.config, study.truth_folder)
    return [m for m in range(study.config.ensemble.members) if m not in done]


def truth_table(study: Study) -> str:
    """Write how the members of the truth came out, for people."""
    if study.config.ensemble.members == 1:
        (record,) = study.records()
        length = len(record.times) * record.step
        return (
            f"truth: {len(record.times)} states over {format_quantity(length, 's')} in "
            f"{record.path}"
        )
    outcomes = outcomes_of(study)
    counts = Counter(outcome.status for outcome in outcomes)
    listed = ", ".join(f"{count} {status}" for status, count in sorted(counts.items()))
    parts = []
    rows = [[str(o.member), o.status, o.reason] for o in outcomes if not o.complete]
    if rows:
        parts.append(columns([["member", "came out", "why"], *rows]))
    summary = f"truth: {len(outcomes)} members: {listed}"
    missing = _missing(study)
    if missing:
        summary += (
            f"\n{members_text(missing)} not complete, of the "
            f"{study.config.ensemble.members} that the config asks for"
        )
    path = ensemble_path(study.truth_folder)
    if path.is_file():
        summary += f"\nall that are complete, as one: {path}"
    return "\n\n".join([*parts, summary])


def _reduce(study):
    split, noise = read_split(study), read_noise(study)
    resolved, unresolved, left = split.shares
    text = (
        f"resolved: {split.resolved.n_modes} modes, {100 * resolved:.3g} % of the "
        f"variance ({', '.join(split.resolved.labels)})\n"
        f"unresolved: {split.unresolved.n_modes} modes, {100 * unresolved:.3g} %\n"
        f"in no mode: {100 * left:.2g} %\n"
        f"noise: {noise.structure}, method {noise.method}, by lags up to "
        f"{format_quantity(noise.window, 's')}"
    )
    notes = [*split_notes(study.config, split), *noise.notes]
    return "\n".join([text, *(f"note: {note}" for note in notes)])


def _audit(study, *, explanatory):
    found = read_json(study.path("audit.json"))
    parts = []
    titles = {True: "assumption", False: "explanatory"}
    for votes, title in titles.items():
        if not (votes or explanatory):
            continue
        rows = [[title, "verdict", "value", "threshold", "worst at"]]
        rows += [
            [
                finding["name"],
                finding["verdict"],
                pair(finding["value"], finding["error"])
                if finding["value"] is not None
                else "unknown",
                f"{finding['sense']} {finding['threshold']:g}",
                finding["where"] or "-",
            ]
            for finding in found["findings"]
            if finding["votes"] == votes
        ]
        parts.append(columns(rows))
    verdicts = [["closure", "its assumptions"]]
    verdicts += [[entry["closure"], entry["verdict"]] for entry in found["closures"]]
    parts.append(columns(verdicts))
    reasons = [
        f"{entry['closure']}: {words}"
        for entry in found["closures"]
        for words in entry["reasons"]
    ]
    if reasons:
        parts.append("\n".join(reasons))
    parts.append(f"recommended: {found['recommendation']}")
    return "\n\n".join(parts)


def _benchmark(study):
    found = read_json(study.path("benchmark.json"))
    scored = [entry for entry in found["closures"] if entry["summary"] is not None]
    series = {"truth": found["truth"]["summary"]}
    series |= {entry["name"]: entry["summary"] for entry in scored}
    rows = [["quantity", "mode", *series]]
    for quantity, title, scale in (
        ("mean", f"mean [{found['unit']}]", 1.0),
        ("variance", f"variance [({found['unit']})^2]", 1.0),
        ("integral_time", "integral time [d]", 86400.0),
    ):
        for mode, label in enumerate(found["modes"]):
            cells = [
                pair(
                    summary[quantity]["value"][mode],
                    summary[quantity]["error"][mode],
                    scale=scale,
                )
                for summary in series.values()
            ]
            rows.append([title if mode == 0 else "", label, *cells])
    measured = [["measured", "box", *series]]
    for quantity, unit, label, pairs in measured_rows(found):
        cells = [pair(*each) for each in pairs]
        measured.append([f"{quantity} [{unit}]", label, *cells])
    verdicts = [["closure", "verdict", "within sampling", "within tolerance", "speed"]]
    for entry in found["closures"]:
        verdict = entry["verdict"]
        count = verdict["count"]
        verdicts.append(
            [
                entry["name"],
                verdict["word"],
                f"{verdict['within_sampling']} of {count}" if count else "-",
                f"{verdict['within_tolerance']} of {count}" if count else "-",
                f"{found['truth']['cost'] / entry['cost']:.3g} x truth",
            ]
        )
    of_noise = read_noise(study).notes
    reasons = [f"{e['name']}: {e['verdict']['reason']}" for e in found["closures"]]
    reasons += [
        f"{e['name']}: {e['step']['sentence']}"
        for e in found["closures"]
        if e["step"] is not None
    ]
    reasons += [
        f"{entry['name']}: note: {words}"
        for entry in found["closures"]
        for words in entry["notes"]
        if words not in of_noise  # eddyshed reduce has printed those
    ]
    tables = [rows, measured, verdicts] if len(measured) > 1 else [rows, verdicts]
    return "\n\n".join([*map(columns, tables), "\n".join(reasons)])


def _report(study):
    return f"report: {study.path('report.html')}\n{CAUTION}"
