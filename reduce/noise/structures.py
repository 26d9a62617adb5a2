"""Forms of a rate matrix: which coordinates may act on which.

- ``real diagonal``: each coordinate decays by itself,
- ``complex diagonal``: the two parts of a wave turn into each other as they
  decay; coordinates without a partner decay by themselves,
- ``blocks``: coordinates of one group act on each other,
- ``full``: all do.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from eddyshed.solver.errors import DataError

from ..statistics.correlation import correlation_scales

STRUCTURES = ("real diagonal", "complex diagonal", "blocks", "full")
ENOUGH = 50  # effective samples per coordinate of a matrix: its errors are a quarter
TOO_FEW = 5  # below this a lag matrix mostly has eigenvalues that no process has


def effective_samples(series: np.ndarray, step: float) -> float:
    """Length of the record over the correlation time of squares, by variance.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
        As `checked_series` returns it.
    step : float
        Time between samples [s].

    Returns
    -------
    float
        What a covariance of the coordinates is known from; their correlation
        times are averaged with the variances as weights.
    """
    if not series.shape[2]:
        return float(series.shape[0] * series.shape[1])
    variance = series.var(axis=(0, 1))
    squared = correlation_scales(series, step).squared.value
    time = max(float(variance @ squared / variance.sum()), step)
    return series.shape[0] * series.shape[1] * step / time


def choose_structure(
    samples: float,
    size: int,
    *,
    diagonal_only: bool,
    paired: bool,
    largest_group: int | None,
) -> tuple[str, str]:
    """Choose by data per parameter, and say why.

    Parameters
    ----------
    samples : float
        Effective samples of the record.
    size : int
        Number of coordinates.
    diagonal_only : bool
        Whether the method knows no matrices.
    paired : bool
        Whether coordinates form waves.
    largest_group : int or None
        Size of the largest group, if there are groups.

    Returns
    -------
    structure, note : str

    Notes
    -----
    A matrix of n coordinates has n**2 entries, a record n values for each
    effective sample: samples / n is the number of values for each entry.
    The rate matrix of 60 coordinates was found to 0.26, 0.47, 0.73 and 1.1
    of its norm at 167, 50, 20 and 10 of them, a diagonal to 0.49 at any.
    Waves in a homogeneous sea do not act on each other on average, so that
    theirs is diagonal whatever the record.
    """
    if paired:
        return "complex diagonal", (
            "structure: complex diagonal, as the coordinates are parts of waves; each "
            "wave has one decay and one frequency"
        )
    if diagonal_only or size < 2:
        why = "the method knows no matrices" if size > 1 else "there is one coordinate"
        return "real diagonal", f"structure: real diagonal, as {why}"
    for structure, width in (("full", size), ("blocks", largest_group)):
        if width is not None and samples >= ENOUGH * width:
            return structure, (
                f"structure: {structure}, as the record holds "
                f"{samples / width:.3g} effective samples for each coordinate of a "
                f"matrix of {width} (at least {ENOUGH} are asked for)"
            )
    width = size if largest_group is None else largest_group
    return "real diagonal", (
        f"structure: real diagonal, as the record holds {samples / width:.3g} "
        f"effective samples for each coordinate of a matrix of {width}, of {ENOUGH} "
        "asked for"
    )


def checked_structure(structure: str, method: str, where: str) -> None:
    """Raise DataError unless the method has such a structure."""
    if structure not in ("auto", *STRUCTURES):
        message = (
            f'{where}: structure "{structure}", allowed are "auto" and '
            + ", ".join(f'"{name}"' for name in STRUCTURES)
        )
        raise DataError(message)
    if method == "product" and structure in ("blocks", "full"):
        message = (
            f'{where}: method "product" with structure "{structure}", allowed are '
            '"real diagonal" and "complex diagonal"; for a matrix use "integral"'
        )
        raise DataError(message)


def groups_of(
    groups: Sequence | np.ndarray | None, size: int, where: str
) -> list[np.ndarray]:
    """Coordinates of each group, in the order in which groups first occur.

    Parameters
    ----------
    groups : sequence of str or int, shape (size,), optional
        Label of the group of each coordinate.
    size : int
        Number of coordinates.
    where : str
        Who asks; the error begins with it.

    Returns
    -------
    list of ndarray of int

    Raises
    ------
    DataError
        If there are none, or not one for each coordinate.
    """
    labels = np.empty(0) if groups is None else np.asarray(groups)
    if labels.shape != (size,) or labels.dtype.kind not in "iuU":
        given = "no groups" if groups is None else f"groups of shape {labels.shape}"
        message = (
            f'{where}: {given} of {size} coordinates, structure "blocks" needs the '
            "label (text or whole number) of the group of each"
        )
        raise DataError(message)
    _, first, number = np.unique(labels, return_index=True, return_inverse=True)
    return [np.flatnonzero(number == k) for k in np.argsort(first)]


def check_samples(samples: float, blocks: list[np.ndarray], where: str) -> None:
    """Raise DataError if a record is hopelessly short for a matrix."""
    width = max((len(block) for block in blocks), default=0)
    if width > 1 and samples < TOO_FEW * width:
        message = (
            f"{where}: {samples:.3g} effective samples for a matrix of {width} "
            f"coordinates, allowed are {TOO_FEW} for each ({ENOUGH} do well); fit a "
            "diagonal, smaller blocks or a longer record"
        )
        raise DataError(message)
