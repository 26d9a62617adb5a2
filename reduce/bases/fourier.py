"""Fourier basis: the model's own waves, some kept and some not."""

from __future__ import annotations

import numpy as np

from eddyshed.solver.errors import DataError

from ..contract import Model, metric
from .basis import Basis, count_for_share
from .settings import FourierSettings


def fourier_basis(
    settings: FourierSettings, model: Model, variance: np.ndarray, *, share: float
) -> tuple[Basis, Basis]:
    """Divide the model's coordinates into kept waves and the rest.

    Parameters
    ----------
    settings : FourierSettings
        Which waves are kept.
    model : Model
        Must name its `waves`, `partners` and `labels`.
    variance : ndarray, shape (size,)
        Variance of the truth in each coordinate.
    share : float
        Share of the variance of all other waves that is wanted.

    Returns
    -------
    resolved : Basis
        The kept waves, in the model's order.
    unresolved : Basis
        As many others as hold the share, by falling variance; the two parts of
        a wave stay together.

    Raises
    ------
    DataError
        If a listed wave is not on the grid, or nothing or everything is kept.

    Notes
    -----
    Between walls the waves are sines, counted in half waves; there "zonal" keeps
    the modes of a channel that do not vary in x, and nothing in a basin.

    The two parts of a wave are marked as a rotating pair only where the wave has
    two and varies in x: the oceans here are statistically homogeneous in x, but a
    forcing that varies in y tells sine from cosine in the waves that do not.
    """
    waves = model.waves
    size = len(waves)
    kept = kept_coordinates(settings, waves)
    weights = metric(model)
    if weights.ndim == 2:
        message = (
            '[resolved] kind = "fourier": the model\'s waves are not orthogonal in '
            "its inner product; use another basis"
        )
        raise DataError(message)
    partners = np.where(waves[:, 0] != 0, model.partners, -1)
    scaled = variance * weights
    # A wave's rank is that of its two parts together.
    alone = model.partners < 0
    wave_variance = scaled + np.where(alone, 0.0, scaled[model.partners])
    order = np.lexsort((np.arange(size), -wave_variance))
    others = order[~kept[order]]
    count = count_for_share(scaled[others], share, scaled[others].sum())
    count = min(count, len(others))
    partner = partners[others[count - 1]]
    if partner >= 0 and partner not in others[:count]:
        count += 1  # its other half is the next
    return (
        _coordinates(model, weights, partners, scaled, np.flatnonzero(kept)),
        _coordinates(model, weights, partners, scaled, others[:count]),
    )


def _coordinates(model, weights, partners, variance, chosen):
    """Some of the model's coordinates as a basis."""
    position = {int(old): new for new, old in enumerate(chosen)}
    vectors = np.zeros((len(weights), len(chosen)))
    vectors[chosen, np.arange(len(chosen))] = 1 / np.sqrt(weights[chosen])
    return Basis(
        vectors=vectors,
        labels=tuple(model.labels[i] for i in chosen),
        partners=np.array([position.get(int(partners[i]), -1) for i in chosen], int),
        variance=variance[chosen],
    )


def kept_coordinates(settings: FourierSettings, waves: np.ndarray) -> np.ndarray:
    """Which coordinates a family of waves holds.

    Parameters
    ----------
    settings : FourierSettings
        The family.
    waves : ndarray of int, shape (size, 2)
        Wavenumbers of each coordinate, in waves per box.

    Returns
    -------
    ndarray of bool, shape (size,)

    Raises
    ------
    DataError
        If a wave is not on the grid, or nothing or everything is kept.
    """
    largest = np.abs(waves).max(axis=0).tolist()
    total = np.hypot(*waves.T)
    if settings.family == "listed":
        kept = np.zeros(len(waves), dtype=bool)
        for wave in settings.waves:
            same = np.all(waves == wave, axis=1) | np.all(-waves == wave, axis=1)
            if not same.any():
                low = np.abs(waves).min(axis=0).tolist()
                between = f" from {low}" if max(low) > 0 else ""
                message = (
                    f"[resolved] waves: {list(wave)} is not on this grid, which keeps "
                    f"waves{between} up to {largest} in x and y"
                )
                raise DataError(message)
            kept |= same
    else:
        if settings.up_to > total.max():
            message = (
                f"[resolved] up_to = {settings.up_to:g} lies beyond the grid, whose "
                f"largest wavenumber is {total.max():.4g} waves per box"
            )
            raise DataError(message)
        kept = total <= settings.up_to + 1e-9
        if settings.family == "zonal":
            kept &= waves[:, 0] == 0
            if not np.any(waves[:, 0] == 0):
                message = (
                    '[resolved] family = "zonal": between walls in x every mode varies '
                    'in x; use family = "isotropic" or "listed"'
                )
                raise DataError(message)
    if kept.all() or not kept.any():
        message = (
            f"[resolved] keeps {'every' if kept.all() else 'no'} wave of the "
            f"{len(np.unique(waves, axis=0))} on this grid (up to {largest} in x and "
            "y); change up_to or waves, or the grid"
        )
        raise DataError(message)
    return kept
