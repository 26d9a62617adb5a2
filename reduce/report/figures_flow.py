"""Figures of the flow and of its split; needs matplotlib.

Each function returns a data URI for the page; see `eddyshed.reduce.report.canvas`.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.ticker import MaxNLocator

from ..flow.parts import MeanBudget, Measure, Profile
from ..statistics.estimate import Estimate
from .canvas import (
    BAND,
    DAY,
    HUES,
    TRUTH,
    VORTICITY,
    WIDTH,
    closure_style,
    drawn,
    length_unit,
    letter,
    logarithmic,
    power_of_ten,
    scaled_unit,
)
from .flow_fields import Map

YEAR, HOUR = 365.25 * DAY, DAY / 24
WALL = 2.0  # width of the line that stands for a wall, in points


def flow(
    *,
    maps: Sequence[Map],
    lengths: tuple[float, float],
    walls: tuple[bool, bool],
    vertical: str,
    profile: Profile | None,
) -> str:
    """One map and a profile beside it, or two maps.

    Parameters
    ----------
    maps : sequence of Map
    lengths : tuple of float
        Size of the box [m].
    walls : tuple of bool
        Whether walls bound it in the first and in the second direction.
    vertical : str
        Name of the second direction.
    profile : Profile or None
    """
    scale, name = length_unit(max(lengths))
    shape = lengths[1] / lengths[0]
    stretched = maps[0].stretched

    def draw(figure):
        count = len(maps) + (profile is not None)
        ratios = (2.6, 1) if profile is not None else (1,) * count
        axes = figure.subplots(
            1, count, sharey=True, width_ratios=ratios, squeeze=False
        )[0]
        for index, shown in enumerate(maps):
            _draw_map(figure, axes[index], shown, scale, walls)
            axes[index].set(
                xlabel=f"x [{name}]", title=f"{letter(index)} {shown.title}".rstrip()
            )
        axes[0].set_ylabel(f"{vertical} [{name}]")
        if profile is not None:
            _draw_profile(axes[-1], profile, scale)
            axes[-1].set_title(letter(count - 1))

    width = (0.65 if profile is not None else 0.42) * WIDTH
    height = 3.1 if stretched else float(np.clip(width * shape + 1.25, 2.4, 7.5))
    return drawn(height, draw, layout="compressed")


def _draw_map(figure, axes, shown, scale, walls):
    """Draw a map with its contours and its colour bar."""
    exponent = power_of_ten(shown.field)
    bound = np.max(np.abs(shown.field), initial=0.0) / 10.0**exponent or 1.0
    x, y = shown.x / scale, shown.y / scale
    # A grid point is the centre of its pixel.
    half_x, half_y = (x[1] - x[0]) / 2, (y[1] - y[0]) / 2
    image = axes.imshow(
        shown.field / 10.0**exponent,
        origin="lower",
        extent=(x[0] - half_x, x[-1] + half_x, y[0] - half_y, y[-1] + half_y),
        cmap=VORTICITY,
        vmin=-bound,
        vmax=bound,
        aspect="auto" if shown.stretched else "equal",
    )
    if len(shown.levels):
        # One colour makes negative contours dashed.
        axes.contour(
            x,
            y,
            shown.streamfunction,
            levels=shown.levels,
            colors=TRUTH,
            linewidths=0.55,
        )
    axes.spines[["top", "right"]].set_visible(True)
    for walled, sides in zip(
        walls, (["left", "right"], ["bottom", "top"]), strict=True
    ):
        if walled:
            axes.spines[sides].set_linewidth(WALL)
    bar = figure.colorbar(
        image, ax=axes, location="bottom", aspect=32, pad=0.02, shrink=0.9
    )
    bar.ax.xaxis.set_major_locator(MaxNLocator(5))
    bar.set_label(f"{shown.name} [{scaled_unit(exponent, shown.units)}]")


def _draw_profile(axes, profile, scale):
    """Draw a profile: its time mean with a band, and the last one."""
    y, error = profile.y / scale, 2 * profile.mean_error
    exponent = power_of_ten([*profile.mean, *profile.snapshot])
    factor = 10.0**-exponent
    axes.axvline(0, color=BAND, linewidth=0.6)
    if np.isfinite(error).all():
        axes.fill_betweenx(
            y,
            (profile.mean - error) * factor,
            (profile.mean + error) * factor,
            color=BAND,
            linewidth=0,
        )
    axes.plot(
        profile.snapshot * factor, y, color=HUES[0], dashes=(3, 1.5), linewidth=0.9
    )
    axes.plot(profile.mean * factor, y, color=TRUTH)
    axes.xaxis.set_major_locator(MaxNLocator(4))
    axes.set_xlabel(f"{profile.name} [{scaled_unit(exponent, profile.units)}]")


def energy(budget: MeanBudget, rates: dict[str, np.ndarray]) -> str:
    """Energy and its budget over time, of the first member.

    Parameters
    ----------
    budget : MeanBudget
    rates : dict of ndarray, each (rate_time,)
        The sources (positive) and sinks to be drawn [m2 s-3], by name.
    """
    scale, name = _time_unit(budget.time)
    t = budget.time / scale
    first = power_of_ten(budget.level_greatest[0])
    second = power_of_ten(np.concatenate([np.zeros(1), *rates.values()]))

    def draw(figure):
        top, bottom = figure.subplots(2, 1, sharex=True)
        _draw_ranges(
            top, t, budget.level_block, budget.level_least, budget.level_greatest, first
        )
        top.set_ylabel(f"energy\n[{scaled_unit(first, budget.units)}]")
        top.set_title("(a)")
        top.set_ylim(bottom=0)
        bottom.axhline(0, color=BAND, linewidth=0.6)
        for index, (label, rate) in enumerate(rates.items()):
            style = closure_style(index)
            bottom.plot(
                budget.rate_time / scale,
                rate / 10.0**second,
                color=style["color"],
                linewidth=0.9,
                label=label,
                **({"dashes": style["dashes"]} if index else {}),
            )
        bottom.set_ylabel(f"power\n[{scaled_unit(second, budget.rate_units)}]")
        bottom.set_xlabel(f"time since the start of the record [{name}]")
        bottom.set_title("(b)")
        if rates:
            figure.legend(loc="outside lower left", ncols=3, columnspacing=1.2)
        figure.align_ylabels()

    return drawn(3.6 + 0.25 * -(-len(rates) // 3), draw)


def over_time(measures: dict[str, Measure]) -> str:
    """Measures over time, each in a panel, of the first member.

    Parameters
    ----------
    measures : dict of Measure
        By the words that stand at their axes.
    """
    times = next(iter(measures.values())).time
    scale, name = _time_unit(times)

    def draw(figure):
        panels = figure.subplots(len(measures), 1, sharex=True, squeeze=False)[:, 0]
        for index, (axes, (label, shown)) in enumerate(
            zip(panels, measures.items(), strict=True)
        ):
            exponent = power_of_ten([shown.least, shown.greatest])
            _draw_ranges(
                axes,
                shown.time / scale,
                shown.block,
                shown.block_least,
                shown.block_greatest,
                exponent,
            )
            axes.axhline(
                shown.mean / 10.0**exponent, color=HUES[1], dashes=(4, 2), linewidth=0.9
            )
            unit = scaled_unit(exponent, shown.units)
            axes.set_ylabel(label if shown.units == "1" else f"{label}\n[{unit}]")
            if len(measures) > 1:
                axes.set_title(letter(index))
        panels[-1].set_xlabel(f"time since the start of the record [{name}]")
        figure.align_ylabels()

    return drawn(0.7 + 1.5 * len(measures), draw)


def _time_unit(times):
    """Unit that a time axis reads well in [s], and its name."""
    return next(
        (size, symbol)
        for size, symbol in ((YEAR, "yr"), (DAY, "d"), (HOUR, "h"))
        if times[-1] > 3 * size or symbol == "h"
    )


def _draw_ranges(axes, t, mean, low, high, exponent):
    """Draw block means of the first member within their least and greatest values."""
    factor = 10.0**-exponent
    axes.fill_between(t, low[0] * factor, high[0] * factor, color=BAND, linewidth=0)
    axes.plot(t, mean[0] * factor, color=TRUTH, linewidth=0.8)


def spectrum(*, resolved: Estimate, unresolved: Estimate) -> str:
    """Variance by mode, ranked.

    Parameters
    ----------
    resolved, unresolved : Estimate, shape (mode,)
        Shares of the variance of the truth.
    """
    value = np.concatenate([resolved.value, unresolved.value])
    error = np.concatenate([resolved.error, unresolved.error])
    kept = np.arange(len(value)) < len(resolved.value)
    order = np.argsort(-value, kind="stable")
    rank = np.empty(len(value), dtype=int)
    rank[order] = np.arange(1, len(value) + 1)

    def draw(figure):
        axes = figure.subplots()
        for chosen, marker, colour, face, name in (
            (~kept, "o", HUES[1], "white", "unresolved"),
            (kept, "s", HUES[0], HUES[0], "resolved"),
        ):
            if not chosen.any():
                continue
            known = np.where(np.isfinite(error[chosen]), error[chosen], 0.0)
            axes.errorbar(
                rank[chosen],
                100 * value[chosen],
                yerr=200 * known,
                fmt=marker,
                color=colour,
                markerfacecolor=face,
                markeredgewidth=0.8,
                elinewidth=0.7,
                label=name,
            )
        logarithmic(axes.xaxis)
        logarithmic(axes.yaxis)
        axes.set(xlabel="rank of the mode", ylabel="share of the variance [%]")
        axes.legend()

    return drawn(2.9, draw)
