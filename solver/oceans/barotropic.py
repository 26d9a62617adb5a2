"""One layer of quasi-geostrophic flow on a beta plane.

The equation, for the streamfunction psi with ``u = -psi_y``, ``v = psi_x``:

    q_t + J(psi, q + h) + U (lap psi + h)_x + beta psi_x = S - friction,
    q = lap psi - psi / Ld^2,   h = coriolis * height / depth

where S is the vorticity source of the forcing (the curl of the wind stress
per unit depth and density), h the topography, U a uniform current that is
imposed, and the friction, linear drag, viscosity and hyperviscosity, acts on
the relative vorticity ``lap psi``. See Pedlosky, Geophysical Fluid Dynamics
(1987), chapters 3 and 4.

U carries no stretching ``psi / Ld^2``: what it would carry is undone by the
tilt of the surface that balances U itself.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable

import numpy as np

from ..errors import DataError
from .barotropic_scales import scales_of_flow, scales_of_settings
from .barotropic_settings import BarotropicSettings, friction
from .linear_fields import LinearField, flow_fields

__all__ = ["Barotropic", "BarotropicSettings"]


class Barotropic:
    """Barotropic ocean, ``dz/dt = F + A z + B(z, z)``.

    Parameters
    ----------
    settings : BarotropicSettings
        Physical parameters; the topography's shapes are not looked at.
    space : Periodic, Channel or Basin
        The box and its modes.
    source : ndarray, shape (n_real,), optional
        Vorticity source S, in the space [s-2]; none by default.
    topography : ndarray, shape (n_real,), optional
        The field h, in the space [s-1]; a flat bottom by default.

    Attributes
    ----------
    size : int
        Number of real coordinates.
    damping : ndarray, shape (size,)
        Rate at which friction damps each coordinate [s-1].
    energy_conserving : bool
        B does no work: ``inner(z, B(z, z)) = 0``.

    Raises
    ------
    DataError
        If a mean current is imposed across walls.

    Notes
    -----
    The coordinates z are those of the space, of the streamfunction, times the
    root of ``norm * (K^2 + 1/Ld^2)``. They are orthonormal in the energy
    inner product: the domain-mean energy ``<|grad psi|^2 + psi^2/Ld^2> / 2``
    [m2 s-2] is ``z.z / 2``, and z has the unit of a velocity.

    Friction, and in spaces that are periodic in x also the waves due to beta
    and to the mean current, belong to one wave each and are treated exactly
    in time. In a basin beta couples all modes of one wavenumber in y; it is
    left to the explicit part, as it is not stiff there: the fastest basin
    mode turns by ``beta / (2 K)`` with K the smallest wavenumber. Topography
    is explicit everywhere: it couples all modes.

    Between walls psi vanishes at the walls, also the part of it that does not
    vary in x, so a channel has no net transport.
    """

    energy_conserving = True
    unit = "m s-1"
    prognostic = ("streamfunction",)

    def __init__(
        self,
        settings: BarotropicSettings,
        space,
        source: np.ndarray | None = None,
        topography: np.ndarray | None = None,
    ):
        if settings.mean_current != 0 and not space.x_is_periodic:
            message = (
                f"[ocean] mean_current = {settings.mean_current:.6g} m s-1 would pass "
                'through walls; leave it out, or take [grid] space = "periodic" or '
                '"channel"'
            )
            raise DataError(message)
        self.settings = settings
        self.space = space
        self.size = space.n_real
        k2 = space.k_squared
        self._stiffness = k2 + settings.deformation_radius**-2
        self._to_psi = 1 / np.sqrt(space.norm * self._stiffness)
        # d(psi)/dt = (J(psi, q + h) - S) / stiffness, in these coordinates:
        self._from_vorticity = np.sqrt(space.norm / self._stiffness)
        self._to_vorticity = -k2
        self.damping = friction(settings, space) * k2 / self._stiffness
        self._frequency = None
        # Where it is not a rotation, the beta term stays in the explicit part.
        self._beta = 0.0 if space.x_is_periodic else settings.beta
        if space.x_is_periodic:
            gradient = settings.beta - settings.mean_current * k2
            self._frequency = gradient * space.wavenumber_x / self._stiffness
        self.source = np.zeros(self.size) if source is None else np.array(source)
        self.topography = None if topography is None else np.array(topography)
        self._forcing = -self._from_vorticity * self.source
        self._pushed = np.zeros(self.size)
        if topography is not None and settings.mean_current != 0:
            gradient = space.ddx(self.topography)
            self._pushed = settings.mean_current * self._from_vorticity * gradient

    def streamfunction(self, z: np.ndarray) -> np.ndarray:
        """Streamfunction in the space [m2 s-1], shape (..., n_real)."""
        return np.multiply(z, self._to_psi)

    def coordinates(self, psi: np.ndarray) -> np.ndarray:
        """Coordinates of a streamfunction, shape (..., size); inverse of the above."""
        return np.divide(psi, self._to_psi)

    @property
    def waves(self) -> np.ndarray:
        """Integer wavenumbers (x, y) of each coordinate, shape (size, 2)."""
        return self.space.waves

    @property
    def partners(self) -> np.ndarray:
        """Index of the other part of the same wave, or -1, shape (size,)."""
        return self.space.partners

    @property
    def labels(self) -> tuple[str, ...]:
        """Name of each coordinate: part and integer wavenumbers."""
        return self.space.labels

    def forcing(self, t: float) -> np.ndarray:
        """F [m s-2], shape (size,)."""
        return self._forcing + self._pushed

    def linear(self, z: np.ndarray) -> np.ndarray:
        """A z [m s-2], shape (..., size)."""
        result = self.linear_function(lambda rate: rate)(z)
        coupling = self._coupling(z)
        return result if coupling is None else result + coupling

    def bilinear(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """B(u, w), symmetric, shape (..., size), over all leading axes."""
        u, w = np.broadcast_arrays(u, w)
        flat = (-1, self.size)
        psi_u, psi_w = (self.streamfunction(v).reshape(flat) for v in (u, w))
        pairs = zip(psi_u, psi_w, strict=True)
        rows = [self.space.advection(a, b) for a, b in pairs]
        return np.reshape(rows, u.shape) * self._from_vorticity

    def inner(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """Energy inner product [m2 s-2], shape (...)."""
        return np.sum(np.multiply(u, w), axis=-1)

    @property
    def fastest_frequency(self) -> float:
        """Largest angular frequency of a linear wave [s-1].

        With topography an upper bound: the greatest slope of h adds to it.
        """
        if self._frequency is not None:
            fastest = float(np.abs(self._frequency).max())
        else:
            fastest = self._fastest_basin_mode()
        if self.topography is not None:
            slope = np.hypot(*self.space.velocity(self.topography)).max()
            fastest += float(slope / math.sqrt(self._stiffness.min()))
        return fastest

    def linear_function(
        self, function: Callable[[np.ndarray], np.ndarray]
    ) -> Callable[[np.ndarray], np.ndarray]:
        """Return ``z -> function(L) z`` for the part L of A treated exactly.

        Parameters
        ----------
        function : callable
            Entire function of complex rates [s-1], real on the real axis.
        """
        return self.space.linear_function(self.damping, self._frequency, function)

    def exact_flow(self, interval: float) -> Callable[[np.ndarray], np.ndarray]:
        """Return the function ``z -> exp(L interval) z``."""
        return self.space.flow(self.damping, self._frequency, interval)

    def explicit(self, t: float, z: np.ndarray) -> np.ndarray:
        """F, B(z, z) and the part of A that is not treated exactly.

        Parameters
        ----------
        t : float
            Model time [s].
        z : ndarray, shape (size,)

        Returns
        -------
        ndarray, shape (size,)
        """
        psi = z * self._to_psi
        if self.topography is None:
            result = self.space.advection(psi)
        else:
            vorticity = self._to_vorticity * psi
            vorticity += self.topography
            result = self.space.jacobian(psi, vorticity)
        if self._beta:
            psi *= self._beta
            result += self.space.ddx(psi)
        result *= self._from_vorticity
        result += self._forcing
        result += self._pushed
        return result

    def tendency(self, t: float, z: np.ndarray) -> np.ndarray:
        """dz/dt [m s-2], shape (..., size): the sum of the three parts."""
        result = self.linear_function(lambda rate: rate)(z)
        states = np.ascontiguousarray(z, dtype=float).reshape(-1, self.size)
        rates = result.reshape(-1, self.size)
        for i, state in enumerate(states):
            rates[i] += self.explicit(t, state)
        return result

    def budget(self, t: float, z: np.ndarray) -> dict[str, float]:
        """Energy and potential enstrophy, with their sources and sinks.

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
        power, weighted = z * z, self._stiffness * z
        found = {
            "energy": float(power.sum() / 2),
            "enstrophy": float(weighted @ z / 2),
            "work": float(self._forcing @ z),
            "dissipation": -float(self.damping @ power),
            "enstrophy_work": float(self._forcing @ weighted),
            "enstrophy_dissipation": -float((self.damping * z) @ weighted),
        }
        if self._has_form_drag:
            found["form_drag"] = float(self._pushed @ z)
            found["enstrophy_form_drag"] = float(self._pushed @ weighted)
        if self._is_coupled:
            found["enstrophy_exchange"] = float(self._coupling(z) @ weighted)
        return found

    @property
    def budget_units(self) -> dict[str, tuple[str, str]]:
        """Units and long name of what `budget` returns."""
        units = {
            "energy": ("m2 s-2", "domain-mean energy"),
            "enstrophy": ("s-2", "domain-mean potential enstrophy"),
            "work": ("m2 s-3", "energy fed by the forcing"),
            "dissipation": ("m2 s-3", "energy lost to friction (negative)"),
            "enstrophy_work": ("s-3", "enstrophy fed by the forcing"),
            "enstrophy_dissipation": ("s-3", "enstrophy lost to friction (negative)"),
        }
        if self._has_form_drag:
            units["form_drag"] = (
                "m2 s-3",
                "energy that the mean current loses to pressure on topography",
            )
            units["enstrophy_form_drag"] = (
                "s-3",
                "enstrophy made by the mean current over topography",
            )
        if self._is_coupled:
            units["enstrophy_exchange"] = (
                "s-3",
                "enstrophy made by beta and topography",
            )
        return units

    def fields(self, z: np.ndarray) -> dict[str, np.ndarray]:
        """Streamfunction and relative vorticity on the grid.

        Parameters
        ----------
        z : ndarray, shape (size,)

        Returns
        -------
        dict of ndarray, shape (ny, nx)
            Names and units as `field_units` says.
        """
        psi = self.streamfunction(z)
        return {
            "streamfunction": self.space.to_grid(psi),
            "vorticity": self.space.to_grid(self._to_vorticity * psi),
        }

    @property
    def field_units(self) -> dict[str, str]:
        """Unit of each field."""
        return {"streamfunction": "m2 s-1", "vorticity": "s-1"}

    @property
    def linear_fields(self) -> dict[str, LinearField]:
        """Fields that are linear in the state, less the mean current and h."""
        psi = self._to_psi[np.newaxis]
        vorticity = LinearField(
            unit="s-1",
            long_name="potential vorticity",
            weights=-self._stiffness * psi,
        )
        flow = flow_fields(psi, self.space.k_squared)
        return flow | {"potential_vorticity": vorticity}

    def largest_speed(self, z: np.ndarray) -> float:
        """Largest of |u|/dx + |v|/dy on the grid [s-1], for the CFL number."""
        u, v = self.space.velocity(self.streamfunction(z))
        (nx, ny), (lx, ly) = self.space.points, self.space.lengths
        return float(np.max(np.abs(u) * (nx / lx) + np.abs(v) * (ny / ly)))

    def scales(self, z: np.ndarray | None = None) -> Iterable[tuple[str, float, str]]:
        """Derived scales as (name, value, unit), the flow's own if `z` is given."""
        yield from scales_of_settings(self)
        if z is not None:
            yield from scales_of_flow(self, z)

    @property
    def _has_form_drag(self):
        """Whether the mean current feels topography."""
        return self.topography is not None and self.settings.mean_current != 0

    @property
    def _is_coupled(self):
        """Whether a part of A is not treated exactly."""
        return self.topography is not None or self._beta != 0

    def _coupling(self, z):
        """Part of A z that is not treated exactly, None if there is none."""
        if not self._is_coupled:
            return None
        psi = self.streamfunction(z)
        result = np.zeros(psi.shape)
        if self.topography is not None:
            rows = [
                self.space.jacobian(row, self.topography)
                for row in psi.reshape(-1, self.size)
            ]
            result += np.reshape(rows, psi.shape)
        if self._beta:
            result += self._beta * self.space.ddx(psi)
        return result * self._from_vorticity

    def _fastest_basin_mode(self):
        """Largest frequency of the basin's Rossby modes, as truncated [s-1]."""
        # Those of one half wave in y: any other wavenumber there is stiffer.
        first = np.flatnonzero(self.space.waves[:, 1] == 1)
        units = np.eye(self.size)[first]
        matrix = self._beta * self.space.ddx(units * self._to_psi)[:, first]
        matrix *= self._from_vorticity[first]
        return float(np.abs(np.linalg.eigvalsh(1j * matrix)).max())
