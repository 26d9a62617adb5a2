"""How every figure looks, and how it gets into the page.

Imports matplotlib, which is an extra, as only this module and those whose
name begins with ``figures`` do. No figure changes the global state of it.
"""

from __future__ import annotations

import base64
import io
from collections.abc import Callable, Sequence

import matplotlib.style
import numpy as np
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

WIDTH = 5.8  # inches: that of the column, so that text is as large as the page's
DAY = 86400.0
TRUTH = "#1b1b1b"
BAND = "#c9c9c9"
RESOLUTION = 180  # dots per inch of maps: fine enough for print

LOOK = {
    "font.family": "STIXGeneral",  # comes with matplotlib: the same everywhere
    "mathtext.fontset": "stix",
    "font.size": 11.5,
    "axes.labelsize": 11.5,
    "axes.titlesize": 11.5,
    "axes.titlelocation": "left",
    "axes.linewidth": 0.6,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.labelsize": 10.5,
    "ytick.labelsize": 10.5,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "legend.fontsize": 11,
    "legend.frameon": False,
    "legend.handlelength": 2.2,
    "legend.handletextpad": 0.5,
    "lines.linewidth": 1.2,
    "lines.markersize": 3.6,
    "figure.facecolor": "none",
    "axes.facecolor": "none",
    "svg.fonttype": "path",
    "svg.hashsalt": "eddyshed",
}

# Hues that the common forms of colour blindness keep apart (Okabe and Ito 2008,
# Color Universal Design), each with a dash and a marker of its own.
HUES = (
    *("#0072b2", "#d55e00", "#009e73", "#cc79a7"),
    *("#a07000", "#6a3d9a", "#56b4e9", "#8b2e16"),
)
DASHES = (
    *((5, 1.4), (1.3, 1.2), (7, 1.4, 1.3, 1.4), (3, 1.2, 3, 1.2, 1, 1.2)),
    *((9, 2), (2.5, 2.2), (7, 1.4, 1.3, 1.4, 1.3, 1.4), (1.3, 2.6)),
)
MARKERS = ("o", "s", "^", "D", "v", "P", "X", "<")

# Blue below zero, orange above, grey between; lightness only ever rises, so
# that the sign is still there in print without colour.
VORTICITY = LinearSegmentedColormap.from_list(
    "vorticity", ["#1f4a86", "#5683b6", "#b5b5b3", "#f0bf6c", "#fff3cf"]
)


def drawn(height: float, draw: Callable[[Figure], None], layout="constrained") -> str:
    """Draw a figure and return it as a data URI of SVG, the same bytes each time.

    Parameters
    ----------
    height : float
        In inches; the width is that of the column.
    draw : callable
        Fills the figure.
    layout : str
        Layout engine of matplotlib.

    Returns
    -------
    str
    """
    with matplotlib.style.context(["default", LOOK]):
        figure = Figure(figsize=(WIDTH, height), layout=layout)
        draw(figure)
        buffer = io.BytesIO()
        unstamped = dict.fromkeys(("Date", "Creator", "Format", "Type"))
        figure.savefig(buffer, format="svg", dpi=RESOLUTION, metadata=unstamped)
    encoded = base64.b64encode(buffer.getvalue()).decode("ascii")
    return f"data:image/svg+xml;base64,{encoded}"


def closure_style(index: int) -> dict[str, object]:
    """How the curve of a closure is drawn.

    Parameters
    ----------
    index : int
        Its place among the closures, those that failed included.
    """
    k = index % len(HUES)
    return {
        "color": HUES[k],
        "dashes": DASHES[k],
        "marker": MARKERS[k],
        # A few along the curve, and not where another closure has its own.
        "markevery": (0.02 + 0.025 * k, 0.2),
        "markerfacecolor": "white",
        "markeredgewidth": 0.9,
    }


def panels(figure: Figure, count: int, columns: int) -> list[Axes]:
    """A grid of panels."""
    rows = -(-count // columns)
    return [figure.add_subplot(rows, columns, k + 1) for k in range(count)]


def letter(index: int) -> str:
    """(a) to (z), then numbers."""
    return f"({chr(ord('a') + index) if index < 26 else index + 1})"


def legend(figure: Figure, axes: Axes) -> None:
    """One legend for all panels, above them."""
    handles, labels = axes.get_legend_handles_labels()
    figure.legend(handles, labels, loc="outside upper left", ncols=5, columnspacing=1.2)


def logarithmic(axis: Axis) -> None:
    """Make an axis logarithmic, with its ticks as plain numbers."""
    axis.axes.set(**{f"{axis.axis_name}scale": "log"})
    low, high = axis.get_view_interval()
    narrow = high < 30 * low
    axis.set_major_locator(LogLocator(subs=(1, 2, 5) if narrow else (1,)))
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axis.set_minor_formatter(NullFormatter())


def length_unit(length: float) -> tuple[float, str]:
    """Unit [m] that lengths up to this one read well in, and its name."""
    return (1e3, "km") if length >= 5e3 else (1.0, "m")


def in_math(unit: str) -> str:
    """A unit such as ``m2 s-2`` with its powers raised."""
    words = []
    for word in unit.split():
        stem = word.rstrip("-0123456789")
        power = word[len(stem) :]
        words.append(f"{stem}$^{{{power}}}$" if power else stem)
    return " ".join(words)


def power_of_ten(values: Sequence[float] | np.ndarray) -> int:
    """Exponent that brings the largest of some values to between 1 and 10.

    It is zero if they read well as they are, from a tenth to a thousand.
    """
    largest = float(np.max(np.abs(values), initial=0.0))
    if largest == 0 or 0.1 <= largest < 1000:
        return 0
    return int(np.floor(np.log10(largest)))


def scaled_unit(exponent: int, unit: str) -> str:
    """A unit with a power of ten before it."""
    if exponent == 0:
        return in_math(unit)
    return f"$10^{{{exponent}}}$ {in_math(unit)}"
