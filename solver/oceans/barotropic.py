"""One layer of quasi-geostrophic flow on a beta plane.

The equation, for the streamfunction psi with ``u = -psi_y``, ``v = psi_x``:

    q_t + J(psi, q) + beta psi_x = S - friction,   q = lap psi - psi / Ld^2

where S is the vorticity source of the forcing (the curl of the wind stress
per unit depth and density) and the friction, linear drag, viscosity and
hyperviscosity, acts on the relative vorticity ``lap psi``. See Pedlosky,
Geophysical Fluid Dynamics (1987), chapters 3 and 4.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np

from ..config import setting
from ..spaces.periodic import Periodic


@dataclass(frozen=True, slots=True, kw_only=True)
class BarotropicSettings:
    """Parameters of the barotropic ocean, in SI units."""

    beta: float = setting(
        unit="m-1 s-1",
        default=0.0,
        doc="northward gradient of the Coriolis parameter",
    )
    deformation_radius: float = setting(
        unit="m",
        default=math.inf,
        above=0,
        infinite=True,
        doc='radius of deformation Ld; "inf" for a rigid lid',
    )
    drag: float = setting(
        unit="s-1", default=0.0, minimum=0, doc="linear drag on the vorticity"
    )
    viscosity: float = setting(
        unit="m2 s-1", default=0.0, minimum=0, doc="lateral viscosity"
    )
    hyperviscosity: float = setting(
        unit="m8 s-1",
        default=0.0,
        minimum=0,
        doc="coefficient of the eighth derivative: damps vorticity at the rate "
        "hyperviscosity * wavenumber^8",
    )


class Barotropic:
    """Barotropic ocean in a doubly periodic box, ``dz/dt = F + A z + B(z, z)``.

    Parameters
    ----------
    settings : BarotropicSettings
        Physical parameters.
    space : Periodic
        The box and its modes.
    source : ndarray of complex, shape (n_modes,), optional
        Coefficients of the vorticity source S [s-2]; none by default.

    Attributes
    ----------
    size : int
        Number of real coordinates, two for each complex mode.
    exponents : ndarray of complex, shape (n_modes,)
        The linear operator, which is diagonal and all of it treated exactly in
        time: beta term and friction [s-1].
    energy_conserving : bool
        B does no work: ``inner(z, B(z, z)) = 0``.

    Notes
    -----
    The coordinates z are the real and imaginary parts, interleaved, of
    ``c_k = sqrt(2 (K^2 + 1/Ld^2)) psi_k``. They are orthonormal in the energy
    inner product: the domain-mean energy
    ``<|grad psi|^2 + psi^2/Ld^2> / 2`` [m2 s-2] is ``z.z / 2``, and z has the
    unit of a velocity. As a flow, the real part of c_k is the amplitude of
    ``cos(k.x)`` and the imaginary part that of ``-sin(k.x)``.
    """

    energy_conserving = True
    unit = "m s-1"

    def __init__(
        self,
        settings: BarotropicSettings,
        space: Periodic,
        source: np.ndarray | None = None,
    ):
        self.settings = settings
        self.space = space
        self.size = 2 * space.n_modes
        k2 = space.k_squared
        stiffness = k2 + settings.deformation_radius**-2
        self._to_psi = 1 / np.sqrt(2 * stiffness)
        # d(psi_k)/dt = (J_k - S_k) / stiffness, in the coordinates c_k:
        self._from_vorticity = np.sqrt(2 / stiffness)
        friction = (
            settings.drag + settings.viscosity * k2 + settings.hyperviscosity * k2**4
        )
        self.exponents = (1j * settings.beta * space.kx - friction * k2) / stiffness
        self.source = (
            np.zeros(space.n_modes, dtype=complex)
            if source is None
            else np.array(source, dtype=complex)
        )
        self._forcing = -self._from_vorticity * self.source

    def streamfunction(self, z: np.ndarray) -> np.ndarray:
        """Coefficients of the streamfunction [m2 s-1], shape (..., n_modes)."""
        return _as_modes(z) * self._to_psi

    def coordinates(self, psi: np.ndarray) -> np.ndarray:
        """Coordinates of a streamfunction, shape (..., size); inverse of the above."""
        return _as_real(psi / self._to_psi)

    @property
    def waves(self) -> np.ndarray:
        """Integer wavenumbers (x, y) of each coordinate, shape (size, 2)."""
        return np.repeat(self.space.waves, 2, axis=0)

    @property
    def partners(self) -> np.ndarray:
        """Index of the other part, cosine or sine, of the same wave, shape (size,)."""
        return np.arange(self.size) ^ 1

    @property
    def labels(self) -> tuple[str, ...]:
        """Name of each coordinate: part and integer wavenumbers."""
        return tuple(
            f"{part} {k},{m}" for k, m in self.space.waves for part in ("cos", "sin")
        )

    def forcing(self, t: float) -> np.ndarray:
        """F [m s-2], shape (size,)."""
        return _as_real(self._forcing.copy())

    def linear(self, z: np.ndarray) -> np.ndarray:
        """A z [m s-2], shape (..., size)."""
        return _as_real(_as_modes(z) * self.exponents)

    def bilinear(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """B(u, w), symmetric, shape (..., size), over all leading axes."""
        u, w = np.broadcast_arrays(u, w)
        psi_u, psi_w = self.streamfunction(u), self.streamfunction(w)
        shape = psi_u.shape
        result = np.empty((math.prod(shape[:-1]), shape[-1]), dtype=complex)
        pairs = zip(
            psi_u.reshape(result.shape), psi_w.reshape(result.shape), strict=True
        )
        for row, (a, b) in enumerate(pairs):
            result[row] = self.space.advection(a, b)
        return _as_real((result * self._from_vorticity).reshape(shape))

    def inner(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """Energy inner product [m2 s-2], shape (...)."""
        return np.sum(np.multiply(u, w), axis=-1)

    @property
    def damping(self) -> np.ndarray:
        """Linear damping rate of each mode [s-1], shape (n_modes,)."""
        return -self.exponents.real

    @property
    def fastest_frequency(self) -> float:
        """Largest angular frequency of a linear wave [s-1]."""
        return float(np.abs(self.exponents.imag).max())

    def exact_flow(self, interval: float) -> Callable[[np.ndarray], np.ndarray]:
        """Return the function ``z -> exp(A interval) z``."""
        factor = np.exp(self.exponents * interval)
        return lambda z: (z.view(complex) * factor).view(float)

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
        result = self.space.advection(z.view(complex) * self._to_psi)
        result *= self._from_vorticity
        result += self._forcing
        return result.view(float)

    def tendency(self, t: float, z: np.ndarray) -> np.ndarray:
        """dz/dt [m s-2], shape (..., size): the sum of the three parts."""
        result = self.linear(z)
        states = np.ascontiguousarray(z, dtype=float).reshape(-1, self.size)
        rates = result.reshape(-1, self.size)
        for i, state in enumerate(states):
            rates[i] += self.explicit(t, state)
        return result

    def budget(self, t: float, z: np.ndarray) -> dict[str, float]:
        """Energy, enstrophy and the sources and sinks of energy.

        Parameters
        ----------
        t : float
            Model time [s].
        z : ndarray, shape (size,)

        Returns
        -------
        dict
            ``energy`` [m2 s-2], ``enstrophy`` [s-2], ``work`` of the steady
            forcing and ``dissipation`` (negative) [m2 s-3].
        """
        modes = _as_modes(z)
        power = modes.real**2 + modes.imag**2
        k2 = self.space.k_squared
        stiffness = k2 + self.settings.deformation_radius**-2
        return {
            "energy": float(power.sum() / 2),
            "enstrophy": float((power * stiffness).sum() / 2),
            "work": float(np.vdot(self._forcing, modes).real),
            "dissipation": float((power * self.exponents.real).sum()),
        }

    def fields(self, z: np.ndarray) -> dict[str, np.ndarray]:
        """Streamfunction [m2 s-1] and relative vorticity [s-1] on the grid.

        Parameters
        ----------
        z : ndarray, shape (size,)

        Returns
        -------
        dict of ndarray, shape (ny, nx)
        """
        psi = self.streamfunction(z)
        return {
            "streamfunction": self.space.to_grid(psi),
            "vorticity": self.space.to_grid(-self.space.k_squared * psi),
        }

    def largest_speed(self, z: np.ndarray) -> float:
        """Largest of |u|/dx + |v|/dy on the grid [s-1], for the CFL number."""
        psi = self.streamfunction(z)
        (nx, ny), (lx, ly) = self.space.points, self.space.lengths
        u = self.space.to_grid(-1j * self.space.ky * psi)
        v = self.space.to_grid(1j * self.space.kx * psi)
        return float(np.max(np.abs(u) * (nx / lx) + np.abs(v) * (ny / ly)))

    def scales(self, z: np.ndarray | None = None) -> Iterable[tuple[str, float, str]]:
        """Derived scales as (name, value, unit), the flow's own if `z` is given."""
        k2 = self.space.k_squared
        damping = self.damping
        spacing = max(
            length / n
            for length, n in zip(self.space.lengths, self.space.points, strict=True)
        )
        yield "grid spacing", spacing, "m"
        yield "shortest wavelength kept", 2 * np.pi / math.sqrt(k2.max()), "m"
        yield "deformation radius", self.settings.deformation_radius, "m"
        if damping.max() > 0:
            yield "shortest damping time", 1 / damping.max(), "s"
        if damping.min() > 0:
            yield "longest damping time", 1 / damping.min(), "s"
        if self.fastest_frequency > 0:
            period = 2 * np.pi / self.fastest_frequency
            yield "shortest Rossby wave period", period, "s"
        if z is not None:
            energy = float(z @ z) / 2
            enstrophy = float((self.space.k_squared.repeat(2) * z * z).sum() / 2)
            speed = math.sqrt(2 * energy)
            yield "rms speed", speed, "m s-1"
            if self.settings.beta > 0:
                rhines = 2 * np.pi * math.sqrt(speed / self.settings.beta)
                yield "Rhines wavelength", rhines, "m"
            if enstrophy > 0:
                yield "eddy turnover time", 2 * np.pi / math.sqrt(2 * enstrophy), "s"


def _as_modes(z):
    """Real coordinates (..., size) as complex ones (..., size / 2)."""
    return np.ascontiguousarray(z, dtype=float).view(complex)


def _as_real(modes):
    """Complex coordinates (..., size / 2) as real ones (..., size)."""
    return np.ascontiguousarray(modes).view(float)
