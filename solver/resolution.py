"""Whether a grid and a step are fit for the scales of an ocean and of its flow."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from typing import Any

import numpy as np
from scipy.sparse.linalg import LinearOperator, gmres

# A length is resolved from half the shortest wavelength kept, as a wave needs two
# points; a wavelength from twice it, so that it can at least steepen.
LENGTHS_KEPT = 0.5
WAVELENGTHS_KEPT = 2.0
STEPS_PER_TURNOVER = 6  # so that a particle turns by a radian in a step
# Runge-Kutta of order four is stable to 2 sqrt(2) on the imaginary axis; modes up to
# two thirds of the grid's turn at 2 pi / 3 times (speed over grid spacing).
LARGEST_COURANT = 2 * math.sqrt(2) / (2 * math.pi / 3)

Scale = tuple[str, float, str]


def unresolved_lengths(scales: Iterable[Scale]) -> Iterator[str]:
    """Lengths among the scales of an ocean that its grid does not resolve.

    Parameters
    ----------
    scales : iterable of (str, float, str)
        Name, value and SI unit, as an ocean gives them; ``shortest wavelength
        kept`` must be among them.

    Yields
    ------
    str
        One sentence for each: by how much it is missed, and what would do.
    """
    table = {name: value for name, value, unit in scales if unit == "m"}
    kept = table.pop("shortest wavelength kept")
    table.pop("grid spacing", None)
    # The boundary layer of a basin is as wide as the widest of its balances.
    layers = sorted((n for n in table if n.endswith("layer width")), key=table.get)
    for name in layers[:-1]:
        table.pop(name)
    for name, value in table.items():
        wave = "wavelength" in name
        least = kept * (WAVELENGTHS_KEPT if wave else LENGTHS_KEPT)
        if 0 < value < least:
            yield (
                f"the {name} ({value:.3g} m) is not resolved: it is "
                f"{value / kept:.2g} of the shortest wavelength kept "
                f"({kept:.3g} m) and should be {least / kept:g}; take "
                f"{least / value:.2g} times as many points"
            )


def flow_scales(
    ocean: Any, z: np.ndarray, name: str, step: float, *, lengths: bool = True
) -> tuple[list[Scale], list[str]]:
    """Scales of a flow, and what grid and step do not resolve of them.

    Parameters
    ----------
    ocean : ocean
    z : ndarray, shape (size,)
        The flow.
    name : str
        What the flow is, for the names of the scales.
    step : float
        Time step [s].
    lengths : bool
        Whether the lengths of the flow must be resolved. Those of a weak random
        start say nothing of the flow to come.

    Returns
    -------
    scales : list of (str, float, str)
        Those that are not of the ocean at rest, and the largest stable step.
    warnings : list of str
    """
    still = {scale[0] for scale in ocean.scales()}
    everything = list(ocean.scales(z))
    own = [scale for scale in everything if scale[0] not in still]
    kept = [scale for scale in everything if scale[0] == "shortest wavelength kept"]
    warnings = []
    if lengths:
        warnings += [f"{name}: {text}" for text in unresolved_lengths([*own, *kept])]
    rate = ocean.largest_speed(z)
    if rate > 0:
        longest = LARGEST_COURANT / rate
        own.append(("largest stable step", longest, "s"))
        if step > longest:
            warnings.append(
                f"{name}: the step is {step / longest:.3g} times the largest that "
                f"advection allows; try {0.5 * longest:.3g} s"
            )
    for scale, value, unit in own:
        if unit == "s" and "turnover" in scale and step * STEPS_PER_TURNOVER > value:
            warnings.append(
                f"{name}: the {scale} ({value:.3g} s) is {value / step:.2g} steps "
                f"long and should be {STEPS_PER_TURNOVER}; try "
                f"{value / STEPS_PER_TURNOVER:.3g} s"
            )
    return [(f"{scale} ({name})", value, unit) for scale, value, unit in own], warnings


def laminar_state(ocean: Any) -> np.ndarray | None:
    """Steady flow in which the linear part alone balances the forcing.

    Parameters
    ----------
    ocean : ocean
        With its forcing at the start of the run.

    Returns
    -------
    ndarray, shape (size,), or None
        None if there is no forcing, if some coordinate that it reaches is not
        damped, or if an iterative solution takes too long.

    Notes
    -----
    Solves ``A z = -F`` by GMRES to a thousandth (Saad & Schultz 1986, SIAM J.
    Sci. Stat. Comput. 7:856). Advection makes a turbulent flow slower than
    this; in a basin it is the gyre of Stommel or of Munk.
    """
    forcing, damping = ocean.forcing(0.0), ocean.damping
    if not forcing.any() or damping.min() <= 0:
        return None
    n = ocean.size
    operator = LinearOperator((n, n), matvec=lambda z: -ocean.linear(z), dtype=float)
    rough = LinearOperator((n, n), matvec=lambda z: z / damping, dtype=float)
    z, left = gmres(operator, forcing, rtol=1e-3, restart=60, maxiter=20, M=rough)
    return z if left == 0 and np.all(np.isfinite(z)) else None
