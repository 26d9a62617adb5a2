"""Inner products of states: energy, mean square streamfunction, potential enstrophy.

The coordinates of every ocean are orthonormal in energy. What another product
weighs them with is all that a reduction needs to work in that product.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .errors import DataError

INNER_PRODUCTS = ("energy", "l2", "enstrophy")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class InnerProduct:
    """A named inner product of the states of an ocean.

    Attributes
    ----------
    name : str
        One of `INNER_PRODUCTS`.
    weights : ndarray, shape (size,)
        ``inner(u, w) = sum(weights * u * w)`` for states u and w; its unit is
        the square of `unit`.
    unit : str
        Unit of coordinates that are orthonormal in this product.
    conserved : bool
        Whether ``inner(z, B(z, z)) = 0`` for every state z.
    """

    name: str
    weights: np.ndarray
    unit: str
    conserved: bool


def quasigeostrophic(name: str, stiffness: np.ndarray) -> InnerProduct:
    """Inner product of states whose potential vorticity is ``-stiffness * psi``.

    Parameters
    ----------
    name : str
        ``energy``: twice the energy, ``sum(z * z)``; ``l2``: the domain mean of
        psi^2; ``enstrophy``: that of q^2, twice the potential enstrophy. Of
        layers the means are weighted by depth.
    stiffness : ndarray, shape (size,)
        ``K^2 + 1/Ld^2`` of each coordinate [m-2].

    Raises
    ------
    DataError
        If there is no product of this name.

    Notes
    -----
    With energy ``sum(z * z) / 2 = sum(stiffness * norm * psi^2) / 2`` the others
    follow from ``q = -stiffness * psi``. Advection conserves energy and potential
    enstrophy, also when it is truncated (Kraichnan 1967, Phys. Fluids 10:1417);
    it does not conserve the mean of psi^2.
    """
    if name == "energy":
        return _energy(len(stiffness))
    if name == "l2":
        return InnerProduct(
            name=name, weights=1 / stiffness, unit="m2 s-1", conserved=False
        )
    if name == "enstrophy":
        return InnerProduct(
            name=name, weights=np.array(stiffness), unit="s-1", conserved=True
        )
    listed = ", ".join(f'"{one}"' for one in INNER_PRODUCTS)
    message = f'inner_product = "{name}": this ocean has {listed}'
    raise DataError(message)


def energy_alone(name: str, size: int, why: str) -> InnerProduct:
    """Inner product of an ocean for which energy alone makes sense.

    Parameters
    ----------
    name : str
        Which one.
    size : int
        Number of coordinates.
    why : str
        Why the others make none, as a clause.

    Raises
    ------
    DataError
        If it is not ``energy``.
    """
    if name == "energy":
        return _energy(size)
    message = f'inner_product = "{name}": this ocean has "energy" alone, as {why}'
    raise DataError(message)


def _energy(size):
    return InnerProduct(
        name="energy", weights=np.ones(size), unit="m s-1", conserved=True
    )
