"""What the command prints on stdout: tables for people, plain data for machines."""

from __future__ import annotations

from typing import Any

from eddyshed.solver.forecast import Forecast
from eddyshed.solver.quantities import format_quantity
from eddyshed.solver.settings import TruthConfig

from .stages import read_noise, read_split
from .store import plain, read_json
from .study import Study

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
        "seconds": found.seconds_per_step * found.steps,
        "free_bytes": free,
    }


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
        [
            "processor time of the truth",
            format_quantity(found.seconds_per_step * found.steps, "s")
            + f" ({1e6 * found.seconds_per_step:.0f} microseconds a step)",
        ],
        [
            "disk",
            f"{found.disk_bytes / 1e6:.0f} MB of {free / 1e6:.0f} MB free",
        ],
        ["memory between checkpoints", f"{found.memory_bytes / 1e6:.0f} MB"],
    ]
    text = columns(rows)
    warnings = list(found.warnings)
    if found.disk_bytes > free:
        warnings.append("the truth will not fit on the disk")
    for warning in warnings:
        text += f"\nwarning: {warning}"
    return f"{text}\n{CAUTION}"


def _scale(value, unit):
    """Write a scale; an infinite one stands for something that there is not."""
    if value == float("inf"):
        return "none"
    return f"{value:.4g}" if unit == "1" else format_quantity(value, unit)


def stage_json(study: Study, command: str) -> dict[str, Any]:
    """Return what a command made, as plain data."""
    result: dict[str, Any] = {"study": study.config.name, "folder": str(study.folder)}
    if command in ("audit", "report", "study"):
        result["audit"] = read_json(study.path("audit.json"))
    if command in ("benchmark", "report", "study"):
        result["benchmark"] = read_json(study.path("benchmark.json"))
    return result


def stage_table(study: Study, command: str) -> str:
    """Write what a command made, for people."""
    parts = {
        "truth": _truth,
        "reduce": _reduce,
        "audit": _audit,
        "benchmark": _benchmark,
        "report": _report,
    }
    asked = ("audit", "benchmark", "report") if command == "study" else (command,)
    return "\n\n".join(parts[name](study) for name in asked)


def _truth(study):
    record = study.record()
    length = len(record.times) * record.step
    return (
        f"truth: {len(record.times)} states over {format_quantity(length, 's')} in "
        f"{record.path}"
    )


def _reduce(study):
    split, noise = read_split(study), read_noise(study)
    resolved, unresolved, left = split.shares
    text = (
        f"resolved: {split.resolved.n_modes} modes, {100 * resolved:.3g} % of the "
        f"variance ({', '.join(split.resolved.labels)})\n"
        f"unresolved: {split.unresolved.n_modes} modes, {100 * unresolved:.3g} %\n"
        f"in no mode: {100 * left:.2g} %\n"
        f"noise: {noise.structure}, matches the {noise.match} over a window of "
        f"{format_quantity(noise.window, 's')}"
    )
    return "\n".join([text, *(f"note: {note}" for note in noise.notes)])


def _audit(study):
    rows = [["assumption", "verdict", "value", "threshold", "worst at"]]
    after = []
    for finding in read_json(study.path("audit.json"))["findings"]:
        rows.append(
            [
                finding["name"],
                finding["verdict"],
                pair(finding["value"], finding["error"]),
                f"{finding['sense']} {finding['threshold']:g}",
                finding["where"],
            ]
        )
        if finding["verdict"] == "fails":
            after.append(f"{finding['name']} fails: {finding['meaning']}")
        elif finding["verdict"] == "undecided":
            after.append(f"{finding['name']} undecided: {finding['settle']} settles it")
    return "\n".join([columns(rows), *after])


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
        f"{entry['name']}: note: {words}"
        for entry in found["closures"]
        for words in entry["notes"]
        if words not in of_noise  # eddyshed reduce has printed those
    ]
    return "\n\n".join([columns(rows), columns(verdicts), "\n".join(reasons)])


def _report(study):
    return f"report: {study.path('report.html')}\n{CAUTION}"
