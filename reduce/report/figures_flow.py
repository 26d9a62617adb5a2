"""Figures of the flow and of its split; needs matplotlib.

Each function returns a data URI for the page; see `eddyshed.reduce.canvas`.
"""

from __future__ import annotations

import numpy as np
from matplotlib.ticker import MaxNLocator

from ..estimate import Estimate
from .canvas import (
    BAND,
    DAY,
    HUES,
    TRUTH,
    VORTICITY,
    WIDTH,
    drawn,
    in_math,
    logarithmic,
    power_of_ten,
    scaled_unit,
)

YEAR = 365.25 * DAY


def flow(
    *,
    vorticity: np.ndarray,
    streamfunction: np.ndarray,
    levels: np.ndarray,
    lengths: tuple[float, float],
    profile: Estimate,
    last_profile: np.ndarray,
) -> str:
    """Map of a state, and eastward velocity by latitude beside it.

    Parameters
    ----------
    vorticity, streamfunction : ndarray, shape (ny, nx)
        [s-1] and [m2 s-1], on one grid.
    levels : ndarray
        Contours of the streamfunction.
    lengths : tuple of float
        Size of the box [m].
    profile : Estimate, shape (n,)
        Time mean at equally spaced latitudes from the southern edge [m s-1].
    last_profile : ndarray, shape (n,)
        The same of the state on the map.
    """
    lx, ly = (length / 1e3 for length in lengths)
    exponent = power_of_ten(vorticity)
    bound = np.max(np.abs(vorticity), initial=0.0) / 10.0**exponent or 1.0
    ny, nx = vorticity.shape

    def draw(figure):
        left, right = figure.subplots(1, 2, sharey=True, width_ratios=(2.6, 1))
        # A grid point is the centre of its pixel.
        half_x, half_y = lx / nx / 2, ly / ny / 2
        image = left.imshow(
            vorticity / 10.0**exponent,
            origin="lower",
            extent=(-half_x, lx - half_x, -half_y, ly - half_y),
            cmap=VORTICITY,
            vmin=-bound,
            vmax=bound,
        )
        if len(levels):
            x, y = np.arange(nx) * (lx / nx), np.arange(ny) * (ly / ny)
            # One colour makes negative contours dashed.
            left.contour(
                x, y, streamfunction, levels=levels, colors=TRUTH, linewidths=0.55
            )
        left.set(xlabel="x [km]", ylabel="y [km]", title="(a)")
        left.spines[["top", "right"]].set_visible(True)
        bar = figure.colorbar(
            image, ax=left, location="bottom", aspect=32, pad=0.02, shrink=0.9
        )
        bar.set_label(f"relative vorticity [{scaled_unit(exponent, 's-1')}]")
        latitude = np.arange(len(profile.value)) * (ly / len(profile.value))
        right.axvline(0, color=BAND, linewidth=0.6)
        if np.isfinite(profile.error).all():
            right.fill_betweenx(
                latitude,
                profile.value - 2 * profile.error,
                profile.value + 2 * profile.error,
                color=BAND,
                linewidth=0,
            )
        right.plot(
            last_profile, latitude, color=HUES[0], dashes=(3, 1.5), linewidth=0.9
        )
        right.plot(profile.value, latitude, color=TRUTH)
        right.xaxis.set_major_locator(MaxNLocator(4))
        right.set(xlabel=f"u [{in_math('m s-1')}]", title="(b)")

    height = float(np.clip(0.65 * WIDTH * ly / lx + 1.25, 2.4, 7.5))
    return drawn(height, draw, layout="compressed")


def energy(
    *,
    times: np.ndarray,
    level: tuple[np.ndarray, np.ndarray, np.ndarray],
    work: np.ndarray,
    loss: np.ndarray,
) -> str:
    """Energy and its budget over time.

    Parameters
    ----------
    times : ndarray, shape (block,)
        Middle of each block of the record [s].
    level : tuple of ndarray, each (block,)
        Mean, least and greatest energy [m2 s-2].
    work, loss : ndarray, shape (block,)
        Means of the work and of minus the dissipation [m2 s-3].
    """
    scale, name = (YEAR, "yr") if times[-1] > 3 * YEAR else (DAY, "d")
    t = times / scale
    mean, low, high = level
    first, second = power_of_ten(high), power_of_ten([*work, *loss])

    def draw(figure):
        top, bottom = figure.subplots(2, 1, sharex=True)
        top.fill_between(
            t, low / 10.0**first, high / 10.0**first, color=BAND, linewidth=0
        )
        top.plot(t, mean / 10.0**first, color=TRUTH, linewidth=0.8)
        top.set_ylabel(f"energy\n[{scaled_unit(first, 'm2 s-2')}]")
        top.set_title("(a)")
        top.set_ylim(bottom=0)
        bottom.plot(
            t,
            work / 10.0**second,
            color=HUES[0],
            linewidth=0.8,
            label="work of forcing",
        )
        bottom.plot(
            t,
            loss / 10.0**second,
            color=HUES[1],
            linewidth=1.0,
            dashes=(2.5, 1.2),
            label="loss to friction",
        )
        bottom.set_ylabel(f"power\n[{scaled_unit(second, 'm2 s-3')}]")
        bottom.set_xlabel(f"time since the start of the record [{name}]")
        bottom.set_title("(b)")
        bottom.legend(loc="upper right", bbox_to_anchor=(1, 1.22), ncols=2)
        figure.align_ylabels()

    return drawn(3.6, draw)


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
