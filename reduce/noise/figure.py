"""Figure of a series and of the noise fitted to it; needs matplotlib."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from matplotlib import rc_context
from matplotlib.figure import Figure

from eddyshed.solver.quantities import UNITS, format_quantity

from ..statistics.correlation import correlation_function
from .from_file import FileSeries
from .result import NoiseFit

KINDS = ("png", "svg", "pdf")
MOST = 4  # variables that are drawn
LAGS = 5.0  # e-folding times of the slowest, over which correlations are drawn


def draw_noise(path: Path, kind: str, data: FileSeries, fit: NoiseFit) -> None:
    """Draw each variable and its correlation function beside that of the fit.

    Parameters
    ----------
    path : Path
        File that is written.
    kind : {"png", "svg", "pdf"}
        Its format.
    data : FileSeries
        The first four variables are drawn.
    fit : NoiseFit
        What was fitted to them.
    """
    values = data.values
    times, number = values.shape[1], min(values.shape[2], MOST)
    unit, scale = _time_unit(data.step * times)
    longest = round(LAGS / fit.eigen_decay.value.min() / data.step)
    lags = int(np.clip(longest, 4, times // 3))
    found = correlation_function(values, lags)
    at = np.linspace(0, lags * data.step, 8 * lags + 1)
    model = np.diagonal(fit.process.lag_covariance(at), axis1=1, axis2=2)
    model = model / np.diagonal(fit.process.covariance)
    figure = Figure(figsize=(8.0, 2.2 * number + 0.4), layout="constrained")
    axes = figure.subplots(number, 2, squeeze=False, width_ratios=(2, 1))
    for k, (left, right) in enumerate(axes):
        left.plot(
            np.arange(times) * data.step / scale, values[0, :, k], "#1b1b1b", lw=0.6
        )
        left.set_ylabel(
            data.names[k] + (f" [{data.units[k]}]" if data.units[k] else "")
        )
        # Bartlett's error at long lags, two to either side.
        error = 2 * np.sqrt((1 + 2 * (found[1:, k] ** 2).sum()) / times)
        right.axhspan(-error, error, color="#dddddd", lw=0)
        right.plot(
            np.arange(lags + 1) * data.step / scale, found[:, k], "o", color="#1b1b1b",
            ms=2.5, label="series",
        )  # fmt: skip
        right.plot(at / scale, model[:, k], color="#0072b2", lw=1.4, label="fit")
        right.set_ylabel("correlation")
        right.axhline(0, color="#1b1b1b", lw=0.5)
    axes[-1, 0].set_xlabel(f"time [{unit}]")
    axes[-1, 1].set_xlabel(f"lag [{unit}]")
    axes[0, 1].legend(frameon=False)
    figure.suptitle(
        f"Ornstein-Uhlenbeck noise by {fit.method}, lags up to "
        f"{format_quantity(float(f'{fit.window:.3g}'), 's')}"
    )
    # No date in the file: the same series gives the same bytes.
    stamps = {"png": {"Software": None}, "svg": {"Date": None}}
    stamp = stamps.get(kind, {"CreationDate": None})
    with rc_context({"svg.hashsalt": "eddyshed"}):
        figure.savefig(path, format=kind, dpi=150, metadata=stamp)


def _time_unit(span: float) -> tuple[str, float]:
    """Unit of time, and its size [s], in which a span is short to write."""
    for symbol in ("yr", "d", "h", "min"):
        size = float(UNITS[symbol][0])
        if span >= 20 * size:
            return symbol, size
    return "s", 1.0
