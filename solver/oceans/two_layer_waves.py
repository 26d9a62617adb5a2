"""Linear waves on a vertically sheared current in two layers.

Two layers of constant depth and density under a rigid lid, on a beta plane,
with the background currents U1 (upper layer) and U2 (lower layer) along x. A
wave ``psi_i exp(i(k x + l y))`` of the two streamfunctions obeys

    dq_i/dt = -ik (U_i q_i + Q_i psi_i) - friction,
    q1 = -K2 psi1 + F1 (psi2 - psi1),   Q1 = beta + F1 (U1 - U2),
    q2 = -K2 psi2 + F2 (psi1 - psi2),   Q2 = beta - F2 (U1 - U2),

where ``K2 = k^2 + l^2``. See Pedlosky, Geophysical Fluid Dynamics (1987),
chapters 6 and 7, and Phillips (1954), Tellus 6:273.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import optimize

from ..config import setting


@dataclass(frozen=True, slots=True, kw_only=True)
class TwoLayerSettings:
    """Parameters of the two-layer ocean, in SI units."""

    upper_depth: float = setting(unit="m", above=0, doc="depth H1 of the upper layer")
    lower_depth: float = setting(unit="m", above=0, doc="depth H2 of the lower layer")
    deformation_radius: float = setting(
        unit="m",
        above=0,
        doc="baroclinic radius of deformation, Ld = sqrt(g' H1 H2 / (H1 + H2)) / f0, "
        "so that 1 / Ld^2 = F1 + F2 with Fi = f0^2 / (g' Hi)",
    )
    upper_current: float = setting(
        unit="m s-1",
        default=0.0,
        doc="imposed steady current U1 of the upper layer, along x",
    )
    lower_current: float = setting(
        unit="m s-1",
        default=0.0,
        doc="imposed steady current U2 of the lower layer, along x",
    )
    beta: float = setting(
        unit="m-1 s-1",
        default=0.0,
        doc="northward gradient of the Coriolis parameter",
    )
    drag: float = setting(
        unit="s-1",
        default=0.0,
        minimum=0,
        doc="linear bottom drag, on the relative vorticity of the lower layer's eddies",
    )
    viscosity: float = setting(
        unit="m2 s-1",
        default=0.0,
        minimum=0,
        doc="lateral viscosity, on the potential vorticity of the eddies in each layer",
    )
    hyperviscosity_time: float = setting(
        unit="s",
        default=math.inf,
        above=0,
        infinite=True,
        doc="e-folding time of hyperviscosity, which acts as viscosity does, at the "
        "largest wavenumber that the grid keeps along x or y, whichever is smaller; "
        '"inf" for none',
    )
    hyperviscosity_order: int = setting(
        default=8,
        choices=(4, 6, 8, 10, 12, 16),
        doc="power of the wavenumber with which the rate of hyperviscosity grows",
    )

    @property
    def fractions(self) -> tuple[float, float]:
        """Parts h1, h2 of the depth that the layers take; their sum is one."""
        depth = self.upper_depth + self.lower_depth
        return self.upper_depth / depth, self.lower_depth / depth

    @property
    def coupling(self) -> tuple[float, float]:
        """Coefficients F1, F2 of the layers' coupling [m-2]."""
        upper, lower = self.fractions
        return lower / self.deformation_radius**2, upper / self.deformation_radius**2

    @property
    def shear(self) -> float:
        """Difference U1 - U2 of the imposed currents [m s-1]."""
        return self.upper_current - self.lower_current

    @property
    def gradients(self) -> tuple[float, float]:
        """Background gradients Q1, Q2 of potential vorticity [m-1 s-1]."""
        upper, lower = self.coupling
        return self.beta + upper * self.shear, self.beta - lower * self.shear


def modes_to_layers(settings: TwoLayerSettings) -> np.ndarray:
    """Matrix from the amplitudes of the vertical modes to the layers.

    Parameters
    ----------
    settings : TwoLayerSettings
        Gives the layers' depths.

    Returns
    -------
    ndarray, shape (2, 2)
        T with ``(psi1, psi2) = T (psi_barotropic, psi_baroclinic)``. The
        modes, (1, 1) and (sqrt(h2/h1), -sqrt(h1/h2)), are orthonormal when
        layers are weighted by their depth: ``T.T @ diag(h1, h2) @ T`` is the
        identity.
    """
    upper, lower = settings.fractions
    ratio = math.sqrt(lower / upper)
    return np.array([[1.0, ratio], [1.0, -1 / ratio]])


def stiffness(settings: TwoLayerSettings, k_squared: np.ndarray) -> np.ndarray:
    """Minus the potential vorticity of each vertical mode of unit amplitude.

    Parameters
    ----------
    settings : TwoLayerSettings
        Gives the deformation radius.
    k_squared : ndarray, shape (...)
        Squared wavenumbers [m-2].

    Returns
    -------
    ndarray, shape (2, ...)
        ``K2`` for the barotropic and ``K2 + 1/Ld^2`` for the baroclinic mode.
    """
    return np.stack([k_squared, k_squared + settings.deformation_radius**-2])


def dissipation(
    settings: TwoLayerSettings, k_squared: np.ndarray, edge: float
) -> np.ndarray:
    """Rate at which viscosity and hyperviscosity damp a wave [s-1].

    Parameters
    ----------
    settings : TwoLayerSettings
        Physical parameters.
    k_squared : ndarray, shape (...)
        Squared wavenumbers [m-2].
    edge : float
        Wavenumber at which the time of hyperviscosity holds [m-1].

    Returns
    -------
    ndarray, shape (...)
    """
    steep = (k_squared / edge**2) ** (settings.hyperviscosity_order // 2)
    return settings.viscosity * k_squared + steep / settings.hyperviscosity_time


def linear_blocks(
    settings: TwoLayerSettings,
    wavenumber_x: np.ndarray,
    k_squared: np.ndarray,
    damping: np.ndarray | float = 0.0,
) -> tuple[np.ndarray, np.ndarray]:
    r"""Linear operator on the vertical modes of each wave, as 2 x 2 blocks.

    Parameters
    ----------
    settings : TwoLayerSettings
        Physical parameters.
    wavenumber_x : ndarray, shape (...)
        Wavenumber k along the current [m-1].
    k_squared : ndarray, shape (...)
        ``K2 = k^2 + l^2``, positive [m-2].
    damping : ndarray, shape (...), or float
        Rate of :func:`dissipation` [s-1].

    Returns
    -------
    real, imaginary : ndarray, shape (2, 2, ...)
        ``real + 1j * imaginary`` [s-1], acting on the amplitudes of the
        vertical modes times the square roots of their stiffness: coordinates
        whose sum of squares is the energy.

    Notes
    -----
    With T of :func:`modes_to_layers`, W the roots of :func:`stiffness` on the
    diagonal, U and Q the currents and gradients on the diagonal and d the
    damping, the block is

    .. math:: -d - r h_2 K^2 v v^T + ik\,(W^{-1} T^{-1} Q T W^{-1}
              - W^{-1} T^{-1} U T W),  \qquad v = W^{-1} T^T (0, 1)^T

    Drag and dissipation are symmetric and take energy from every wave; of the
    rest, only the part with the shear ``U1 - U2`` exchanges energy with the
    background.
    """
    to_layers = modes_to_layers(settings)
    weights = np.array(settings.fractions)
    to_modes = to_layers.T * weights
    currents = np.array([settings.upper_current, settings.lower_current])
    root = np.sqrt(stiffness(settings, k_squared))

    def on_waves(matrix):
        return matrix.reshape(2, 2, *(1,) * np.ndim(k_squared))

    gradients = on_waves(to_modes @ np.diag(settings.gradients) @ to_layers)
    advection = on_waves(to_modes @ np.diag(currents) @ to_layers)
    bottom = on_waves(weights[1] * np.outer(to_layers[1], to_layers[1]))
    identity = on_waves(np.eye(2))
    sides = root[:, np.newaxis] * root[np.newaxis]
    real = -damping * identity
    real = real - settings.drag * k_squared * bottom / sides
    turning = gradients / sides - advection * root[np.newaxis] / root[:, np.newaxis]
    return real, wavenumber_x * turning


def frequencies(
    settings: TwoLayerSettings,
    wavenumber_x: np.ndarray,
    k_squared: np.ndarray,
    damping: np.ndarray | float = 0.0,
) -> np.ndarray:
    """Complex frequencies of the two waves of each wavenumber.

    Parameters
    ----------
    settings : TwoLayerSettings
        Physical parameters.
    wavenumber_x, k_squared, damping : ndarray, shape (...)
        As for :func:`linear_blocks`.

    Returns
    -------
    ndarray of complex, shape (..., 2)
        omega [s-1], for waves ``exp(i(k x + l y - omega t))``, the faster
        growing one first. The imaginary part is the growth rate.
    """
    real, imaginary = linear_blocks(settings, wavenumber_x, k_squared, damping)
    blocks = np.moveaxis(real + 1j * imaginary, (0, 1), (-2, -1))
    omega = 1j * np.linalg.eigvals(blocks)
    order = np.argsort(-omega.imag, axis=-1)
    return np.take_along_axis(omega, order, axis=-1)


def most_unstable(
    settings: TwoLayerSettings, smallest_l: float = 0.0, edge: float = math.inf
) -> tuple[float, float]:
    """Find the fastest growing wave, whatever the grid.

    Parameters
    ----------
    settings : TwoLayerSettings
        Physical parameters.
    smallest_l : float
        Smallest wavenumber across the current [m-1]: zero without walls, pi
        over the width between walls.
    edge : float
        As for :func:`dissipation`; no hyperviscosity if infinite.

    Returns
    -------
    wavelength : float
        ``2 pi / K`` [m]; infinite if no wave grows.
    rate : float
        Its growth rate [s-1], 0 if no wave grows.

    Notes
    -----
    A scan of 4000 wavenumbers k up to 8 / Ld, refined about its maximum.
    Without dissipation the growth rate at given K is proportional to k, so it
    is largest for the smallest l; and where ``beta = 0`` growth ends at
    ``K^4 = 4 F1 F2``, below 1 / Ld (Pedlosky 1987, chapter 7).
    """

    def omega(k):
        k_squared = k**2 + smallest_l**2
        damping = dissipation(settings, k_squared, edge)
        return frequencies(settings, k, k_squared, damping)

    k = np.linspace(0.002, 8, 4000) / settings.deformation_radius
    scanned = omega(k)
    growth = scanned[:, 0].imag
    best = int(np.argmax(growth))
    # The round-off of real frequencies and of damping is no growth.
    if growth[best] <= 1e-9 * np.abs(scanned).max():
        return math.inf, 0.0
    found = optimize.minimize_scalar(
        lambda k: -omega(k)[0].imag,
        bounds=(k[max(best - 1, 0)], k[min(best + 1, len(k) - 1)]),
        method="bounded",
        options={"xatol": 1e-6 * k[best]},
    )
    wavelength = 2 * np.pi / math.hypot(found.x, smallest_l)
    return wavelength, float(-found.fun)
