"""Two layers of quasi-geostrophic flow over each other: eddies of a sheared current.

The state is the departure, the eddies, from steady currents U1 and U2 along x
that are imposed. For the streamfunction psi_i of layer i, with
``u = -psi_y``, ``v = psi_x``:

    dq_i/dt + J(psi_i, q_i) + U_i dq_i/dx + Q_i dpsi_i/dx = S_i - friction_i
    q1 = lap psi1 + F1 (psi2 - psi1),   Q1 = beta + F1 (U1 - U2)
    q2 = lap psi2 + F2 (psi1 - psi2),   Q2 = beta - F2 (U1 - U2)

S is the vorticity source of the forcing; it acts on the upper layer alone, as
wind does. Viscosity and hyperviscosity act on the potential vorticity q_i of
both layers, bottom drag on the relative vorticity ``lap psi2`` of the lower.
See Pedlosky, Geophysical Fluid Dynamics (1987), chapters 6 and 7, and
Phillips (1954), Tellus 6:273.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from functools import cached_property
from typing import Any

import numpy as np

from ..block_functions import block_function
from ..errors import DataError
from ..inner_products import InnerProduct, quasigeostrophic
from . import two_layer_measures as measures
from .linear_fields import LinearField
from .two_layer_waves import (
    TwoLayerSettings,
    dissipation,
    frequencies,
    linear_blocks,
    modes_to_layers,
    stiffness,
)
from .wave_blocks import WaveBlocks

__all__ = ["TwoLayer", "TwoLayerSettings"]


class TwoLayer:
    """Two-layer ocean, periodic along x, ``dz/dt = F + A z + B(z, z)``.

    Parameters
    ----------
    settings : TwoLayerSettings
        Physical parameters.
    space : Periodic or Channel
        The box and its modes; it must be periodic in x.
    source : ndarray, shape (n_real,), optional
        Vorticity source S of the upper layer [s-2]; none by default.

    Attributes
    ----------
    size : int
        Number of coordinates, two for each of the space.
    edge : float
        Smaller of the largest wavenumbers kept along x and y [m-1].
    dissipation : ndarray, shape (n_real,)
        Rate of viscosity and hyperviscosity [s-1].
    energy_conserving : bool
        B does no work: ``inner(z, B(z, z)) = 0``. It conserves the potential
        enstrophy of each layer as well.

    Raises
    ------
    DataError
        If the space is not periodic in x.

    Notes
    -----
    The coordinates are those of the vertical modes, first all of the
    barotropic mode ``psi_b = h1 psi1 + h2 psi2``, then all of the baroclinic
    mode ``psi_c = sqrt(h1 h2) (psi1 - psi2)``, ``h_i = H_i / (H1 + H2)``, each
    times the root of its stiffness. The domain-mean energy per mass
    [m2 s-2],

        E = sum_i h_i <|grad psi_i|^2> / 2 + F1 h1 <(psi1 - psi2)^2> / 2
          = <|grad psi_b|^2 + |grad psi_c|^2 + psi_c^2 / Ld^2> / 2,

    kinetic and available potential, is then ``z.z / 2``. Of the matrices that
    make it so, the vertical modes are the simplest: they are the same for
    every wavenumber, and each coordinate means something.

    All of A, shear, beta, drag and viscosity, mixes only the two modes of one
    wave: it is treated exactly in time by one complex 2 x 2 matrix each.

    Between walls the space's functions vanish at the walls, also those that
    do not vary in x: neither layer gains a net transport. The mean depth of
    the interface is not held, as it would be by a further condition on the
    mean flow (McWilliams 1977, Dyn. Atmos. Oceans 1:427).
    """

    energy_conserving = True
    unit = "m s-1"
    prognostic = ("upper_streamfunction", "lower_streamfunction")

    def __init__(
        self,
        settings: TwoLayerSettings,
        space: Any,
        source: np.ndarray | None = None,
    ):
        if not space.x_is_periodic:
            message = (
                '[ocean] kind = "two_layer": between walls in x the imposed currents '
                'cannot flow; take [grid] space = "periodic" or "channel"'
            )
            raise DataError(message)
        self.settings = settings
        self.space = space
        self.size = 2 * space.n_real
        self._root = np.sqrt(stiffness(settings, space.k_squared))
        self._from_psi = np.sqrt(space.norm) * self._root
        # d(psi_mode)/dt = (J - S)_mode / stiffness, in these coordinates:
        self._from_vorticity = np.sqrt(space.norm) / self._root
        self._to_layers = modes_to_layers(settings)
        self._to_modes = self._to_layers.T * np.array(settings.fractions)
        # What multiplies z on the way to the layers, shape (layer, mode, n_real).
        self._layers = self._to_layers[:, :, np.newaxis] / self._from_psi
        self.edge = min(
            np.abs(space.wavenumber_x).max(), np.abs(space.wavenumber_y).max()
        )
        self.dissipation = dissipation(settings, space.k_squared, self.edge)
        real, imaginary = linear_blocks(
            settings, space.wavenumber_x, space.k_squared, self.dissipation
        )
        self._blocks = real + 1j * imaginary
        self._linear = WaveBlocks(self._blocks, space.partners)
        self.source = np.zeros(space.n_real) if source is None else np.array(source)
        upper = np.stack([self.source, np.zeros_like(self.source)])
        self._forcing = -(self._from_vorticity * (self._to_modes @ upper)).ravel()

    def streamfunctions(self, z: np.ndarray) -> np.ndarray:
        """Streamfunctions of both layers [m2 s-1], shape (..., 2, n_real)."""
        return self._to_layers @ (self._stacked(z) / self._from_psi)

    def streamfunction(self, z: np.ndarray) -> np.ndarray:
        """Streamfunction of the upper layer, shape (..., n_real)."""
        return self.streamfunctions(z)[..., 0, :]

    def layers(self, z: np.ndarray) -> np.ndarray:
        """Streamfunctions of both layers of one state, shape (2, n_real): fast."""
        modes = z.reshape(2, -1)
        result = self._layers[:, 0] * modes[0]
        result += self._layers[:, 1] * modes[1]
        return result

    def coordinates(self, upper: np.ndarray, lower: np.ndarray) -> np.ndarray:
        """Coordinates of the layers' streamfunctions, shape (..., size).

        Parameters
        ----------
        upper, lower : ndarray, shape (..., n_real)
            Streamfunctions [m2 s-1], as in `prognostic`.
        """
        psi = np.stack([upper, lower], axis=-2)
        return self._flat((self._to_modes @ psi) * self._from_psi)

    def potential_vorticity(self, psi: np.ndarray) -> np.ndarray:
        """Potential vorticity q of both layers [s-1], shape (..., 2, n_real)."""
        upper, lower = self.settings.coupling
        step = psi[..., 1, :] - psi[..., 0, :]
        return -self.space.k_squared * psi + np.stack(
            [upper * step, -lower * step], axis=-2
        )

    @property
    def waves(self) -> np.ndarray:
        """Integer wavenumbers (x, y) of each coordinate, shape (size, 2)."""
        return np.tile(self.space.waves, (2, 1))

    @property
    def partners(self) -> np.ndarray:
        """Index of the other part of the same wave, or -1, shape (size,)."""
        once = self.space.partners
        return np.concatenate([once, np.where(once < 0, -1, once + len(once))])

    @cached_property
    def labels(self) -> tuple[str, ...]:
        """Name of each coordinate: vertical mode, part and integer wavenumbers."""
        return tuple(
            f"{mode} {label}"
            for mode in ("barotropic", "baroclinic")
            for label in self.space.labels
        )

    def forcing(self, t: float) -> np.ndarray:
        """F [m s-2], shape (size,)."""
        return self._forcing.copy()

    def linear(self, z: np.ndarray) -> np.ndarray:
        """A z [m s-2], shape (..., size)."""
        return self._flat(self._linear(self._stacked(z)))

    def bilinear(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """B(u, w), symmetric, shape (..., size), over all leading axes."""
        u, w = np.broadcast_arrays(u, w)
        psi_u, psi_w = self.streamfunctions(u), self.streamfunctions(w)
        flat = (-1, 2, self.space.n_real)
        pairs = zip(psi_u.reshape(flat), psi_w.reshape(flat), strict=True)
        rows = [self._advection(a, b) for a, b in pairs]
        return np.reshape(rows, u.shape)

    def inner(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """Energy inner product [m2 s-2], shape (...)."""
        return np.sum(np.multiply(u, w), axis=-1)

    def inner_product(self, name: str) -> InnerProduct:
        """Inner product of a name: energy, l2 or enstrophy, of both layers."""
        return quasigeostrophic(name, self.enstrophy_weights)

    @property
    def enstrophy_weights(self) -> np.ndarray:
        """Weights w of the enstrophy, ``sum(w * z * z) / 2`` [m-2], shape (size,)."""
        return np.square(self._root).ravel()

    def frequencies(self) -> np.ndarray:
        """Complex frequencies of the linear waves [s-1], those that grow first.

        Returns
        -------
        ndarray of complex, shape (n, 2)
            For ``exp(-i omega t)``; one row for each k and K^2 of the space.
        """
        k = np.stack([self.space.wavenumber_x, self.space.k_squared], axis=1)
        k, k_squared = np.unique(k, axis=0).T
        damping = dissipation(self.settings, k_squared, self.edge)
        return frequencies(self.settings, k, k_squared, damping)

    @property
    def damping(self) -> np.ndarray:
        """Rate at which friction alone damps each coordinate [s-1], shape (size,)."""
        return -np.concatenate([self._blocks[0, 0].real, self._blocks[1, 1].real])

    @property
    def fastest_frequency(self) -> float:
        """Largest angular frequency of a linear wave [s-1]."""
        return float(np.abs(self.frequencies().real).max())

    def linear_function(
        self, function: Callable[[np.ndarray], np.ndarray]
    ) -> Callable[[np.ndarray], np.ndarray]:
        """Return ``z -> function(A) z``.

        Parameters
        ----------
        function : callable
            Entire function of a complex number, real on the real axis, called
            with arrays of any shape.
        """
        # Waves that differ in the sign of l alone share a block.
        k = np.stack([self.space.wavenumber_x, self.space.k_squared], axis=1)
        _, first, back = np.unique(k, axis=0, return_index=True, return_inverse=True)
        blocks = np.moveaxis(self._blocks[..., first], -1, 0)
        results = np.moveaxis(block_function(blocks, function), 0, -1)
        multiply = WaveBlocks(results[..., back.ravel()], self.space.partners)
        return lambda z: multiply(z.reshape(2, -1)).ravel()

    def exact_flow(self, interval: float) -> Callable[[np.ndarray], np.ndarray]:
        """Return the function ``z -> exp(A interval) z``."""
        return self.linear_function(lambda rates: np.exp(rates * interval))

    def explicit(self, t: float, z: np.ndarray) -> np.ndarray:
        """F + B(z, z): what is left when A is treated exactly.

        Parameters
        ----------
        t : float
            Model time [s].
        z : ndarray, shape (size,)

        Returns
        -------
        ndarray, shape (size,)
        """
        result = self._advection(self.layers(z))
        result += self._forcing
        return result

    def tendency(self, t: float, z: np.ndarray) -> np.ndarray:
        """dz/dt [m s-2], shape (..., size): the sum of the three parts."""
        result = self.linear(z)
        states = np.ascontiguousarray(z, dtype=float).reshape(-1, self.size)
        rates = result.reshape(-1, self.size)
        for i, state in enumerate(states):
            rates[i] += self.explicit(t, state)
        return result

    def budget(self, t: float, z: np.ndarray) -> dict[str, float]:
        """Energy, enstrophies, and every source and sink; see `budget_units`.

        Parameters
        ----------
        t : float
            Model time [s].
        z : ndarray, shape (size,)

        Returns
        -------
        dict
            The terms in m2 s-3 sum to the rate of change of the energy, those
            in s-3 to that of the enstrophy.
        """
        return measures.budget(self, t, z)

    @property
    def budget_units(self) -> dict[str, tuple[str, str]]:
        """Units and long name of what `budget` returns."""
        return dict(measures.BUDGET_UNITS)

    def largest_speed(self, z: np.ndarray) -> float:
        """Largest of |u|/dx + |v|/dy of the eddies in either layer [s-1].

        The imposed currents are left out: their part is exact in time.
        """
        return measures.largest_speed(self, z)

    def fields(self, z: np.ndarray) -> dict[str, np.ndarray]:
        """Streamfunction and relative vorticity of the eddies in each layer.

        Parameters
        ----------
        z : ndarray, shape (size,)

        Returns
        -------
        dict of ndarray, shape (ny, nx)
            Names and units as `field_units` says.
        """
        return measures.fields(self, z)

    @property
    def field_units(self) -> dict[str, str]:
        """Unit of each field."""
        return dict(measures.FIELD_UNITS)

    @property
    def linear_fields(self) -> dict[str, LinearField]:
        """Fields of the eddies in each layer that are linear in the state."""
        return measures.linear_fields(self, self._layers)

    def scales(self, z: np.ndarray | None = None) -> Iterable[tuple[str, float, str]]:
        """Derived scales as (name, value, unit), the flow's own if `z` is given."""
        yield from measures.scales(self)
        if z is not None:
            yield from measures.scales_of_flow(self, z)

    def _stacked(self, z):
        """View the coordinates as vertical modes, shape (..., 2, n_real)."""
        return np.reshape(z, (*np.shape(z)[:-1], 2, self.space.n_real))

    def _flat(self, modes):
        """View vertical modes as coordinates again, shape (..., size)."""
        return modes.reshape(*modes.shape[:-2], self.size)

    def _advection(self, psi, other=None):
        """B of one pair of states from their layers' streamfunctions, (size,).

        ``J(psi1, q1) = J(psi1, lap psi1) + F1 J(psi1, psi2)`` and likewise
        below, with the opposite sign: the layers' interaction is evaluated
        once, and has no part in the barotropic mode.
        """
        space = self.space
        if other is None:
            upper, lower = space.advection(psi[0]), space.advection(psi[1])
            between = space.jacobian(psi[0], psi[1])
        else:
            upper = space.advection(psi[0], other[0])
            lower = space.advection(psi[1], other[1])
            between = space.jacobian(psi[0], other[1])
            between += space.jacobian(other[0], psi[1])
            between /= 2
        h1, h2 = self.settings.fractions
        result = np.empty((2, space.n_real))
        np.multiply(upper, h1, out=result[0])
        result[0] += h2 * lower
        between *= self.settings.deformation_radius**-2
        between += upper
        between -= lower
        np.multiply(between, math.sqrt(h1 * h2), out=result[1])
        result *= self._from_vorticity
        return result.ravel()
