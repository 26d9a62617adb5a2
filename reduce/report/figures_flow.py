"""Figures of the flow and of its split; needs matplotlib.

Each function returns a data URI for the page; see `eddyshed.reduce.canvas`.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.ticker import MaxNLocator

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
    letter,
    logarithmic,
    power_of_ten,
    scaled_unit,
)
from .measures import Map, Profile, is_stretched

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
    scale, name = (1e3, "km") if max(lengths) >= 5e3 else (1.0, "m")
    shape = lengths[1] / lengths[0]
    stretched = is_stretched(lengths)

    def draw(figure):
        count = len(maps) + (profile is not None)
        ratios = (2.6, 1) if profile is not None else (1,) * count
        axes = figure.subplots(
            1, count, sharey=True, width_ratios=ratios, squeeze=False
        )[0]
        for index, shown in enumerate(maps):
            _draw_map(figure, axes[index], shown, scale, walls, stretched)
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


def _draw_map(figure, axes, shown, scale, walls, stretched):
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
        aspect="auto" if stretched else "equal",
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
    y, mean = profile.y / scale, profile.mean
    exponent = power_of_ten([*mean.value, *profile.last])
    factor = 10.0**-exponent
    axes.axvline(0, color=BAND, linewidth=0.6)
    if np.isfinite(mean.error).all():
        axes.fill_betweenx(
            y,
            (mean.value - 2 * mean.error) * factor,
            (mean.value + 2 * mean.error) * factor,
            color=BAND,
            linewidth=0,
        )
    axes.plot(profile.last * factor, y, color=HUES[0], dashes=(3, 1.5), linewidth=0.9)
    axes.plot(mean.value * factor, y, color=TRUTH)
    axes.xaxis.set_major_locator(MaxNLocator(4))
    axes.set_xlabel(f"{profile.name} [{scaled_unit(exponent, profile.units)}]")


def energy(
    *,
    times: np.ndarray,
    level: tuple[np.ndarray, np.ndarray, np.ndarray],
    rate_times: np.ndarray,
    rates: dict[str, np.ndarray],
) -> str:
    """Energy and its budget over time.

    Parameters
    ----------
    times : ndarray, shape (block,)
        Middle of each block of the record [s].
    level : tuple of ndarray, each (block,)
        Mean, least and greatest energy [m2 s-2].
    rate_times : ndarray, shape (block,)
        Middle of each block of the rates [s].
    rates : dict of ndarray, each (block,)
        Means of each source (positive) and sink [m2 s-3], by name.
    """
    scale, name = next(
        (size, symbol)
        for size, symbol in ((YEAR, "yr"), (DAY, "d"), (HOUR, "h"))
        if times[-1] > 3 * size or symbol == "h"
    )
    t = times / scale
    mean, low, high = level
    first = power_of_ten(high)
    second = power_of_ten(np.concatenate([np.zeros(1), *rates.values()]))

    def draw(figure):
        top, bottom = figure.subplots(2, 1, sharex=True)
        top.fill_between(
            t, low / 10.0**first, high / 10.0**first, color=BAND, linewidth=0
        )
        top.plot(t, mean / 10.0**first, color=TRUTH, linewidth=0.8)
        top.set_ylabel(f"energy\n[{scaled_unit(first, 'm2 s-2')}]")
        top.set_title("(a)")
        top.set_ylim(bottom=0)
        bottom.axhline(0, color=BAND, linewidth=0.6)
        for index, (label, rate) in enumerate(rates.items()):
            style = closure_style(index)
            bottom.plot(
                rate_times / scale,
                rate / 10.0**second,
                color=style["color"],
                linewidth=0.9,
                label=label,
                **({"dashes": style["dashes"]} if index else {}),
            )
        bottom.set_ylabel(f"power\n[{scaled_unit(second, 'm2 s-3')}]")
        bottom.set_xlabel(f"time since the start of the record [{name}]")
        bottom.set_title("(b)")
        if rates:
            figure.legend(loc="outside lower left", ncols=3, columnspacing=1.2)
        figure.align_ylabels()

    return drawn(3.6 + 0.25 * -(-len(rates) // 3), draw)


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
