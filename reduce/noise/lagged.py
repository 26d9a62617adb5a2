r"""Rates of an Ornstein-Uhlenbeck process from one lag matrix.

A process sampled at a lag obeys ``y(t + lag) = Psi y(t) + e`` with
``Psi = exp(-rate lag)``, so that ``rate = -log(Psi) / lag``. Psi is found by
regression of the later on the earlier sample, with an intercept, or by exact
maximum likelihood (:mod:`.likelihood`).

Psi is biased by 1 / n. To that order, with ``phi`` the matrix of one sample,
``psi = phi^L`` that of L samples, ``C`` the covariance and ``W`` the sum of
the covariances at all lags, n times the bias of Psi is

.. math:: -\Big[\sum_{k \ge 1} X_k (\phi^{Tk} + \mathrm{tr}\,\phi^k)
           + (1 - \psi) W\Big] C^{-1}, \qquad
          X_k = E[e(t) y(t + k)^T].

This is, for one lag, the formula of D. F. Nicholls and A. L. Pope (1988),
Austral. J. Statist. 30A, 296, and for one coordinate ``-(1 + 3 phi)`` (M. G.
Kendall (1954), Biometrika 41, 403; F. H. C. Marriott and J. A. Pope (1954),
ibid. 390). For one wave of complex amplitude, which has no ``E[z z]``, it is
``-L psi - (1 - psi) W / C``.
"""

from __future__ import annotations

import numpy as np
from scipy import linalg

from eddyshed.solver.errors import DataError

from ..statistics.series import mode_blocks
from .lag_pairs import (
    complex_units,
    covariance_matrices,
    matrix_pairs,
    mean_squares,
    regressed_matrices,
    regressed_units,
    unit_pairs,
)
from .likelihood import matrix_likelihood, unit_likelihood
from .ornstein_uhlenbeck import ROUND_OFF
from .repair import MOST_REPAIR, check_independent, repaired_rate
from .replicates import (
    BlockRates,
    Replicates,
    replicates_of_blocks,
    replicates_of_units,
)

WHERE = "Ornstein-Uhlenbeck fit"
ALIASED = 0.8 * np.pi  # radians a lag: beyond, noise decides which way a wave turns


def lag_units(
    series: np.ndarray,
    step: float,
    lag: int,
    batches: int,
    first: np.ndarray,
    second: np.ndarray,
    names: list[str],
    *,
    exact: bool,
) -> Replicates:
    """Fit one rate to each pair and to each unpaired coordinate.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
    step : float
        Time between samples [s].
    lag : int
        Lag in samples.
    batches : int
        Number of parts of the record.
    first, second : ndarray of int, shape (unit,)
        Coordinates of the real and the imaginary part; -1 for no second.
    names : list of str
        Names of the coordinates, for errors.
    exact : bool
        Whether by exact maximum likelihood, which takes a lag of one sample.

    Returns
    -------
    Replicates

    Raises
    ------
    DataError
        If a correlation is negative, or a wave turns too far in a lag.
    """
    shape = (batches + 1, len(first))
    psi, wide = np.empty(shape, dtype=complex), np.empty(shape, dtype=complex)
    variance, squares = np.empty(shape), np.empty((2, *shape))
    paired = second >= 0
    members, times, _ = series.shape
    for block in mode_blocks(len(first), 16 * 6 * members * times):
        parts = complex_units(series, first[block], second[block])
        pairs = unit_pairs(parts, lag, batches)
        squares[:, :, block] = mean_squares(parts, batches)
        psi[:, block], variance[:, block] = regressed_units(pairs)
        if exact:
            psi[:, block], variance[:, block], _ = unit_likelihood(
                pairs, parts[:, :, 0], paired[block]
            )
        wide[:, block], _ = regressed_units(unit_pairs(parts, 2 * lag, batches))
    _check_units(psi, paired, first, names)
    corrected, memory = _unbiased_units(psi, lag, paired, members * (times - lag))
    variance = variance * (1 + memory / (members * times))
    raw = -np.log(psi) / (lag * step)
    rate = _straightened(corrected) / (lag * step)
    solved = rate[0].real > 0
    rate = np.where(solved, rate, raw)
    # Where the correlation at twice the lag is negative, its size says enough.
    twice, _ = _unbiased_units(np.abs(wide), 2 * lag, paired, members * times)
    twice = -np.log(np.abs(twice)) / (2 * lag * step)
    rate.imag[:, ~paired] = raw.imag[:, ~paired] = 0.0
    return replicates_of_units(
        first, second, squares, variance, raw, rate, twice, ~solved
    )


def lag_blocks(
    series: np.ndarray,
    step: float,
    lag: int,
    batches: int,
    blocks: list[np.ndarray],
    names: list[str],
    *,
    exact: bool,
) -> Replicates:
    """Fit one matrix to each group of coordinates; arguments as in `lag_units`.

    Raises
    ------
    DataError
        If a lag matrix has no real logarithm, a wave turns too far in a lag,
        the noise would have a negative variance, or coordinates are dependent.
    """
    fits = []
    record = series.shape[0] * series.shape[1]
    for block in blocks:
        part = series[:, :, block] - series[:, :, block].mean(axis=(0, 1))
        pairs = matrix_pairs(part, lag, batches)
        covariance = covariance_matrices(pairs)
        check_independent(covariance[0])
        psi = regressed_matrices(pairs)
        if exact:
            best = matrix_likelihood(part)
            psi = psi + (best.propagator - psi[0])
            covariance = covariance + (best.covariance - covariance[0])
        raw = logarithms(psi, lag * step, [names[k] for k in block])
        bias, memory = matrix_bias(raw[0] * step, covariance[0], lag)
        covariance = covariance + memory / record
        # No eigenvalue may be carried over the border to growth.
        rate = _matrix_rates(psi - bias / pairs.count[0], lag * step)
        solved = rate is not None
        rate = raw if rate is None else rate
        repaired, share = repaired_rate(rate[0], covariance[0])
        if share > MOST_REPAIR:
            message = (
                f"{WHERE}: the lag matrix of {_some([names[k] for k in block])} asks "
                f"for noise of negative variance ({100 * share:.2g} % of all), allowed "
                f"is {100 * MOST_REPAIR:g} %: no process of this kind has it; use "
                'method = "integral", a diagonal, or a longer record'
            )
            raise DataError(message)
        wide = _matrix_rates(
            regressed_matrices(matrix_pairs(part, 2 * lag, batches)), 2 * lag * step
        )
        fits.append(
            BlockRates(
                coordinates=block,
                covariance=covariance,
                raw=raw,
                rate=np.concatenate([[repaired], rate[1:]]),
                wide=np.full_like(raw, np.nan) if wide is None else wide,
                uncorrected=not solved,
                repair=share,
            )
        )
    return replicates_of_blocks(fits)


def logarithms(psi: np.ndarray, lag: float, names: list[str]) -> np.ndarray:
    """Rates ``-log(psi) / lag`` of lag matrices, or the reason why there are none.

    Parameters
    ----------
    psi : ndarray, shape (..., n, n)
    lag : float
        The lag [s].
    names : list of str
        Names of the coordinates, for errors.

    Returns
    -------
    ndarray, shape (..., n, n)

    Raises
    ------
    DataError
        If an eigenvalue is real and not positive (W. J. Culver (1966), Proc.
        Amer. Math. Soc. 17, 1146: no real logarithm if single), or turns by
        over 0.8 of half a circle.
    """
    values = np.linalg.eigvals(psi)
    negative = (np.abs(values.imag) <= 1e-12 * np.abs(values)) & (values.real <= 0)
    if negative.any():
        value = values[negative][0].real
        message = (
            f"{WHERE}: the lag matrix of {_some(names)} at a lag of {lag:.4g} s has "
            f"the eigenvalue {value:.3g}, and a real logarithm asks for none that is "
            "negative: no process in continuous time has such samples; use a shorter "
            'lag, a diagonal, fewer coordinates or method = "integral"'
        )
        raise DataError(message)
    angle = np.abs(np.angle(values))
    if (angle > ALIASED).any():
        message = (
            f"{WHERE}: {_some(names)} turn by {np.degrees(angle.max()):.3g} degrees in "
            f"a lag of {lag:.4g} s, allowed are {np.degrees(ALIASED):.3g} (aliasing: "
            "beyond, nobody knows which way); use a shorter lag"
        )
        raise DataError(message)
    return -_logm(psi) / lag


def matrix_bias(
    exponent: np.ndarray, covariance: np.ndarray, lag: int
) -> tuple[np.ndarray, np.ndarray]:
    """Number of pairs times the bias of a lag matrix, and the sum of covariances.

    Parameters
    ----------
    exponent : ndarray, shape (n, n)
        Rate times step.
    covariance : ndarray, shape (n, n)
    lag : int
        Lag in samples.

    Returns
    -------
    bias, memory : ndarray, shape (n, n)
        `memory` is the sum of the covariance over lags of either sign.
    """
    one = np.eye(len(exponent))
    phi = linalg.expm(-exponent)
    psi = linalg.expm(-lag * exponent)
    values = np.linalg.eigvals(phi)
    sums = np.zeros_like(phi)
    power = phi  # phi^k
    ahead = np.linalg.solve(phi, psi)  # phi^(lag - k)
    for _ in range(1, lag):
        shared = ahead @ covariance - psi @ covariance @ power.T
        sums += shared @ (power.T + np.trace(power) * one)
        power, ahead = power @ phi, np.linalg.solve(phi, ahead)
    innovation = covariance - psi @ covariance @ psi.T
    tail = psi.T @ np.linalg.inv(one - (phi @ phi).T)
    for value in values:
        tail = tail + value**lag * np.linalg.inv(one - value * phi.T)
    sums += innovation @ tail.real
    half = np.linalg.solve(one - phi, covariance)
    memory = half + half.T - covariance
    sums += (one - psi) @ memory
    return -np.linalg.solve(covariance, sums.T).T, memory


def _check_units(psi, paired, first, names):
    """Raise DataError unless every lag correlation has a logarithm to trust."""
    low = np.where(paired, 1.0, psi.real).min(axis=0) <= 0
    if low.any():
        which = int(np.flatnonzero(low)[0])
        message = (
            f"{WHERE}: {names[first[which]]} has the correlation "
            f"{psi[0, which].real:.3g} at this lag, and a real logarithm asks for a "
            "positive one, with and without each batch: a coordinate that decays by "
            "itself never has a negative one; use a shorter lag, or method = "
            '"integral"'
        )
        raise DataError(message)
    angle = np.where(paired, np.abs(np.angle(psi[0])), 0.0)
    if (angle > ALIASED).any():
        which = int(angle.argmax())
        message = (
            f"{WHERE}: the wave of {names[first[which]]} turns by "
            f"{np.degrees(angle[which]):.3g} degrees in this lag, allowed are "
            f"{np.degrees(ALIASED):.3g} (aliasing: beyond, nobody knows which way); "
            "use a shorter lag"
        )
        raise DataError(message)


def _unbiased_units(psi, lag, paired, count):
    """Lag correlations less their bias, and the sum of correlations of one lag."""
    found = psi[0]
    phi = found ** (1 / lag)
    memory = (1 - np.abs(phi) ** 2) / np.abs(1 - phi) ** 2
    bias = np.where(paired, 1, 2) * lag * found + (1 - found) * memory
    return psi + bias / count, memory


def _straightened(psi):
    """Minus the logarithm of replicates, less its bias from their scatter."""
    logs = -np.log(psi)
    batches = len(psi) - 1
    curved = logs[1:].mean(axis=0) + np.log(psi[1:].mean(axis=0))
    return logs - (batches - 1) * curved


def _matrix_rates(psi, lag):
    """Rates of lag matrices less the bias from scatter; None without any."""
    values = np.linalg.eigvals(psi)
    real = np.abs(values.imag) <= 1e-12 * np.abs(values)
    if (real & (values.real <= 0)).any() or (np.abs(values[0]) >= 1).any():
        return None
    logs = -_logm(psi)
    batches = len(psi) - 1
    curved = logs[1:].mean(axis=0) + _logm(psi[1:].mean(axis=0))
    rates = (logs - (batches - 1) * curved) / lag
    return rates if (np.linalg.eigvals(rates[0]).real > 0).all() else None


def _logm(psi):
    """Principal logarithms of real matrices, shape (..., n, n)."""
    values, vectors = np.linalg.eig(psi)
    if np.max(np.linalg.cond(vectors)) * np.finfo(float).eps > ROUND_OFF:
        flat = psi.reshape(-1, *psi.shape[-2:])
        return np.stack([linalg.logm(one).real for one in flat]).reshape(psi.shape)
    logs = vectors * np.log(values.astype(complex))[..., None, :]
    return np.linalg.solve(
        vectors.swapaxes(-1, -2), logs.swapaxes(-1, -2)
    ).real.swapaxes(-1, -2)


def _some(names):
    """Name up to three coordinates."""
    return ", ".join(names[:3]) + (f" and {len(names) - 3} more" * (len(names) > 3))
