"""Noise fitted to the unresolved modes of a study, as its config asks for."""

from __future__ import annotations

import numpy as np

from eddyshed.solver.errors import DataError

from ..bases.basis import Basis
from ..settings import NoiseFitSettings
from .fit import NoiseFit, fit_ornstein_uhlenbeck

PURE = 1 - 1e-9  # share of a mode in one wavenumber: all but round-off


def fit_noise(
    settings: NoiseFitSettings,
    series: np.ndarray,
    step: float,
    *,
    product: bool,
    basis: Basis,
    waves: np.ndarray | None,
) -> NoiseFit:
    """Fit noise to the unresolved modes.

    Parameters
    ----------
    settings : NoiseFitSettings
        Section ``[noise]``.
    series : ndarray, shape (member, time, mode)
        Unresolved coordinates.
    step : float
        Time between samples [s].
    product : bool
        Whether the modes act mostly by products, which decides a method "auto".
    basis : Basis
        The unresolved modes.
    waves : ndarray of int, shape (size, 2), or None
        Waves per box of each coordinate; None of a model that has no space.

    Returns
    -------
    NoiseFit

    Raises
    ------
    DataError
        If the series cannot be fitted so, or has no blocks.
    """
    method = settings.method
    if method == "auto":
        matrix = settings.structure in ("blocks", "full")
        method = "product" if product and not matrix else "integral"
    blocks = settings.structure == "blocks"
    if blocks and waves is None:
        message = (
            '[noise] structure = "blocks" goes by waves, and a model of your own has '
            'none; use "real diagonal" or "full"'
        )
        raise DataError(message)
    return fit_ornstein_uhlenbeck(
        series,
        step,
        method=method,
        structure=settings.structure,
        window=settings.window,
        lag=settings.lag,
        partners=basis.partners,
        groups=wave_groups(basis, waves) if blocks else None,
        labels=basis.labels,
    )


def wave_groups(basis: Basis, waves: np.ndarray) -> np.ndarray:
    """Wavenumber in x of each mode: what a sea homogeneous in x does not mix.

    Parameters
    ----------
    basis : Basis
    waves : ndarray of int, shape (size, 2)
        Waves per box of each coordinate of the ocean.

    Returns
    -------
    ndarray of int, shape (mode,)

    Raises
    ------
    DataError
        If a mode has several.
    """
    zonal = np.abs(waves[:, 0])
    numbers = np.unique(zonal)
    square = basis.vectors**2
    shares = np.stack([square[zonal == number].sum(axis=0) for number in numbers])
    shares /= shares.sum(axis=0)
    mixed = shares.max(axis=0) < PURE
    if mixed.any():
        which = int(np.flatnonzero(mixed)[0])
        message = (
            f'[noise] structure = "blocks": mode {basis.labels[which]} is made of '
            "several wavenumbers in x, allowed are modes of one; keep Fourier modes, "
            'or use "real diagonal" or "full"'
        )
        raise DataError(message)
    return numbers[shares.argmax(axis=0)]
