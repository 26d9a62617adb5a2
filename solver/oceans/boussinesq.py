"""A vertical slice of stratified or convecting Boussinesq fluid.

The slice lies in x and z; nothing varies across it. In the spaces it takes the
second direction is z, upwards from 0 to the depth H. For the streamfunction
psi, ``u = -psi_z`` and ``w = psi_x``, the vorticity ``zeta = lap psi``, the
buoyancy b that departs from a background of constant gradient N2, and, with
rotation, the velocity v through the slice:

    zeta_t + J(psi, zeta) = b_x - f v_z + viscosity lap zeta + S
    b_t + J(psi, b) + N2 psi_x = diffusivity lap b + Q
    v_t + J(psi, v) - f psi_z = viscosity lap v

S and Q are the sources of the forcing. Between walls, at z = 0 and H, psi and b
are sine series in z: the walls are slippery and their buoyancy is that of the
background. With N2 < 0 they are the warm lower and the cold upper plate of
convection. See Gill, Atmosphere-Ocean Dynamics (1982), chapters 4 and 6;
Chandrasekhar, Hydrodynamic and Hydromagnetic Stability (1961), chapter II.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from functools import cached_property

import numpy as np

from ..block_functions import block_function
from ..inner_products import InnerProduct, energy_alone
from .boussinesq_budget import budget_of_state, units_of_budget
from .boussinesq_scales import scales_of_flow, scales_of_settings
from .boussinesq_waves import BoussinesqSettings, check_space, linear_blocks
from .linear_fields import LinearField, flow_fields

NAMES = ("streamfunction", "buoyancy", "cross_velocity")


class Boussinesq:
    """Boussinesq slice in the x-z plane, ``dz/dt = F + A z + B(z, z)``.

    Parameters
    ----------
    settings : BoussinesqSettings
        Physical parameters.
    space : Periodic or Channel
        The slice and its modes; its second direction is the vertical.
    source : ndarray, shape (n_real,), optional
        Vorticity source S, in the space [s-2]; none by default.
    buoyancy_source : ndarray, shape (n_real,), optional
        Buoyancy source Q, in the space [m s-3]; none by default.

    Attributes
    ----------
    size : int
        Number of real coordinates.
    directions : tuple of str
        What the space's two directions are: x and z.
    prognostic : tuple of str
        Fields that are stepped: streamfunction, buoyancy, and cross_velocity
        with rotation.
    energy_conserving : bool
        B does no work: ``inner(z, B(z, z)) = 0``.

    Raises
    ------
    DataError
        If the space is not periodic in x, or has walls and f is not 0: there,
        v would be a cosine series.

    Notes
    -----
    The coordinates are those of the space, field by field, scaled to be
    orthonormal in energy: ``z.z / 2`` is the domain mean of
    ``(|grad psi|^2 + v^2 + b^2 / W^2) / 2`` [m2 s-2] and z has the unit of a
    velocity. W is the `weight` of the settings. With ``W^2 = N2`` it is the
    energy of a stable fluid, kinetic and available potential. B keeps the
    kinetic energy and the mean square of b each for itself, so that any W
    gives a product in which B does no work; where N2 is not W^2 the linear
    part is a source or sink of this energy.

    Each wave couples to its own fields alone. So the linear part is all
    treated exactly in time, by a matrix of order two (three) for each wave.
    """

    energy_conserving = True
    unit = "m s-1"
    directions = ("x", "z")

    def __init__(
        self,
        settings: BoussinesqSettings,
        space,
        source: np.ndarray | None = None,
        buoyancy_source: np.ndarray | None = None,
    ):
        check_space(settings, space)
        self.settings = settings
        self.space = space
        self.n_fields = settings.n_fields
        self.size = self.n_fields * space.n_real
        self.prognostic = NAMES[: self.n_fields]
        self._k = space.wavenumber_x
        self._m = space.wavenumber_y
        self._blocks = linear_blocks(settings, self._k, self._m)
        root, k_squared = np.sqrt(space.norm), space.k_squared
        scale = [root * np.sqrt(k_squared), root / settings.weight, root]
        self._scale = np.array(scale[: self.n_fields])
        # zeta = -K2 psi turns the sign of the vorticity's tendency.
        from_tendency = np.array(
            [root / np.sqrt(k_squared), -root / settings.weight, -root]
        )
        self._from_advection = from_tendency[: self.n_fields]
        self._forcing = np.zeros((self.n_fields, space.n_real))
        if source is not None:
            self._forcing[0] = -self._from_advection[0] * source
        if buoyancy_source is not None:
            self._forcing[1] = self._scale[1] * buoyancy_source
        self._forcing = self._forcing.ravel()
        # Multiplication with i of the complex amplitude of each wave.
        partners = space.partners
        here = np.arange(space.n_real)
        self._partners = np.where(partners < 0, here, partners)
        self._turn_sign = np.where(partners < 0, 0.0, np.where(partners > here, -1, 1))

    def coordinates(self, *fields: np.ndarray) -> np.ndarray:
        """Coordinates of the stepped fields, in the space's own coefficients.

        Parameters
        ----------
        *fields : ndarray, shape (..., n_real)
            One for each of `prognostic`, in its unit.

        Returns
        -------
        ndarray, shape (..., size)
        """
        stacked = np.stack(np.broadcast_arrays(*fields), axis=-2)
        return self._flat(stacked * self._scale)

    def coefficients(self, z: np.ndarray) -> np.ndarray:
        """Coefficients of the stepped fields, shape (..., n_fields, n_real)."""
        return self._stacked(z) / self._scale

    def streamfunction(self, z: np.ndarray) -> np.ndarray:
        """Coefficients of the streamfunction [m2 s-1], shape (..., n_real)."""
        return self.coefficients(z)[..., 0, :]

    @property
    def waves(self) -> np.ndarray:
        """Integer wavenumbers (x, z) of each coordinate, shape (size, 2)."""
        return np.tile(self.space.waves, (self.n_fields, 1))

    @property
    def partners(self) -> np.ndarray:
        """Index of the other part of the same wave and field, -1 if none."""
        partners, n = self.space.partners, self.space.n_real
        return np.concatenate(
            [np.where(partners < 0, -1, partners + i * n) for i in range(self.n_fields)]
        )

    @cached_property
    def labels(self) -> tuple[str, ...]:
        """Name of each coordinate: field, part and integer wavenumbers in x, z."""
        return tuple(
            f"{field} {label.replace('y', 'z')}"
            for field in ("psi", "b", "v")[: self.n_fields]
            for label in self.space.labels
        )

    def forcing(self, t: float) -> np.ndarray:
        """F [m s-2], shape (size,)."""
        return self._forcing.copy()

    def linear(self, z: np.ndarray) -> np.ndarray:
        """A z [m s-2], shape (..., size)."""
        return self._flat(self._multiply(self._blocks.transpose(1, 2, 0), z))

    def bilinear(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """B(u, w), symmetric, shape (..., size), over all leading axes."""
        u, w = np.broadcast_arrays(u, w)
        flat = (-1, self.n_fields, self.space.n_real)
        first, second = (self.coefficients(v).reshape(flat) for v in (u, w))
        rows = [self._advection(a, b) for a, b in zip(first, second, strict=True)]
        return np.reshape(rows, u.shape)

    def inner(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """Energy inner product [m2 s-2], shape (...)."""
        return np.sum(np.multiply(u, w), axis=-1)

    def inner_product(self, name: str) -> InnerProduct:
        """Inner product of a name: energy, the only one that weighs all fields."""
        why = "streamfunction or vorticity alone would give the buoyancy no weight"
        return energy_alone(name, self.size, why)

    @property
    def enstrophy_weights(self) -> np.ndarray:
        """Weights w of the enstrophy, ``sum(w * z * z) / 2`` [m-2], shape (size,)."""
        flow = np.arange(self.size) < self.space.n_real
        return np.where(flow, np.tile(self.space.k_squared, self.n_fields), 0.0)

    @property
    def damping(self) -> np.ndarray:
        """Rate at which friction or diffusion damps each coordinate, shape (size,)."""
        return -np.concatenate([self._blocks[:, i, i] for i in range(self.n_fields)])

    @property
    def fastest_frequency(self) -> float:
        """Largest angular frequency of a linear wave [s-1]."""
        return float(np.abs(np.linalg.eigvals(self._blocks).imag).max())

    def linear_function(
        self, function: Callable[[np.ndarray], np.ndarray]
    ) -> Callable[[np.ndarray], np.ndarray]:
        """Return ``z -> function(A) z``.

        Parameters
        ----------
        function : callable
            Entire function of complex rates [s-1], real on the real axis.

        Returns
        -------
        callable
            Takes and returns states of shape (size,).
        """
        # Waves that differ in the sign of m or k alone are computed once.
        _, first, back = np.unique(
            np.stack([self._k, self._m], axis=1),
            axis=0,
            return_index=True,
            return_inverse=True,
        )
        values = block_function(self._blocks[first], function).real
        matrices = np.ascontiguousarray(values[back.ravel()].transpose(1, 2, 0))
        return lambda z: self._multiply(matrices, z).ravel()

    def exact_flow(self, interval: float) -> Callable[[np.ndarray], np.ndarray]:
        """Return the function ``z -> exp(A interval) z``."""
        return self.linear_function(lambda rate: np.exp(rate * interval))

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
        result = self._advection(self.coefficients(z))
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

    def heat_flux(self, z: np.ndarray) -> float:
        """Domain mean of w b, the buoyancy carried upwards [m2 s-3].

        Parameters
        ----------
        z : ndarray, shape (size,)
        """
        psi, b = self.coefficients(z)[:2]
        return float(np.sum(self.space.norm * self.space.ddx(psi) * b))

    def nusselt_number(self, z: np.ndarray) -> float:
        """Upward flux of buoyancy in units of what diffusion carries at rest.

        Parameters
        ----------
        z : ndarray, shape (size,)

        Returns
        -------
        float
            ``1 - <w b> / (diffusivity N2)``; NaN if the denominator is 0. The
            mean over the depth of what waves and diffusion carry together, since
            b is equal at both ends of the depth.
        """
        background = -self.settings.diffusivity * self.settings.buoyancy_gradient
        return 1 + self.heat_flux(z) / background if background else math.nan

    def budget(self, t: float, z: np.ndarray) -> dict[str, float]:
        """Energy and enstrophy, with all their sources and sinks.

        Parameters
        ----------
        t : float
            Model time [s].
        z : ndarray, shape (size,)

        Returns
        -------
        dict
            As `budget_units` says. Those in m2 s-3 sum to the rate of change of
            the energy, those in s-3 to that of the enstrophy.
        """
        return budget_of_state(self, t, z)

    @property
    def budget_units(self) -> dict[str, tuple[str, str]]:
        """Units and long name of what `budget` returns."""
        return units_of_budget(self.settings)

    def fields(self, z: np.ndarray) -> dict[str, np.ndarray]:
        """Fields on the grid, rows upwards.

        Parameters
        ----------
        z : ndarray, shape (size,)

        Returns
        -------
        dict of ndarray, shape (nz, nx)
            Names and units as `field_units` says. The buoyancy is the departure
            from the background.
        """
        fields = dict(zip(self.prognostic, self.coefficients(z), strict=True))
        fields["vorticity"] = -self.space.k_squared * fields["streamfunction"]
        return {name: self.space.to_grid(fields[name]) for name in self.field_units}

    @property
    def field_units(self) -> dict[str, str]:
        """Unit of each field."""
        units = {"streamfunction": "m2 s-1", "vorticity": "s-1", "buoyancy": "m s-2"}
        return units | ({"cross_velocity": "m s-1"} if self.n_fields == 3 else {})

    @property
    def linear_fields(self) -> dict[str, LinearField]:
        """Fields that are linear in the state; b is the departure, as in `fields`."""
        parts = np.eye(self.n_fields)[:, :, np.newaxis] / self._scale
        found = flow_fields(parts[0], self.space.k_squared, "upward")
        for name, weights in zip(self.prognostic[1:], parts[1:], strict=True):
            found[name] = LinearField(
                unit=self.field_units[name],
                long_name=name.replace("_", " "),
                weights=weights,
            )
        return found

    def largest_speed(self, z: np.ndarray) -> float:
        """Largest of |u|/dx + |w|/dz on the grid [s-1], for the CFL number."""
        u, w = self.space.velocity(np.ascontiguousarray(self.streamfunction(z)))
        (nx, nz), (lx, lz) = self.space.points, self.space.lengths
        return float(np.max(np.abs(u) * (nx / lx) + np.abs(w) * (nz / lz)))

    def scales(self, z: np.ndarray | None = None) -> Iterable[tuple[str, float, str]]:
        """Derived scales as (name, value, unit), the flow's own if `z` is given."""
        yield from scales_of_settings(self.settings, self.space, self._k, self._m)
        if z is not None:
            yield from scales_of_flow(self.settings, self.space, self.budget(0.0, z))

    def _stacked(self, z):
        """View coordinates (..., size) as fields (..., n_fields, n_real)."""
        return np.reshape(z, (*np.shape(z)[:-1], self.n_fields, self.space.n_real))

    def _flat(self, fields):
        """View fields as coordinates again."""
        return fields.reshape(*fields.shape[:-2], self.size)

    def _turn(self, field):
        """Multiply the complex amplitude of each wave with i, shape (..., n_real)."""
        return np.take(field, self._partners, axis=-1) * self._turn_sign

    def _multiply(self, matrices, z):
        """Apply matrices (d, d, n_real), as of `linear_blocks`, to states.

        They act on ``(psi, i b, i v)``, so what they carry between psi and the
        others turns by a quarter, and what stays among the others does not.
        """
        fields = self._stacked(z)
        psi, rest = fields[..., 0, :], fields[..., 1:, :]
        result = np.empty(fields.shape)
        carried = np.sum(matrices[0, 1:] * rest, axis=-2)
        np.multiply(matrices[0, 0], psi, out=result[..., 0, :])
        result[..., 0, :] += self._turn(carried)
        result[..., 1:, :] = -self._turn(matrices[1:, 0] * psi[..., np.newaxis, :])
        for j in range(self.n_fields - 1):
            result[..., 1:, :] += matrices[1:, j + 1] * rest[..., j, np.newaxis, :]
        return result

    def _advection(self, first, second=None):
        """B of one pair of states from their coefficients, shape (size,)."""
        space = self.space
        result = np.empty((self.n_fields, space.n_real))
        if second is None:
            result[0] = space.advection(first[0])
            for i in range(1, self.n_fields):
                result[i] = space.jacobian(first[0], first[i])
        else:
            result[0] = space.advection(first[0], second[0])
            for i in range(1, self.n_fields):
                result[i] = space.jacobian(first[0], second[i])
                result[i] += space.jacobian(second[0], first[i])
                result[i] /= 2
        result *= self._from_advection
        return result.ravel()
