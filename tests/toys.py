"""Small models that tests reduce: dense, exact, and independent of the oceans.

Import as ``from toys import ...``; ``conftest.py`` makes it importable.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from eddyshed.reduce.reduced import ReducedModel


@dataclass(frozen=True)
class Quadratic:
    """``dz/dt = F + A z + B(z, z)`` by dense arrays.

    Attributes
    ----------
    constant : ndarray, shape (n,)
    matrix : ndarray, shape (n, n)
    tensor : ndarray, shape (n, n, n)
        Symmetric in its last two axes.
    weights : ndarray, shape (n, n)
        Matrix of the inner product.
    energy_conserving : bool
    """

    constant: np.ndarray
    matrix: np.ndarray
    tensor: np.ndarray
    weights: np.ndarray
    energy_conserving: bool = False

    @property
    def size(self):
        return len(self.constant)

    def forcing(self, t):
        return self.constant.copy()

    def linear(self, z):
        return z @ self.matrix.T

    def bilinear(self, u, w):
        return np.einsum("abc,...b,...c->...a", self.tensor, u, w)

    def inner(self, u, w):
        return np.sum(u * (w @ self.weights), axis=-1)


def random_model(rng, size, *, weights=None, conserving=True):
    """Draw a model with damping and forcing.

    The tensor ``T[a, b, c] = inner(e_a, B(e_b, e_c))`` conserves energy once
    a third of its cyclic sum is taken off.
    """
    weights = np.eye(size) if weights is None else weights
    tensor = rng.standard_normal((size, size, size))
    tensor += tensor.transpose(0, 2, 1)
    if conserving:
        cyclic = tensor + tensor.transpose(1, 2, 0) + tensor.transpose(2, 0, 1)
        tensor -= cyclic / 3
    return Quadratic(
        constant=rng.standard_normal(size),
        matrix=rng.standard_normal((size, size)) - 2 * np.eye(size),
        tensor=np.einsum("ab,bcd->acd", np.linalg.inv(weights), tensor),
        weights=weights,
        energy_conserving=conserving,
    )


def random_weights(rng, size):
    """Matrix of an inner product that is not diagonal."""
    root = rng.standard_normal((size, size))
    return root @ root.T + size * np.eye(size)


def orthonormal_vectors(rng, weights, count):
    """Random columns, orthonormal in an inner product."""
    root = np.linalg.cholesky(weights)
    flat, _ = np.linalg.qr(rng.standard_normal((len(weights), count)))
    return np.linalg.solve(root.T, flat)


@dataclass(frozen=True)
class Wave:
    """A function on a grid, with what the advection of it needs.

    Attributes
    ----------
    value, x, y : ndarray, shape (points,)
        The function and its two derivatives.
    k_squared : float
        ``-laplacian / value``.
    """

    value: np.ndarray
    x: np.ndarray
    y: np.ndarray
    k_squared: float


def vorticity_waves(k, m, waves, points=24):
    """Cosine and sine of ``(p k x + q m y)`` on a periodic grid, for each (p, q)."""
    x, y = np.meshgrid(
        np.arange(points) * (2 * np.pi / k / points),
        np.arange(points) * (2 * np.pi / m / points),
    )
    result = []
    for p, q in waves:
        kx, ky = p * k, q * m
        cos, sin = (f((kx * x + ky * y).ravel()) for f in (np.cos, np.sin))
        result.append(Wave(cos, -kx * sin, -ky * sin, kx**2 + ky**2))
        result.append(Wave(sin, kx * cos, ky * cos, kx**2 + ky**2))
    return result


def vorticity_model(waves):
    """``lap psi_t + J(psi, lap psi) = 0`` projected on waves, by quadrature.

    The coordinates are the amplitudes of the waves in psi; the inner product
    is the domain mean of the product of velocities.
    """
    n = len(waves)
    tensor = np.zeros((n, n, n))
    power = np.array([np.mean(wave.value**2) for wave in waves])
    k2 = np.array([wave.k_squared for wave in waves])
    for b, psi in enumerate(waves):
        for c, other in enumerate(waves):
            # J(psi, zeta) with zeta = -k2 * other, and lap psi_t = -J:
            jacobian = -other.k_squared * (psi.x * other.y - psi.y * other.x)
            for a, wave in enumerate(waves):
                tensor[a, b, c] = np.mean(wave.value * jacobian) / (power[a] * k2[a])
    tensor = (tensor + tensor.transpose(0, 2, 1)) / 2
    return Quadratic(
        constant=np.zeros(n),
        matrix=np.zeros((n, n)),
        tensor=tensor,
        weights=np.diag(power * k2),
        energy_conserving=True,
    )


def convection_model(k, flow, heat, *, prandtl, rayleigh, points=32):
    """Free convection between slippery plates, projected by quadrature.

    With the layer's depth, its diffusion time and its temperature drop as
    units: ``zeta_t + J(psi, zeta) = Pr lap zeta + Pr Ra theta_x`` and
    ``theta_t + J(psi, theta) = psi_x + lap theta``, for z from 0 to 1.

    Parameters
    ----------
    k : float
        Horizontal wavenumber.
    flow, heat : sequence of (int, int)
        Pairs (p, q): ``sin(p k x) sin(q pi z)`` in psi and
        ``cos(p k x) sin(q pi z)`` in theta.

    Returns
    -------
    Quadratic
        Amplitudes of the flow, then of the heat. The inner product adds the
        mean products of velocities and of temperatures; the advection
        conserves either.
    """
    # Odd in z about both plates: the period 2 serves for exact quadrature.
    x, z = np.meshgrid(
        np.arange(points) * (2 * np.pi / k / points), np.arange(points) * (2 / points)
    )
    waves = []
    for pair, is_flow in [(p, True) for p in flow] + [(p, False) for p in heat]:
        kx, kz = pair[0] * k, pair[1] * np.pi
        cos, sin = (f((kx * x).ravel()) for f in (np.cos, np.sin))
        up, up_z = (f((kz * z).ravel()) for f in (np.sin, np.cos))
        along, along_x = (sin, kx * cos) if is_flow else (cos, -kx * sin)
        waves.append(Wave(along * up, along_x * up, kz * along * up_z, kx**2 + kz**2))
    n, n_flow = len(waves), len(flow)
    power = np.array([np.mean(wave.value**2) for wave in waves])
    k2 = np.array([wave.k_squared for wave in waves])
    tensor, matrix = np.zeros((n, n, n)), np.diag(-k2)
    matrix[:n_flow] *= prandtl
    for a, wave in enumerate(waves):
        for b in range(n):
            if a < n_flow <= b:  # -k2 psi_t = Pr Ra theta_x
                source = -prandtl * rayleigh * waves[b].x
                matrix[a, b] = np.mean(wave.value * source) / (power[a] * k2[a])
            elif b < n_flow <= a:
                matrix[a, b] = np.mean(wave.value * waves[b].x) / power[a]
        for b, psi in enumerate(waves[:n_flow]):
            same = range(n_flow) if a < n_flow else range(n_flow, n)
            for c in same:
                jacobian = psi.x * waves[c].y - psi.y * waves[c].x
                made = -np.mean(wave.value * jacobian) / power[a]
                # For the flow both sides carry -k2, of wave c and of wave a.
                tensor[a, b, c] += made * (k2[c] / k2[a] if a < n_flow else 1)
    tensor = (tensor + tensor.transpose(0, 2, 1)) / 2
    return Quadratic(
        constant=np.zeros(n),
        matrix=matrix,
        tensor=tensor,
        weights=np.diag(np.where(np.arange(n) < n_flow, power * k2, power)),
        energy_conserving=True,
    )


def coloured_model(operators, *, rate, covariance, name="coloured"):
    """A reduced model with all terms of projected operators."""
    op = operators
    return ReducedModel(
        name=name,
        x_forcing=op.F1,
        x_from_x=op.A11,
        x_from_xx=op.B111,
        x_from_y=op.A12,
        x_from_xy=op.B112,
        x_from_yy=op.B122,
        y_forcing=op.F2,
        y_from_x=op.A21,
        y_from_xx=op.B211,
        y_from_xy=op.B212,
        rate=rate,
        covariance=covariance,
    )
