"""The channel: Fourier modes in x, sines between walls in y.

A field is ``sum_l (a_l + 2 Re sum_k c_kl exp(ikx)) sin(ly)`` with k = 1, 2, ...
waves per box and l = 1, 2, ... half waves between the walls, at which it
vanishes with its second derivative: as a streamfunction it slips along them
without stress. It is held as the real vector of all a_l, followed by the real
and imaginary parts, interleaved, of c_kl (l slow, k fast).
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cached_property

import numpy as np

from ..errors import DataError
from ..transforms import WallTransform
from .averages import Interval, mean_sine, mean_wave


class Channel:
    """Fourier and sine space on a box that repeats in x, with walls in y.

    Parameters
    ----------
    points : tuple of int
        Grid points (nx, ny).
    lengths : tuple of float
        Size of the box (x, y) [m].

    Attributes
    ----------
    cutoff : tuple of int
        Largest integer wavenumber kept: ``(nx - 1) // 3`` waves per box in x,
        ``(2 ny - 1) // 3`` half waves in y.
    n_real : int
        Length of a field's vector.
    waves : ndarray of int, shape (n_real, 2)
        Waves per box in x and half waves in y of each coordinate.
    partners : ndarray of int, shape (n_real,)
        Index of the other part, cosine or sine in x, of the same wave; -1 where
        nothing varies in x.
    wavenumber_x, wavenumber_y : ndarray, shape (n_real,)
        Wavenumbers [m-1].
    k_squared : ndarray, shape (n_real,)
        Minus the eigenvalue of the Laplacian [m-2].
    norm : ndarray, shape (n_real,)
        The domain mean of a product is ``sum(norm * f * g)``.
    x_is_periodic, y_is_periodic : bool
        Whether the space repeats in that direction.

    Notes
    -----
    The grid in y is that of the centres of ny cells. On it ``cos(p y)`` and
    ``-cos((2 ny - p) y)`` agree, p in half waves, so the wavenumbers up to 2 M of
    a product of two fields are mistaken for 2 ny - 2 M and more. That is above M
    where ``3 M < 2 ny``: the rule of the Fourier modes (Orszag 1971, J. Atmos.
    Sci. 28:1074) for twice the points.
    """

    x_is_periodic = True
    y_is_periodic = False

    def __init__(self, points: tuple[int, int], lengths: tuple[float, float]):
        self.points = tuple(points)
        self.lengths = tuple(lengths)
        nx, ny = self.points
        self.cutoff = cx, cy = (nx - 1) // 3, (2 * ny - 1) // 3
        up, along = np.meshgrid(
            np.arange(1, cy + 1), np.arange(1, cx + 1), indexing="ij"
        )
        pairs = np.stack([along.ravel(), up.ravel()], axis=1)
        zonal = np.stack([np.zeros(cy, dtype=int), np.arange(1, cy + 1)], axis=1)
        self.waves = np.concatenate([zonal, np.repeat(pairs, 2, axis=0)])
        self.n_real = len(self.waves)
        of_pairs = cy + (np.arange(2 * len(pairs)) ^ 1)
        self.partners = np.concatenate([np.full(cy, -1), of_pairs])
        self.norm = np.where(self.partners < 0, 0.5, 1.0)
        self.wavenumber_x = 2 * np.pi / self.lengths[0] * self.waves[:, 0]
        self.wavenumber_y = np.pi / self.lengths[1] * self.waves[:, 1]
        self.k_squared = self.wavenumber_x**2 + self.wavenumber_y**2
        self._sine = WallTransform((ny, nx), cx + 1, ("sine", "wave"))
        self._cosine = WallTransform((ny, nx), cx + 1, ("cosine", "wave"))
        # As arrays over (l, k), the first column for what does not vary in x.
        k = 2 * np.pi / self.lengths[0] * np.arange(cx + 1)
        m = np.pi / self.lengths[1] * np.arange(1, cy + 1)[:, np.newaxis]
        self._by_x = 1j * k[1:]
        self._u = -m / 2 + np.zeros(cx + 1)
        self._v = 0.5j * k + np.zeros((cy, 1))
        self._shear_flux = (m**2 - k**2) / (nx * ny) + 0j
        self._normal_flux = 1j * k * m / (nx * ny)
        self._hat = np.empty((cy, cx + 1), dtype=complex)

    @cached_property
    def labels(self) -> tuple[str, ...]:
        """Name of each coordinate: its function of x and of y."""
        cy = self.cutoff[1]
        return tuple(
            f"sin {m}y" if k == 0 else f"{('cos', 'sin')[(i - cy) % 2]} {k}x sin {m}y"
            for i, (k, m) in enumerate(self.waves)
        )

    @property
    def grid_axes(self) -> tuple[np.ndarray, np.ndarray]:
        """Grid coordinates x, y [m], shapes (nx,) and (ny,)."""
        nx, ny = self.points
        return (
            np.arange(nx) * (self.lengths[0] / nx),
            (np.arange(ny) + 0.5) * (self.lengths[1] / ny),
        )

    def averages(self, x: Interval, y: Interval) -> np.ndarray:
        """Average of each coordinate's function over a rectangle, exact.

        Parameters
        ----------
        x, y : tuple of float
            From and to [m]; if they are equal, the average is along a line.

        Returns
        -------
        ndarray, shape (n_real,)
            The average of a field f is ``averages @ f``.
        """
        cy = self.cutoff[1]
        up = mean_sine(self.wavenumber_y, y)
        along = 2 * mean_wave(self.wavenumber_x[cy::2], x).conj()
        up[cy:] *= along.view(float)
        return up

    def _unpack(self, f):
        """Coefficients over (l, k); the same memory at each call."""
        cx, cy = self.cutoff
        self._hat[:, 0] = f[:cy]
        self._hat[:, 1:] = f[cy:].view(complex).reshape(cy, cx)
        return self._hat

    def _pack(self, hat):
        """Vector of coefficients over (l, k)."""
        cy = self.cutoff[1]
        f = np.empty(self.n_real)
        f[:cy] = hat[:, 0].real
        f[cy:].view(complex).reshape(cy, -1)[...] = hat[:, 1:]
        return f

    def to_grid(self, f: np.ndarray) -> np.ndarray:
        """Field on the grid.

        Parameters
        ----------
        f : ndarray, shape (n_real,)

        Returns
        -------
        ndarray, shape (ny, nx)
        """
        np.multiply(self._unpack(f), 0.5, out=self._sine.modes[: self.cutoff[1]])
        self._sine.to_grid()
        return self._sine.grid.copy()

    def to_modes(self, field: np.ndarray) -> np.ndarray:
        """Vector of a field; what lies beyond the cutoff is lost.

        Parameters
        ----------
        field : ndarray, shape (ny, nx)

        Returns
        -------
        ndarray, shape (n_real,)
        """
        self._sine.grid[...] = field
        self._sine.to_modes()
        f = self._pack(self._sine.spectrum[: self.cutoff[1]])
        f /= self.points[0] * self.points[1]
        return f

    def ddx(self, f: np.ndarray) -> np.ndarray:
        """Derivative in x, shape (n_real,), over all leading axes."""
        f = np.ascontiguousarray(f, dtype=float)
        cx, cy = self.cutoff
        result = np.zeros(f.shape)
        waves = f[..., cy:].view(complex).reshape(*f.shape[:-1], cy, cx) * self._by_x
        result[..., cy:] = waves.view(float).reshape(*f.shape[:-1], -1)
        return result

    def linear_function(
        self,
        damping: np.ndarray,
        frequency: np.ndarray | None,
        function: Callable[[np.ndarray], np.ndarray],
    ) -> Callable[[np.ndarray], np.ndarray]:
        """Return ``f -> function(L) f`` for ``L f = -damping f + frequency R f``.

        Parameters
        ----------
        damping, frequency : ndarray, shape (n_real,)
            Equal in both parts of a wave [s-1]; no frequency if None. R turns
            the coefficient of each wave by a quarter: it multiplies c_kl with i.
            On what does not vary in x it gives zero.
        function : callable
            Entire function of complex rates, real on the real axis.

        Returns
        -------
        callable
            Takes and returns vectors of shape (..., n_real).
        """
        cy = self.cutoff[1]
        turning = 0 if frequency is None else frequency[cy::2]
        zonal = function(-damping[:cy] + 0j).real
        waves = function(-damping[cy::2] + 1j * turning)

        def apply(f):
            f = np.ascontiguousarray(f, dtype=float)
            result = np.empty(f.shape)
            np.multiply(f[..., :cy], zonal, out=result[..., :cy])
            np.multiply(
                f[..., cy:].view(complex), waves, out=result[..., cy:].view(complex)
            )
            return result

        return apply

    def flow(
        self, damping: np.ndarray, frequency: np.ndarray | None, interval: float
    ) -> Callable[[np.ndarray], np.ndarray]:
        """Return ``f -> exp(L interval) f``, with L as in `linear_function`."""
        return self.linear_function(
            damping, frequency, lambda rate: np.exp(rate * interval)
        )

    def wave(self, waves: tuple[int, int], phase: float = 0.0) -> np.ndarray:
        """Vector of ``cos(k x + phase) sin(l y)``.

        Parameters
        ----------
        waves : tuple of int
            Waves per box in x and half waves in y.
        phase : float
            Phase of the cosine at x = 0.

        Returns
        -------
        ndarray, shape (n_real,)

        Raises
        ------
        DataError
            If it is not one of the modes kept.
        """
        (k, m), (cx, cy) = waves, self.cutoff
        if not (abs(k) <= cx and 1 <= m <= cy):
            message = (
                f"waves = {list(waves)} lies beyond the modes that the grid keeps, "
                f"{-cx} to {cx} waves in x and 1 to {cy} half waves in y; choose "
                "others or a finer grid"
            )
            raise DataError(message)
        hat = np.zeros((cy, cx + 1), dtype=complex)
        angle = phase if k >= 0 else -phase
        hat[m - 1, abs(k)] = np.cos(phase) if k == 0 else np.exp(1j * angle) / 2
        return self._pack(hat)

    def sine_in_y(self, waves: int) -> np.ndarray:
        """Vector of ``sin(l y)``, the same for all x.

        Parameters
        ----------
        waves : int
            Half waves between the walls.

        Returns
        -------
        ndarray, shape (n_real,)

        Raises
        ------
        DataError
            If it lies beyond the modes kept.
        """
        return self.wave((0, waves))

    def _velocity_to_grid(self, psi):
        """Fill the transforms' grids with u (cosine) and v (sine)."""
        hat, cy = self._unpack(psi), self.cutoff[1]
        np.multiply(self._u, hat, out=self._cosine.modes[1 : cy + 1])
        np.multiply(self._v, hat, out=self._sine.modes[:cy])
        self._cosine.to_grid()
        self._sine.to_grid()
        return self._cosine.grid, self._sine.grid

    def velocity(self, psi: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Velocity ``(-psi_y, psi_x)`` of a streamfunction on the grid.

        Parameters
        ----------
        psi : ndarray, shape (n_real,)

        Returns
        -------
        u, v : ndarray, shape (ny, nx)
        """
        u, v = self._velocity_to_grid(psi)
        return u.copy(), v.copy()

    def advection(self, psi: np.ndarray, other: np.ndarray | None = None) -> np.ndarray:
        r"""Advection of vorticity, ``(J(a, lap b) + J(b, lap a)) / 2``.

        Parameters
        ----------
        psi : ndarray, shape (n_real,)
            Streamfunction a [m2 s-1].
        other : ndarray, shape (n_real,), optional
            Streamfunction b; `psi` itself if not given, and the result is
            then the Jacobian ``J(psi, lap psi)``.

        Returns
        -------
        ndarray, shape (n_real,)
            Exact Galerkin coefficients [s-2]: no aliasing.

        Notes
        -----
        With ``u = -psi_y``, ``v = psi_x`` (Basdevant 1983, J. Comput. Phys.
        50:209)

        .. math:: J(\psi, \nabla^2\psi) = (\partial_{xx} - \partial_{yy}) uv
                  - \partial_{xy} (u^2 - v^2).

        In y, u is a cosine and v a sine series; so uv is one of sines and the
        squares are of cosines: two transforms each way. The symmetric form for
        two fields replaces the products by those of one with the other.
        """
        u, v = self._velocity_to_grid(psi)
        if other is None:
            shear = u * v
            normal = u - v
            u += v
            normal *= u
        else:
            ua, va = u.copy(), v.copy()
            ub, vb = self._velocity_to_grid(other)
            shear = (ua * vb + ub * va) / 2
            normal = ua * ub - va * vb
        self._sine.grid[...] = shear
        self._cosine.grid[...] = normal
        self._sine.to_modes()
        self._cosine.to_modes()
        cy = self.cutoff[1]
        hat = self._shear_flux * self._sine.spectrum[:cy]
        hat += self._normal_flux * self._cosine.spectrum[1 : cy + 1]
        return self._pack(hat)

    def jacobian(self, a: np.ndarray, b: np.ndarray) -> np.ndarray:
        """Jacobian ``a_x b_y - a_y b_x`` of two fields.

        Parameters
        ----------
        a, b : ndarray, shape (n_real,)

        Returns
        -------
        ndarray, shape (n_real,)
            Exact Galerkin coefficients: no aliasing. Five transforms.
        """
        ua, va = self.velocity(a)
        ub, vb = self._velocity_to_grid(b)
        ua *= vb
        va *= ub
        ua -= va
        return self.to_modes(ua)
