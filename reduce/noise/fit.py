"""Ornstein-Uhlenbeck noise fitted to time series of unresolved coordinates.

A fit takes a series and returns a :class:`NoiseFit`: the process, standard
errors, and notes on what a reader must know before believing it. There are
four methods:

- ``integral`` matches variances and integrals of the lag covariance, which is
  all that a slow mode feels of fast noise. It is the safe choice for series
  from flows, which are smooth in time: their first lags look nothing like an
  Ornstein-Uhlenbeck process (a fit to one lag would change with the lag),
  while the integral does not depend on them.
- ``product`` matches the integral of squared correlations.
- ``likelihood`` is the most precise if the samples are those of such a
  process, and wrong if they are not.
- ``regression`` makes the process right at one chosen lag.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from eddyshed.solver.errors import DataError

from ..statistics.estimate import Estimate
from ..statistics.jackknife import jackknife_error
from ..statistics.series import checked_series, checked_step
from .integral_matching import match_blocks, match_units
from .lag_integrals import units_of
from .lagged import lag_blocks, lag_units
from .notes import notes_on
from .ornstein_uhlenbeck import OrnsteinUhlenbeck
from .product_matching import match_products
from .replicates import Replicates
from .result import NoiseFit
from .sampling import (
    check_lag,
    check_sampling,
    checked_batches,
    longest_lag,
    window_rule,
)
from .structures import (
    check_samples,
    checked_structure,
    choose_structure,
    effective_samples,
    groups_of,
)

__all__ = ["NoiseFit", "OrnsteinUhlenbeck", "fit_ornstein_uhlenbeck", "window_rule"]

METHODS = ("integral", "product", "likelihood", "regression")


def fit_ornstein_uhlenbeck(
    series: np.ndarray,
    step: float,
    *,
    method: str = "integral",
    structure: str = "auto",
    window: float | None = None,
    lag: float | None = None,
    partners: np.ndarray | None = None,
    groups: Sequence | np.ndarray | None = None,
    batches: int = 20,
    labels: Sequence[str] | None = None,
) -> NoiseFit:
    """Fit an Ornstein-Uhlenbeck process.

    The mean of the series is removed. There may be no coordinates at all.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
        Independent realisations at equal steps.
    step : float
        Time between samples [s].
    method : {"integral", "product", "likelihood", "regression"}
        What the process has in common with the series beside its variance: the
        integral of the lag covariance, which is all that a slow mode feels
        through linear terms; in a diagonal, the integral of the squared
        correlation function, which is what it feels through products of two
        parts of one wave; all of it, by exact maximum likelihood; or the
        covariance at one lag.
    structure : {"auto", "real diagonal", "complex diagonal", "blocks", "full"}
        Form of the rate matrix; see :mod:`.structures`. By default a complex
        diagonal if there are partners, else a matrix if the record holds 50
        effective samples for each of its coordinates, else a real diagonal; a
        note says which, and why.
    window : float, optional
        Longest lag of the integral [s], rounded to whole steps, at least
        four. The record must hold 20 windows, each member two. By default
        that of `window_rule`, or what the record allows if that is shorter.
    lag : float, optional
        Lag of the regression [s], rounded to whole steps; for it alone.
    partners : array_like of int, shape (mode,), optional
        Coordinate that is the other part (cosine, sine) of the same wave, or
        -1. In a complex diagonal a pair is one complex rate, and both parts
        get equal variances. The part of lower index counts as the real one.
    groups : sequence of str or int, shape (mode,), optional
        Label of the group of each coordinate, for blocks.
    batches : int
        Contiguous parts of the record that errors are estimated from, at
        least 4 and each at least a window long.
    labels : sequence of str, optional
        Names of the coordinates for errors and notes.

    Returns
    -------
    NoiseFit

    Raises
    ------
    DataError
        If the series cannot be used (too short, constant, not finite, sampled
        too coarsely or too finely for the method, without a process that has
        such samples) or an argument is not as above.

    Notes
    -----
    Integral: ``rate = C P^-1`` with C the covariance and P the integral of the
    lag covariance, weighted by a triangle over the window (M. S. Bartlett
    (1950), Biometrika 37, 1). The noise that follows has no negative variance.
    The triangle makes the integral of a process of rate r too small: ``1 / r -
    (1 - exp(-r T)) / (r**2 T)``. This is inverted, for each pair or, in a
    matrix, each eigenvalue, with sums over samples in place of integrals.
    Where there is no solution the raw rate stands and is marked.

    Product: the decay g of a pair makes ``1 / 2g`` the integral of ``|rho|^2``
    over the window, corrected for its end and for sampling, and its frequency
    is the mean rate at which rho turns, weighted by ``|rho|^2``. A process that
    is Ornstein-Uhlenbeck gets the same rates either way. A wave that turns many
    times before it fades, and not at one frequency, does not: its covariance
    then integrates to next to nothing, and a process that matches that decays
    several times too slowly.

    Likelihood and regression: see :mod:`.lagged`; their bias is taken off.

    With every method the variance that is lost with the mean is put back, and
    errors are by the jackknife over batches (B. Efron and R. J. Tibshirani
    (1993), An Introduction to the Bootstrap, ch. 11), which are long parts of
    the record because neighbours in time are not independent.
    """
    where = "Ornstein-Uhlenbeck fit"
    step = checked_step(step, where)
    series = checked_series(series, where, labels)
    members, times, size = series.shape
    record = members * times * step
    if method not in METHODS:
        message = (
            f'{where}: method "{method}", allowed are '
            + ", ".join(f'"{name}"' for name in METHODS)
            + "; integral is the safe one"
        )
        raise DataError(message)
    checked_structure(structure, method, where)
    first, second = units_of(partners, size, where)
    notes = []
    matrix = structure in ("blocks", "full")
    samples = effective_samples(series, step) if matrix or structure == "auto" else 0.0
    if structure == "auto":
        widest = None if groups is None else groups_of(groups, size, where)
        structure, note = choose_structure(
            samples,
            size,
            diagonal_only=method == "product",
            paired=bool((second >= 0).any()),
            largest_group=widest and max(len(block) for block in widest),
        )
        notes += [note] if size else []
    if structure == "real diagonal":
        first, second = np.arange(size), np.full(size, -1)
    blocks = [np.arange(size)] if structure == "full" and size else []
    if structure == "blocks":
        blocks = groups_of(groups, size, where)
    check_samples(samples, blocks, where)
    lags, said = longest_lag(series, step, method, window, lag, where)
    notes += said
    batches = checked_batches(series, batches, lags, where)
    names = [f"mode {k}" for k in range(size)] if labels is None else list(labels)
    exact = method == "likelihood"
    if method in ("integral", "product") or not size:
        if blocks:
            fit = match_blocks(series, step, lags, batches, blocks)
        else:
            match = match_products if method == "product" and size else match_units
            fit = match(series, step, lags, batches, first, second)
        check_sampling(fit, step, where)
    else:
        if blocks:
            fit = lag_blocks(series, step, lags, batches, blocks, names, exact=exact)
        else:
            fit = lag_units(
                series, step, lags, batches, first, second, names, exact=exact
            )
        check_lag(fit, lags * step, record, where)
    return NoiseFit(
        process=OrnsteinUhlenbeck(rate=fit.rate, covariance=fit.covariance),
        method=method,
        structure=structure,
        window=lags * step,
        step=step,
        record=record,
        batches=batches,
        decay=_estimate(fit.decay),
        frequency=_estimate(fit.frequency),
        variance=_variance(fit, record / batches),
        noise=_estimate(fit.noise),
        eigen_decay=_estimate(fit.eigenvalues.real),
        eigen_frequency=_estimate(fit.eigenvalues.imag),
        rate_error=fit.rate_error,
        raw_decay=_estimate(fit.raw_decay),
        raw_frequency=_estimate(fit.raw_frequency),
        double_window_decay=_estimate(fit.double_window_decay),
        uncorrected=fit.uncorrected,
        repair=fit.repair,
        notes=tuple(notes)
        + notes_on(fit, method, blocks, lags * step, step, record, names),
    )


def _estimate(replicates: np.ndarray) -> Estimate:
    """Value from the record, error from the records without each batch."""
    return Estimate(replicates[0], jackknife_error(replicates))


def _variance(fit: Replicates, batch: float) -> Estimate:
    """Variance, its error widened for what is shared across the edges of a batch.

    The correlation of squares, ``exp(-2 g lag)``, makes the scatter of means over
    batches of length b too small by ``1 / (2 g b)`` (of a variance).
    """
    found = _estimate(fit.variance)
    shared = np.minimum(1 / (2 * fit.decay[0] * batch), 0.5)
    return Estimate(found.value, found.error / np.sqrt(1 - shared))
