"""Barotropic flow over topography with a mean current that the flow changes.

The uniform current U along x, in a box that repeats both ways, is a coordinate of
the state beside the eddies psi:

    q_t + J(psi, q + h) + U (q + h)_x + beta psi_x = S - friction,   q = lap psi
    U_t = <h psi_x> + drive - drag U

The first is that of :mod:`eddyshed.solver.oceans.barotropic`. In the second the
force of the topography on the whole fluid, its form drag, is <h psi_x>: it takes
from the current just what ``-U h_x`` gives to the eddies, since the eddies gain
``U <psi h_x>`` and the current ``U <h psi_x>``. So without forcing and friction

    E = U^2 / 2 + <|grad psi|^2> / 2   and   Z = <(q + h)^2> / 2 + beta U

are conserved, Z also by a truncation: ``-beta <(q + h) psi_x> = -beta <h psi_x>``
is what beta makes of the first term, and the second undoes it. See Charney &
DeVore (1979), J. Atmos. Sci. 36:1205; Hart (1979), J. Atmos. Sci. 36:1736;
Carnevale & Frederiksen (1987), J. Fluid Mech. 175:157.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import replace

import numpy as np

from ..errors import DataError
from ..inner_products import InnerProduct, energy_alone
from .barotropic import Barotropic, BarotropicSettings
from .barotropic_scales import scales_of_flow, scales_of_settings

__all__ = ["BarotropicCurrent"]


class BarotropicCurrent:
    """Barotropic ocean with an evolving mean current, ``dz/dt = F + A z + B(z, z)``.

    Parameters
    ----------
    settings : BarotropicSettings
        Physical parameters; `mean_current` is that of the start.
    space : Periodic
        The box and its modes.
    source : ndarray, shape (n_real,), optional
        Vorticity source S, in the space [s-2]; none by default.
    topography : ndarray, shape (n_real,), optional
        The field h, in the space [s-1]; a flat bottom by default.

    Attributes
    ----------
    size : int
        Number of real coordinates: those of the eddies, then the current.
    eddies : Barotropic
        The same ocean without a current.
    energy_conserving : bool
        B does no work: ``inner(z, B(z, z)) = 0``.

    Raises
    ------
    DataError
        If there are walls.

    Notes
    -----
    The last coordinate is U itself [m s-1], so that the energy is ``z.z / 2``.
    It has no wave, which counts as the wavenumber zero.

    What U carries, ``U q_x``, is quadratic and stepped explicitly with the
    advection, as is the form drag; the drag on U is treated exactly in time.
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
        if not (space.x_is_periodic and space.y_is_periodic):
            message = (
                "[ocean] mean_current_evolves = true: its equation is that of a box "
                'without walls; take [grid] space = "periodic"'
            )
            raise DataError(message)
        self.settings = settings
        self.space = space
        self.eddies = Barotropic(
            replace(settings, mean_current=0.0), space, source, topography
        )
        self.size = self.eddies.size + 1
        self.source, self.topography = self.eddies.source, self.eddies.topography
        # F of a unit current: what topography makes of it, and it of topography.
        unit = Barotropic(
            replace(settings, mean_current=1.0), space, topography=topography
        )
        self._push = unit.forcing(0.0)
        self._drag = settings.mean_current_drag

    def streamfunction(self, z: np.ndarray) -> np.ndarray:
        """Streamfunction of the eddies [m2 s-1], shape (..., n_real)."""
        return self.eddies.streamfunction(z[..., :-1])

    def coordinates(self, psi: np.ndarray) -> np.ndarray:
        """Coordinates of eddies on the current of the start, shape (..., size)."""
        return self._joined(self.eddies.coordinates(psi), self.settings.mean_current)

    def at_rest(self) -> np.ndarray:
        """State without eddies, on the current of the start, shape (size,)."""
        return self.coordinates(np.zeros(self.eddies.size))

    @property
    def waves(self) -> np.ndarray:
        """Integer wavenumbers (x, y) of each coordinate, shape (size, 2)."""
        return np.vstack([self.eddies.waves, [[0, 0]]])

    @property
    def partners(self) -> np.ndarray:
        """Index of the other part of the same wave, or -1, shape (size,)."""
        return np.append(self.eddies.partners, -1)

    @property
    def labels(self) -> tuple[str, ...]:
        """Name of each coordinate."""
        return (*self.eddies.labels, "mean current")

    @property
    def damping(self) -> np.ndarray:
        """Rate at which friction damps each coordinate [s-1], shape (size,)."""
        return np.append(self.eddies.damping, self._drag)

    def forcing(self, t: float) -> np.ndarray:
        """F [m s-2], shape (size,)."""
        return self._joined(self.eddies.forcing(t), self.settings.mean_current_drive)

    def linear(self, z: np.ndarray) -> np.ndarray:
        """A z [m s-2], shape (..., size)."""
        result = self.linear_function(lambda rate: rate)(z)
        result += self.explicit_linear(z)
        return result

    def bilinear(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """B(u, w), symmetric, shape (..., size), over all leading axes."""
        u, w = np.broadcast_arrays(u, w)
        result = self._joined(self.eddies.bilinear(u[..., :-1], w[..., :-1]), 0.0)
        carried = u[..., -1:] * self.space.ddx(w[..., :-1])
        carried += w[..., -1:] * self.space.ddx(u[..., :-1])
        result[..., :-1] -= carried / 2
        return result

    def inner(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """Energy inner product [m2 s-2], shape (...)."""
        return np.sum(np.multiply(u, w), axis=-1)

    def inner_product(self, name: str) -> InnerProduct:
        """Inner product of a name: energy, the only one that weighs the current."""
        why = "a uniform current has no streamfunction or vorticity that repeats"
        return energy_alone(name, self.size, why)

    @property
    def enstrophy_weights(self) -> np.ndarray:
        """Weights w of the enstrophy, ``sum(w * z * z) / 2`` [m-2], shape (size,)."""
        return np.append(self.eddies.enstrophy_weights, 0.0)

    def explicit_linear(self, z: np.ndarray) -> np.ndarray:
        """Part of A z that is stepped explicitly [m s-2], shape (..., size)."""
        eddies, current = z[..., :-1], z[..., -1]
        result = self._joined(current[..., np.newaxis] * self._push, 0.0)
        coupled = self.eddies.explicit_linear(eddies)
        if coupled is not None:
            result[..., :-1] += coupled
        result[..., -1] = -np.sum(eddies * self._push, axis=-1)
        return result

    @property
    def fastest_frequency(self) -> float:
        """Largest angular frequency of a linear wave [s-1], an upper bound."""
        return self.eddies.fastest_frequency + float(np.linalg.norm(self._push))

    def linear_function(
        self, function: Callable[[np.ndarray], np.ndarray]
    ) -> Callable[[np.ndarray], np.ndarray]:
        """Return ``z -> function(L) z`` for the part L of A treated exactly.

        Parameters
        ----------
        function : callable
            Entire function of complex rates [s-1], real on the real axis.
        """
        of_eddies = self.eddies.linear_function(function)
        factor = function(np.array([-self._drag + 0j])).real[0]
        return lambda z: self._joined(of_eddies(z[..., :-1]), factor * z[..., -1])

    def exact_flow(self, interval: float) -> Callable[[np.ndarray], np.ndarray]:
        """Return the function ``z -> exp(L interval) z``."""
        return self.linear_function(lambda rate: np.exp(rate * interval))

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
        eddies, current = z[:-1], z[-1]
        result = np.empty(self.size)
        result[:-1] = self.eddies.explicit(t, eddies)
        result[:-1] += current * (self._push - self.space.ddx(eddies))
        result[-1] = self.settings.mean_current_drive - self._push @ eddies
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
            the energy, those in s-3 to that of the enstrophy. Form drag is no
            term of the energy: it takes from the current what it gives to eddies.
        """
        eddies, current = z[:-1], float(z[-1])
        found = self.eddies.budget(t, eddies)
        weights = self.eddies.enstrophy_weights
        found["energy"] += current**2 / 2
        return found | {
            "current_energy": current**2 / 2,
            "current_work": self.settings.mean_current_drive * current,
            "current_dissipation": -self._drag * current**2,
            "current_form_drag": -float(self._push @ eddies),
            "enstrophy_form_drag": current * float(self._push @ (weights * eddies)),
        }

    @property
    def budget_units(self) -> dict[str, tuple[str, str]]:
        """Units and long name of what `budget` returns."""
        return self.eddies.budget_units | {
            "current_energy": ("m2 s-2", "part of the energy in the mean current"),
            "current_work": ("m2 s-3", "energy fed to the mean current by its drive"),
            "current_dissipation": (
                "m2 s-3",
                "energy lost to the drag on the mean current (negative)",
            ),
            "current_form_drag": (
                "m s-2",
                "acceleration of the mean current by pressure on topography",
            ),
            "enstrophy_form_drag": (
                "s-3",
                "enstrophy made by the mean current over topography",
            ),
        }

    def fields(self, z: np.ndarray) -> dict[str, np.ndarray]:
        """Streamfunction and relative vorticity of the eddies on the grid.

        Parameters
        ----------
        z : ndarray, shape (size,)

        Returns
        -------
        dict of ndarray, shape (ny, nx)
            Names and units as `field_units` says.
        """
        return self.eddies.fields(z[:-1])

    @property
    def field_units(self) -> dict[str, str]:
        """Unit of each field."""
        return self.eddies.field_units

    def largest_speed(self, z: np.ndarray) -> float:
        """Largest of |u|/dx + |v|/dy on the grid [s-1], the current included."""
        u, v = self.space.velocity(self.streamfunction(z))
        (nx, ny), (lx, ly) = self.space.points, self.space.lengths
        return float(np.max(np.abs(u + z[-1]) * (nx / lx) + np.abs(v) * (ny / ly)))

    def scales(self, z: np.ndarray | None = None) -> Iterable[tuple[str, float, str]]:
        """Derived scales as (name, value, unit), the eddies' own if `z` is given."""
        yield from scales_of_settings(self)
        if z is not None:
            yield "mean current", float(z[-1]), "m s-1"
            yield from scales_of_flow(self, z)

    def _joined(self, eddies, current):
        """Coordinates of eddies and a current, shape (..., size)."""
        result = np.empty((*np.shape(eddies)[:-1], self.size))
        result[..., :-1] = eddies
        result[..., -1] = current
        return result
