"""How well a spectrum of empirical orthogonal functions is known."""

from __future__ import annotations

import numpy as np

from ..statistics.correlation import effective_size
from ..statistics.estimate import Estimate
from .basis import Basis


def sampling_errors(basis: Basis, series: np.ndarray, step: float) -> Estimate:
    """Variances of the functions with their sampling errors.

    Parameters
    ----------
    basis : Basis
        The resolved functions.
    series : ndarray, shape (member, time, mode)
        Their coordinates.
    step : float
        Sampling interval [s].

    Returns
    -------
    Estimate, shape (mode,)

    Notes
    -----
    The rule of thumb of G. R. North, T. L. Bell, R. F. Cahalan and F. J. Moeng
    (1982), Mon. Weather Rev. 110:699: ``variance * sqrt(2 / N)`` with N the
    number of independent samples, here that of each series for its variance,
    from its squared correlation function. Infinite where the record is too
    short to know it.
    """
    size = effective_size(series, step).variance
    known = np.isfinite(size.error)
    error = np.where(known, basis.variance * np.sqrt(2 / size.value), np.inf)
    return Estimate(basis.variance, error)


def distances(resolved: Basis, unresolved: Basis) -> np.ndarray:
    """Variance of each resolved function less that of the next, shape (mode,).

    Infinite for the last if nothing is unresolved.
    """
    beyond = unresolved.variance[:1] if unresolved.n_modes else [-np.inf]
    return -np.diff(np.append(resolved.variance, beyond))


def degenerate_groups(error: np.ndarray, apart: np.ndarray) -> list[tuple[int, int]]:
    """Runs of functions that the record does not tell from each other.

    Parameters
    ----------
    error : ndarray, shape (mode,)
        Sampling errors of the variances of the resolved functions.
    apart : ndarray, shape (mode,)
        Distance of each to the next, the last to the first unresolved one.

    Returns
    -------
    list of (int, int)
        First and last of each run. A run that ends with the number of resolved
        functions reaches beyond them: the cut between resolved and unresolved
        lies within it.

    Notes
    -----
    By the same rule of thumb two neighbours are an effectively degenerate pair,
    of which the record gives some arbitrary mixture, if the distance of their
    variances is no larger than the sampling error.
    """
    groups: list[tuple[int, int]] = []
    for k in np.flatnonzero(apart <= error).tolist():
        if groups and groups[-1][1] == k:
            groups[-1] = (groups[-1][0], k + 1)
        else:
            groups.append((k, k + 1))
    return groups


def spectrum_notes(
    resolved: Basis, unresolved: Basis, series: np.ndarray, step: float
) -> list[str]:
    """What is to be said of resolved functions that are not told apart.

    Parameters
    ----------
    resolved, unresolved : Basis
        Empirical orthogonal functions.
    series : ndarray, shape (member, time, mode)
        Coordinates of the resolved ones.
    step : float
        Sampling interval [s].

    Returns
    -------
    list of str
        A sentence for each run of them.
    """
    found = sampling_errors(resolved, series, step)
    names = (*resolved.labels, *unresolved.labels[:1])
    notes = []
    for first, last in degenerate_groups(found.error, distances(resolved, unresolved)):
        end = f"{names[first]} to {names[last]}"
        words = (
            f"{end}: variances no further apart than their sampling errors (North et "
            "al. 1982): each is some mixture of these patterns, their span is what "
            "counts"
        )
        if last == resolved.n_modes:
            words += (
                "; the cut between resolved and unresolved goes through it: keep "
                f"{first} or more than {last + 1} modes, or run a longer truth"
                if first
                else "; the cut between resolved and unresolved goes through it"
            )
        notes.append(words)
    return notes
