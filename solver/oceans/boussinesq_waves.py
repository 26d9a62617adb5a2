"""Linear waves and convection of a Boussinesq fluid in a vertical slice.

A wave ``exp(i(k x + m z))`` of the streamfunction psi, the buoyancy b and the
velocity v through the slice, with ``K2 = k^2 + m^2``, obeys

    dpsi/dt = -(ik / K2) b + (im f / K2) v - viscosity K2 psi
    db/dt   = -ik N2 psi - diffusivity K2 b
    dv/dt   =  im f psi - viscosity K2 v

where N2 is the buoyancy gradient of the background, ``N^2`` if it is stable,
and f the Coriolis parameter. Its frequency without dissipation is
``sqrt((N2 k^2 + f^2 m^2) / K2)``: internal waves (Gill, Atmosphere-Ocean
Dynamics, 1982, chapters 6 and 8). With N2 < 0 it is the problem of Rayleigh
(1916) between slippery plates (Chandrasekhar, Hydrodynamic and Hydromagnetic
Stability, 1961, chapter II).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..config import setting
from ..errors import DataError


@dataclass(frozen=True, slots=True, kw_only=True)
class BoussinesqSettings:
    """Parameters of the Boussinesq slice, in SI units."""

    buoyancy_gradient: float = setting(
        unit="s-2",
        doc="upward gradient N^2 of the background buoyancy: positive for a stable "
        "stratification, negative for an unstable one (heated from below; minus the "
        "buoyancy difference across the depth over the depth), 0 for none",
    )
    viscosity: float = setting(
        unit="m2 s-1", default=0.0, minimum=0, doc="viscosity of the flow"
    )
    diffusivity: float = setting(
        unit="m2 s-1", default=0.0, minimum=0, doc="diffusivity of buoyancy"
    )
    coriolis: float = setting(
        unit="s-1",
        default=0.0,
        doc="Coriolis parameter f of the vertical rotation; other than 0 adds the "
        "velocity through the slice, in the periodic space only",
    )
    reference_frequency: float | None = setting(
        unit="s-1",
        default=None,
        above=0,
        doc="weighs buoyancy against velocity in the energy: a buoyancy b counts as "
        "the velocity b / reference_frequency; absent: the square root of the size "
        "of buoyancy_gradient. Needed if that is 0; there, a typical buoyancy over "
        "a typical velocity serves",
    )

    def problems(self):
        """Rules that go across keys."""
        if self.buoyancy_gradient == 0 and self.reference_frequency is None:
            yield (
                "buoyancy_gradient = 0 leaves no frequency to weigh buoyancy against "
                'velocity; give reference_frequency, e.g. "0.001 s-1"'
            )

    @property
    def weight(self) -> float:
        """Frequency that turns a buoyancy into a velocity [s-1]."""
        if self.reference_frequency is not None:
            return self.reference_frequency
        return math.sqrt(abs(self.buoyancy_gradient))

    @property
    def n_fields(self) -> int:
        """Number of fields stepped: psi, b and, with rotation, v."""
        return 3 if self.coriolis != 0 else 2


def check_space(settings: BoussinesqSettings, space) -> None:
    """Refuse a space that the equations do not fit.

    Parameters
    ----------
    settings : BoussinesqSettings
    space : Periodic, Channel or Basin

    Raises
    ------
    DataError
        If it has walls in x, or walls above and below with rotation.
    """
    if not space.x_is_periodic:
        message = (
            '[grid] space: the Boussinesq slice must be periodic in x; give "periodic" '
            'or "channel"'
        )
        raise DataError(message)
    if settings.n_fields == 3 and not space.y_is_periodic:
        message = (
            f"[ocean] coriolis = {settings.coriolis:.6g} s-1 does not fit walls above "
            "and below: between slippery walls the velocity through the slice is a "
            "cosine series, which this space does not hold; give coriolis = 0 or "
            '[grid] space = "periodic"'
        )
        raise DataError(message)


def linear_blocks(
    settings: BoussinesqSettings, k: np.ndarray, m: np.ndarray
) -> np.ndarray:
    r"""Linear operator on each wave, as real matrices.

    Parameters
    ----------
    settings : BoussinesqSettings
        Physical parameters.
    k, m : ndarray, shape (n,)
        Wavenumbers in x and z [m-1]; not both zero.

    Returns
    -------
    ndarray, shape (n, d, d)
        Operator [s-1] on ``(K psi, i b / W, i v)``, with W the weight of
        buoyancy; d is 3 with rotation, else 2. The factors i make it real. Of
        the parts off the diagonal those of rotation exchange energy between
        the fields, and so do those of buoyancy if ``W^2 = N2``.
    """
    k, m = np.asarray(k, dtype=float), np.asarray(m, dtype=float)
    k_squared = k**2 + m**2
    size = np.sqrt(k_squared)
    weight = settings.weight
    blocks = np.zeros((len(k), settings.n_fields, settings.n_fields))
    blocks[:, 0, 0] = -settings.viscosity * k_squared
    blocks[:, 1, 1] = -settings.diffusivity * k_squared
    blocks[:, 0, 1] = -weight * k / size
    blocks[:, 1, 0] = settings.buoyancy_gradient / weight * k / size
    if settings.n_fields == 3:
        blocks[:, 2, 2] = -settings.viscosity * k_squared
        blocks[:, 0, 2] = settings.coriolis * m / size
        blocks[:, 2, 0] = -settings.coriolis * m / size
    return blocks


def rates(settings: BoussinesqSettings, k: np.ndarray, m: np.ndarray) -> np.ndarray:
    """Complex growth rates of each wave.

    Parameters
    ----------
    settings : BoussinesqSettings
        Physical parameters.
    k, m : ndarray, shape (n,)
        Wavenumbers in x and z [m-1].

    Returns
    -------
    ndarray of complex, shape (n, d)
        s [s-1] for ``exp(s t)``, the fastest growing first.
    """
    values = np.linalg.eigvals(linear_blocks(settings, k, m)).astype(complex)
    return np.take_along_axis(values, np.argsort(-values.real, axis=-1), axis=-1)


def rayleigh_number(settings: BoussinesqSettings, depth: float) -> float:
    """Rayleigh number ``-N2 depth^4 / (viscosity diffusivity)``.

    It is ``g alpha dT depth^3 / (viscosity diffusivity)`` for a layer warmer by
    dT at its bottom, negative if stable, and infinite without dissipation.
    """
    both = settings.viscosity * settings.diffusivity
    if both == 0:
        return -math.copysign(math.inf, settings.buoyancy_gradient)
    return -settings.buoyancy_gradient * depth**4 / both


def critical_rayleigh_number(k: np.ndarray, m: np.ndarray, depth: float) -> float:
    """Rayleigh number at which the first of some waves begins to grow.

    Parameters
    ----------
    k, m : ndarray, shape (n,)
        Wavenumbers in x and z [m-1].
    depth : float
        Depth that the Rayleigh number is made with [m].

    Returns
    -------
    float
        The least ``K^6 depth^4 / k^2``: 27 pi^4 / 4 = 657.5 between plates, if
        any k is allowed (Rayleigh 1916; Chandrasekhar 1961, chapter II).

    Notes
    -----
    Without rotation.
    """
    moving = k != 0
    k_squared = k[moving] ** 2 + m[moving] ** 2
    return float((k_squared**3 / k[moving] ** 2).min() * depth**4)
