"""What a flow holds and carries at each scale: spectra, and fluxes across them.

They need an ocean whose coordinates are orthonormal in energy, and each of one
wave.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np

from .errors import DataError


class Flow(Protocol):
    """What the diagnostics need of an ocean."""

    waves: np.ndarray
    size: int
    space: Any
    enstrophy_weights: np.ndarray

    def bilinear(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """B(u, w), shape (..., size)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Shells:
    """Coordinates by total wavenumber, in rings of one width.

    Attributes
    ----------
    index : ndarray of int, shape (size,)
        Ring of each coordinate: its total wavenumber over the width, rounded.
    width : float
        Of a ring [m-1]: the wider of the spacings of wavenumbers in the two
        directions, so that in a long box, too, a ring holds waves of both.
    complete : int
        Rings, from 0, that the truncation leaves whole; it cuts the others.
    """

    index: np.ndarray
    width: float
    complete: int

    @property
    def wavenumbers(self) -> np.ndarray:
        """Total wavenumber in the middle of each ring [m-1], shape (n,)."""
        return self.width * np.arange(self.index.max() + 1)


def shells(ocean: Flow) -> Shells:
    """Sort the coordinates of an ocean by total wavenumber.

    Parameters
    ----------
    ocean : Flow

    Returns
    -------
    Shells
    """
    spacing = np.array(_spacing(ocean.space))
    width = float(spacing.max())
    total = np.hypot(*(ocean.waves * spacing).T)
    # The first wave that is not kept lies one spacing beyond the last in its row.
    first_cut = float(((np.abs(ocean.waves).max(axis=0) + 1) * spacing).min())
    return Shells(
        index=np.rint(total / width).astype(int),
        width=width,
        complete=int(np.floor(first_cut / width + 0.5)),
    )


def _spacing(space):
    """Spacing of wavenumbers in x and y [m-1]: a wave per box, or half of one."""
    periodic = space.x_is_periodic, space.y_is_periodic
    pairs = zip(periodic, space.lengths, strict=True)
    return tuple((2 if waves else 1) * np.pi / length for waves, length in pairs)


def spectra_by_part(ocean: Flow, states: np.ndarray) -> np.ndarray:
    """Energy by total wavenumber, of each part of the state for itself.

    Parameters
    ----------
    ocean : Flow
        Its coordinates are those of its parts, one after the other: vertical
        modes, or flow and buoyancy. One layer is one part.
    states : ndarray, shape (..., size)

    Returns
    -------
    ndarray, shape (..., part, n)
        Energy [m2 s-2] in each of :func:`shells`.
    """
    n_real = ocean.space.n_real
    energy = np.square(states) / 2
    parts = energy.reshape(*energy.shape[:-1], ocean.size // n_real, n_real)
    return _binned(parts, shells(ocean).index[:n_real])


def isotropic_spectrum(ocean: Flow, states: np.ndarray) -> np.ndarray:
    """Energy by total wavenumber.

    Parameters
    ----------
    ocean : Flow
    states : ndarray, shape (..., size)

    Returns
    -------
    ndarray, shape (..., n)
        Energy [m2 s-2] in each of :func:`shells`; it sums to the energy of the
        state.
    """
    return _binned(np.square(states) / 2, shells(ocean).index)


def zonal_spectrum(ocean: Flow, states: np.ndarray) -> np.ndarray:
    """Energy of the flow that does not vary in x, by wavenumber in y.

    Parameters
    ----------
    ocean : Flow
        Of a space that is periodic in x: between walls everything varies.
    states : ndarray, shape (..., size)

    Returns
    -------
    ndarray, shape (..., n)
        Energy [m2 s-2] at wavenumber 0, 1, ... in y.

    Raises
    ------
    DataError
        If every coordinate varies in x.
    """
    zonal = np.flatnonzero(ocean.waves[:, 0] == 0)
    if not len(zonal):
        message = (
            "zonal spectrum: every mode of this space varies in x; ask for it in a "
            "space that is periodic in x"
        )
        raise DataError(message)
    energy = np.square(np.asarray(states)[..., zonal]) / 2
    return _binned(energy, np.abs(ocean.waves[zonal, 1]))


def spectral_flux(
    ocean: Flow, states: np.ndarray, quantity: str = "energy"
) -> np.ndarray:
    r"""Energy or enstrophy that advection carries across each total wavenumber.

    Parameters
    ----------
    ocean : Flow
        Its advection must conserve the quantity.
    states : ndarray, shape (..., size)
    quantity : {"energy", "enstrophy"}

    Returns
    -------
    ndarray, shape (..., n)
        Rate [m2 s-3] or [s-3] at which the quantity leaves all of :func:`shells`
        up to 0, 1, ... for smaller scales; the last is zero to round-off. It is
        the flux across the outer edge of each ring.

    Notes
    -----
    ``flux(K) = -sum over coordinates of shells <= K of w z B(z, z)`` with w = 1
    for the energy (Frisch, Turbulence, 1995, section 2.4) and the ocean's
    `enstrophy_weights` for the enstrophy (Kraichnan 1967, Phys. Fluids 10:1417).
    """
    return spectral_fluxes(ocean, states)[quantity]


def spectral_fluxes(ocean: Flow, states: np.ndarray) -> dict[str, np.ndarray]:
    """Both of :func:`spectral_flux`, by name, from one evaluation of the advection."""
    transfer = np.multiply(states, ocean.bilinear(states, states))
    index = shells(ocean).index
    return {
        "energy": -np.cumsum(_binned(transfer, index), axis=-1),
        "enstrophy": -np.cumsum(
            _binned(transfer * ocean.enstrophy_weights, index), axis=-1
        ),
    }


def _binned(values, bins):
    """Sums of the last axis in bins, shape (..., largest bin + 1)."""
    order = np.argsort(bins, kind="stable")
    found, starts = np.unique(bins[order], return_index=True)
    result = np.zeros((*np.shape(values)[:-1], bins.max() + 1))
    result[..., found] = np.add.reduceat(values[..., order], starts, axis=-1)
    return result
