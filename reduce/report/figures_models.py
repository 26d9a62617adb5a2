"""Figures of the noise and of the reduced models; needs matplotlib.

Each function returns a data URI for the page; see `eddyshed.reduce.canvas`.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from ..statistics.estimate import Estimate
from .canvas import (
    BAND,
    DAY,
    HUES,
    TRUTH,
    closure_style,
    drawn,
    in_math,
    legend,
    letter,
    logarithmic,
    panels,
)
from .curves import Correlation, Distribution

HIGHEST = 1.8  # times the peak of the truth: where axes of density end


def noise(
    *,
    shares: np.ndarray,
    decay: Estimate,
    frequency: Estimate,
    marked: np.ndarray,
    with_errors: int,
) -> str:
    """Decay time of the noise, and frequency if any turns, against variance.

    Parameters
    ----------
    shares : ndarray, shape (unit,)
        Share of the variance of the truth, largest first.
    decay, frequency : Estimate, shape (unit,)
        [s-1]
    marked : ndarray of bool, shape (unit,)
        Units whose rate stands uncorrected.
    with_errors : int
        The largest so many get error bars.
    """
    shown = [
        (
            Estimate(1 / decay.value / DAY, decay.error / decay.value**2 / DAY),
            "decay time [d]",
        )
    ]
    if frequency.value.any():
        turning = Estimate(frequency.value * DAY, frequency.error * DAY)
        shown.append((turning, f"frequency [rad {in_math('d-1')}]"))

    def draw(figure):
        all_axes = figure.subplots(1, len(shown), squeeze=False)[0]
        for k, (axes, (value, name)) in enumerate(zip(all_axes, shown, strict=True)):
            for chosen, marker, face in ((~marked, "o", "white"), (marked, "x", TRUTH)):
                if chosen.any():
                    axes.plot(
                        100 * shares[chosen],
                        value.value[chosen],
                        marker,
                        color=TRUTH,
                        markerfacecolor=face,
                        markeredgewidth=0.7,
                    )
            top = slice(None, with_errors)
            known = np.where(np.isfinite(value.error[top]), value.error[top], 0.0)
            axes.errorbar(
                100 * shares[top],
                value.value[top],
                yerr=2 * known,
                fmt="none",
                ecolor=HUES[1],
                elinewidth=1.0,
                zorder=0,
            )
            logarithmic(axes.xaxis)
            axes.set(xlabel="share of the variance [%]", ylabel=name, title=letter(k))
        logarithmic(all_axes[0].yaxis)
        for axes in all_axes[1:]:
            axes.axhline(0, color=BAND, linewidth=0.6, zorder=0)

    return drawn(2.9, draw)


def noise_correlations(shown: Sequence[Correlation]) -> str:
    """Correlation functions of unresolved modes, truth and fitted noise.

    Parameters
    ----------
    shown : sequence of Correlation
        The fit under the index 0.
    """

    def draw(figure):
        axes = figure.subplots(1, len(shown), sharey=True, squeeze=False)[0]
        for k, (ax, one) in enumerate(zip(axes, shown, strict=True)):
            _band(ax, one)
            ax.plot(
                one.lags / DAY,
                one.truth,
                "o",
                color=TRUTH,
                markersize=2.8,
                label="truth",
            )
            lags, values = one.curves[0]
            ax.plot(lags / DAY, values, color=HUES[1], label="fitted noise")
            ax.axhline(0, color=BAND, linewidth=0.6, zorder=0)
            ax.set(title=f"{letter(k)} {one.label}", xlabel="lag [d]")
            ax.set_xlim(0, one.longest / DAY)
        axes[0].set_ylabel("correlation")
        legend(figure, axes[0])

    return drawn(2.6, draw)


def correlations(shown: Sequence[Correlation], names: Sequence[str]) -> str:
    """Correlation functions of resolved modes, truth and closures.

    Parameters
    ----------
    shown : sequence of Correlation
        One for each panel.
    names : sequence of str
        All closures; curves refer to them by place.
    """
    curves = [values for one in shown for _, values in one.curves.values()]
    bands = [one.truth - 2 * one.error for one in shown if np.isfinite(one.error)]
    least = min(float(values.min()) for values in [*curves, *bands, np.zeros(1)])
    lowest = max(least, -1.0) - 0.08

    def draw(figure):
        axes = panels(figure, len(shown), 2)
        for k, (ax, one) in enumerate(zip(axes, shown, strict=True)):
            _band(ax, one)
            ax.plot(
                one.lags / DAY, one.truth, color=TRUTH, label="truth", linewidth=1.5
            )
            for index, (lags, values) in one.curves.items():
                stop = int(np.searchsorted(lags, one.longest)) + 1
                ax.plot(
                    lags[:stop] / DAY,
                    values[:stop],
                    label=names[index],
                    **closure_style(index),
                )
            ax.axhline(0, color=BAND, linewidth=0.6, zorder=0)
            ax.set(title=f"{letter(k)} {one.label}", xlabel="lag [d]")
            ax.set(xlim=(0, one.longest / DAY), ylim=(lowest, 1.08))
            if k % 2 == 0:
                ax.set_ylabel("correlation")
        legend(figure, axes[0])

    rows = -(-len(shown) // 2)
    return drawn(0.5 + 1.85 * rows, draw)


def distributions(
    shown: Sequence[Distribution], names: Sequence[str], unit: str
) -> str:
    """Marginal densities of resolved modes, truth and closures.

    Parameters
    ----------
    shown : sequence of Distribution
        One for each panel.
    names : sequence of str
        All closures; curves refer to them by place.
    unit : str
        Of the state.
    """

    def draw(figure):
        axes = panels(figure, len(shown), 2)
        for k, (ax, one) in enumerate(zip(axes, shown, strict=True)):
            middle = (one.edges[1:] + one.edges[:-1]) / 2
            if np.isfinite(one.truth.error).all():
                ax.fill_between(
                    middle,
                    np.maximum(one.truth.value - 2 * one.truth.error, 0),
                    one.truth.value + 2 * one.truth.error,
                    color=BAND,
                    linewidth=0,
                )
            ax.plot(middle, one.truth.value, color=TRUTH, label="truth", linewidth=1.5)
            for index, values in one.curves.items():
                ax.plot(
                    middle,
                    values,
                    label=names[index],
                    **closure_style(index),
                )
            ax.set_ylim(0, HIGHEST * one.truth.value.max())
            ax.set(
                title=f"{letter(k)} {one.label}",
                xlabel=f"amplitude [{in_math(unit)}]",
            )
            if k % 2 == 0:
                ax.set_ylabel(f"density [({in_math(unit)})$^{{-1}}$]")
        legend(figure, axes[0])

    rows = -(-len(shown) // 2)
    return drawn(0.5 + 1.85 * rows, draw)


def _band(axes, one):
    """Two standard errors of the truth's correlation to either side."""
    if np.isfinite(one.error):
        axes.fill_between(
            one.lags / DAY,
            one.truth - 2 * one.error,
            one.truth + 2 * one.error,
            color=BAND,
            linewidth=0,
        )
