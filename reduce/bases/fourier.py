"""Fourier basis: the model's own waves, some kept and some not."""

from __future__ import annotations

import numpy as np

from eddyshed.solver.errors import DataError

from ..contract import Model, metric
from ..settings import FourierSettings
from .basis import Basis


def fourier_basis(
    settings: FourierSettings, model: Model, variance: np.ndarray
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

    Returns
    -------
    resolved : Basis
        The kept waves, in the model's order.
    remainder : Basis
        All others, by falling variance; the two parts of a wave stay
        together.

    Raises
    ------
    DataError
        If a listed wave is not on the grid, or nothing or everything is kept.

    Notes
    -----
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
    everything = Basis(
        vectors=np.diag(1 / np.sqrt(weights)),
        labels=model.labels,
        partners=partners,
        variance=scaled,
    )
    # A wave's rank is that of its two parts together.
    alone = model.partners < 0
    wave_variance = scaled + np.where(alone, 0.0, scaled[model.partners])
    order = np.lexsort((np.arange(size), -wave_variance))
    return (
        everything.take(np.flatnonzero(kept)),
        everything.take(order[~kept[order]]),
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
                message = (
                    f"[resolved] waves: {list(wave)} is not on this grid, which keeps "
                    f"up to {largest} in x and y"
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
    if kept.all() or not kept.any():
        message = (
            f"[resolved] keeps {'every' if kept.all() else 'no'} wave of the "
            f"{len(np.unique(waves, axis=0))} on this grid (up to {largest} in x and "
            "y); change up_to or waves, or the grid"
        )
        raise DataError(message)
    return kept
