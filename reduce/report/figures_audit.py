"""Figures of the audit; needs matplotlib.

Each function returns a data URI for the page; see `eddyshed.reduce.canvas`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from ..statistics.estimate import Estimate
from .canvas import (
    BAND,
    DAY,
    HUES,
    TRUTH,
    drawn,
    in_math,
    letter,
    panels,
    power_of_ten,
    scaled_unit,
)

YEAR = 365.25 * DAY


def quantiles(normal: np.ndarray, shown: Sequence[tuple[str, Estimate]]) -> str:
    """Quantiles against those of a normal.

    Parameters
    ----------
    normal : ndarray, shape (quantile,)
    shown : sequence of (label, Estimate of shape (quantile,))
    """
    columns = min(3, len(shown))
    rows = -(-len(shown) // columns)

    def draw(figure):
        axes = panels(figure, len(shown), columns)
        for k, (ax, (label, found)) in enumerate(zip(axes, shown, strict=True)):
            error = np.where(np.isfinite(found.error), 2 * found.error, 0.0)
            ax.fill_between(
                normal,
                found.value - error,
                found.value + error,
                color=BAND,
                linewidth=0,
            )
            ax.plot(normal, normal, color=HUES[1], label="normal")
            ax.plot(normal, found.value, "o", color=TRUTH, markersize=2.4)
            ax.set(title=f"{letter(k)} {label}")
            if k % columns == 0:
                ax.set_ylabel("quantile")
            if k // columns == rows - 1:
                ax.set_xlabel("of a normal")

    return drawn(0.5 + 1.9 * rows, draw)


def terms(shown: Mapping[str, tuple[list[str], Estimate]], unit: str) -> str:
    """Sizes of terms as bars.

    Parameters
    ----------
    shown : mapping of side to (names, Estimate of shape (term,))
    unit : str
    """

    def draw(figure):
        all_axes = figure.subplots(1, len(shown), squeeze=False)[0]
        exponent = power_of_ten(
            np.concatenate([found.value for _, found in shown.values()])
        )
        scale = 10.0**exponent
        for k, (ax, (names, found)) in enumerate(
            zip(all_axes, shown.values(), strict=True)
        ):
            place = np.arange(len(names))
            error = np.where(np.isfinite(found.error), 2 * found.error, 0.0)
            ax.barh(
                place,
                found.value / scale,
                xerr=error / scale,
                color=BAND,
                edgecolor=TRUTH,
                linewidth=0.6,
                error_kw={"elinewidth": 1.0, "ecolor": HUES[1]},
            )
            ax.set_yticks(place, names)
            ax.invert_yaxis()
            ax.set(title=letter(k), xlabel=f"rms [{scaled_unit(exponent, unit)}]")

    return drawn(2.6, draw)


def abscissa(time: np.ndarray, value: np.ndarray) -> str:
    """Numerical abscissa against time.

    Parameters
    ----------
    time, value : ndarray, shape (state,)
        [s], [s-1]
    """

    def draw(figure):
        ax = figure.subplots()
        ax.axhline(0, color=HUES[1], linewidth=0.8)
        ax.plot(time / YEAR, value * DAY, color=TRUTH, linewidth=0.7)
        ax.set(xlabel="time [years]", ylabel=f"abscissa [{in_math('d-1')}]")

    return drawn(2.2, draw)
