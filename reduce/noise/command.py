"""What ``eddyshed noise`` does: noise fitted to a series out of a file."""

from __future__ import annotations

import math
from argparse import Namespace
from pathlib import Path
from typing import Any

import numpy as np

from eddyshed.solver.errors import DataError
from eddyshed.solver.files import replacing
from eddyshed.solver.quantities import UNITS, parse_quantity
from eddyshed.solver.randomness import stream

from ..statistics.estimate import Estimate
from .fit import fit_ornstein_uhlenbeck
from .from_file import FileSeries, read_series
from .result import NoiseFit
from .series_checks import SeriesCheck, check_series

SEED = 0  # of the block bootstrap: the same file gives the same text


def noise_of_file(options: Namespace) -> dict[str, Any]:
    """Read, fit, check, and draw if asked to.

    Parameters
    ----------
    options : argparse.Namespace
        Arguments of the command.

    Returns
    -------
    dict
        Plain data, in SI: times in seconds, rates in s-1.

    Raises
    ------
    DataError
        If the file, the series or an argument cannot be used.
    """
    draw = None if options.figure is None else _drawing(options.figure)
    data = read_series(
        options.series,
        options.variable,
        time=options.time,
        time_unit=options.time_unit,
        step=_seconds(options.step, "--step"),
    )
    partners = None
    if options.structure == "complex diagonal":
        if len(data.names) % 2:
            message = (
                f"{options.series}: {len(data.names)} variables with --structure "
                '"complex diagonal", allowed is an even number: real and imaginary '
                "part of one wave after the other"
            )
            raise DataError(message)
        partners = np.arange(len(data.names)) ^ 1
    fit = fit_ornstein_uhlenbeck(
        data.values,
        data.step,
        method=options.method,
        structure=options.structure,
        window=_seconds(options.window, "--window"),
        lag=_seconds(options.lag, "--lag"),
        partners=partners,
        labels=data.names,
    )
    rng = stream(SEED, 0, "noise of a file")
    checks = check_series(data.values, data.step, fit.process, rng, partners)
    if draw is not None:
        with replacing(options.figure) as temporary:
            kind = options.figure.suffix[1:].lower()
            draw(temporary, kind, data, fit)
    return _plain(data, fit, checks, str(options.series))


def _drawing(path: Path):
    """Return the function that draws, or say why there is no figure."""
    try:
        from .figure import KINDS, draw_noise
    except ImportError as error:
        message = (
            f"{path}: figures need matplotlib, which is not installed; install "
            'eddyshed with it: pip install "eddyshed[figures]"'
        )
        raise DataError(message) from error
    if path.suffix[1:].lower() not in KINDS or not path.parent.is_dir():
        message = (
            f"{path}: allowed is a file in a folder that exists, whose name ends in "
            + ", ".join(f".{kind}" for kind in KINDS)
        )
        raise DataError(message)
    return draw_noise


def _seconds(text: str | None, option: str) -> float | None:
    """Read a quantity of time."""
    if text is None:
        return None
    try:
        return parse_quantity(text, "s")
    except ValueError as error:
        message = f"{option}: {error}"
        raise DataError(message) from error


def _plain(
    data: FileSeries, fit: NoiseFit, checks: list[SeriesCheck], file: str
) -> dict[str, Any]:
    """Everything found, as JSON knows it."""

    def estimate(name):
        found = getattr(fit, name)
        low, high = fit.interval(name)
        return {
            "value": found.value.tolist(),
            "error": found.error.tolist(),
            "interval": [low.tolist(), high.tolist()],
        }

    return {
        "file": file,
        "variables": list(data.names),
        "units": list(data.units),
        "samples": data.values.shape[1],
        "step": data.step,
        "method": fit.method,
        "structure": fit.structure,
        "window": fit.window,
        "repair": fit.repair,
        **{
            name: estimate(name)
            for name in ("variance", "noise", "eigen_decay", "eigen_frequency")
        },
        "rate": {
            "value": fit.process.rate.tolist(),
            "error": fit.rate_error.tolist(),
        },
        "notes": list(fit.notes),
        "checks": [
            {
                "name": check.name,
                "assumption": check.assumption,
                "statistic": check.statistic,
                "value": check.found.value.tolist(),
                "error": [_finite(error) for error in check.found.error],
                "threshold": check.threshold,
                "verdict": check.verdicts,
                "worst": check.worst,
            }
            for check in checks
        ],
    }


def _finite(error):
    """JSON has no infinity."""
    return float(error) if math.isfinite(error) else None


def noise_table(found: dict[str, Any]) -> str:
    """Lay out what `noise_of_file` found, for people."""
    from ..tables import columns

    names, step = found["variables"], found["step"]
    one = "1" if all(found["units"]) else "unit"
    units = [f"({unit or one})^2" for unit in found["units"]]
    decay, turn = found["eigen_decay"], found["eigen_frequency"]
    times = [["", "e-folding time", "95 %", "decay [d-1]", "period"]]
    for k, (rate, omega) in enumerate(zip(decay["value"], turn["value"], strict=True)):
        if omega < 0:
            continue  # the other half of a wave
        low, high = decay["interval"][0][k], decay["interval"][1][k]
        times.append(
            [
                str(len(times)),
                _short(1 / rate),
                f"{_short(1 / high)} to {_short(1 / low)}",
                _pair(rate * 86400, decay["error"][k] * 86400),
                "-"
                if omega == 0
                else f"{_short(2 * math.pi / omega)} ({_relative(turn, k)})",
            ]
        )
    strengths = [["variable", "variance", "noise a day", "unit"]]
    strengths += [
        [
            name,
            _pair(found["variance"]["value"][k], found["variance"]["error"][k]),
            _pair(
                found["noise"]["value"][k] * 86400, found["noise"]["error"][k] * 86400
            ),
            units[k],
        ]
        for k, name in enumerate(names)
    ]
    rows = [["assumption", "verdict", "value", "threshold", "worst at"]]
    for check in found["checks"]:
        k = check["worst"]
        error = math.inf if check["error"][k] is None else check["error"][k]
        rows.append(
            [
                check["name"],
                check["verdict"][k],
                _pair(check["value"][k], error),
                f"at most {check['threshold']:.3g}",
                names[k],
            ]
        )
    statistics = "\n".join(
        f"{check['name']}: {check['statistic']}" for check in found["checks"]
    )
    notes = "".join(f"note: {note}\n" for note in found["notes"])
    return (
        f"{found['file']}: {found['samples']} samples, one each {_short(step)}\n"
        f"Ornstein-Uhlenbeck noise by {found['method']} ({found['structure']}), "
        f"lags up to {_short(found['window'])}\n\n"
        f"{columns(times)}\n\n{columns(strengths)}\n\n{columns(rows)}\n\n"
        f"{statistics}\n{notes}"
    ).rstrip()


def _short(seconds):
    """Write a time with four figures, in the largest unit that is less than it."""
    symbol = next((s for s in ("yr", "d", "h", "min") if seconds >= UNITS[s][0]), "s")
    return f"{seconds / float(UNITS[symbol][0]):.4g} {symbol}"


def _relative(turn, k):
    """Relative error of a period."""
    return f"+- {100 * turn['error'][k] / turn['value'][k]:.2g} %"


def _pair(value, error):
    """Write a number with its standard error."""
    return format(Estimate(value, error))
