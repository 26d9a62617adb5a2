"""The closed basin: sines between walls in x and in y.

A field is ``sum a_kl sin(kx) sin(ly)`` with k, l = 1, 2, ... half waves between
the walls, at which it vanishes with its Laplacian: as a streamfunction it slips
along them without stress. It is held as the vector of all a_kl, l slow and k
fast.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cached_property

import numpy as np

from ..errors import DataError
from ..transforms import WallTransform
from .averages import Interval, mean_sine

# Multiplications in one product of matrices. OpenBLAS shares larger ones out to
# threads, which wait for each other whenever another process runs.
SMALL_PRODUCT = 2**18


class Basin:
    """Sine space on a box with four walls.

    Parameters
    ----------
    points : tuple of int
        Grid points (nx, ny).
    lengths : tuple of float
        Size of the box (x, y) [m].

    Attributes
    ----------
    cutoff : tuple of int
        Largest number of half waves kept in x and y, ``(2 n - 1) // 3``; see
        :class:`~eddyshed.solver.spaces.channel.Channel` for the reason.
    n_real : int
        Length of a field's vector.
    waves : ndarray of int, shape (n_real, 2)
        Half waves in x and y of each coordinate.
    partners : ndarray of int, shape (n_real,)
        All -1: what stands between walls has no phase.
    wavenumber_x, wavenumber_y : ndarray, shape (n_real,)
        Wavenumbers [m-1].
    k_squared : ndarray, shape (n_real,)
        Minus the eigenvalue of the Laplacian [m-2].
    norm : ndarray, shape (n_real,)
        The domain mean of a product is ``sum(norm * f * g)``.
    x_is_periodic, y_is_periodic : bool
        Whether the space repeats in that direction.
    """

    x_is_periodic = False
    y_is_periodic = False

    def __init__(self, points: tuple[int, int], lengths: tuple[float, float]):
        self.points = tuple(points)
        self.lengths = tuple(lengths)
        nx, ny = self.points
        self.cutoff = cx, cy = (2 * nx - 1) // 3, (2 * ny - 1) // 3
        up, along = np.meshgrid(
            np.arange(1, cy + 1), np.arange(1, cx + 1), indexing="ij"
        )
        self.waves = np.stack([along.ravel(), up.ravel()], axis=1)
        self.n_real = len(self.waves)
        self.partners = np.full(self.n_real, -1)
        self.norm = np.full(self.n_real, 0.25)
        k, m = np.pi / self.lengths[0] * along, np.pi / self.lengths[1] * up
        self.wavenumber_x, self.wavenumber_y = k.ravel(), m.ravel()
        self.k_squared = self.wavenumber_x**2 + self.wavenumber_y**2
        self._both_sines = WallTransform((ny, nx), cx, ("sine", "sine"))
        self._both_cosines = WallTransform((ny, nx), cx, ("cosine", "cosine"))
        self._of_u = WallTransform((ny, nx), cx, ("cosine", "sine"))
        self._of_v = WallTransform((ny, nx), cx, ("sine", "cosine"))
        # A coefficient counts twice for each direction on its way to the grid.
        self._u, self._v = -m / 4, k / 4
        self._shear_flux = (m**2 - k**2) / (nx * ny)
        self._normal_flux = -k * m / (nx * ny)
        # What sin(nx) has of sin(mx) in its derivative: 4 m n / (m^2 - n^2) over
        # the length where m + n is odd, else nothing. Exactly antisymmetric.
        odd, even = np.arange(1, cx + 1, 2), np.arange(2, cx + 1, 2)
        m, n = odd[:, np.newaxis], even[np.newaxis, :]
        element = 4.0 * m * n / (m**2 - n**2) / self.lengths[0]
        self._even_of_odd = -element
        self._odd_of_even = np.ascontiguousarray(element.T)

    @cached_property
    def labels(self) -> tuple[str, ...]:
        """Name of each coordinate: its function of x and of y."""
        return tuple(f"sin {k}x sin {m}y" for k, m in self.waves)

    @property
    def grid_axes(self) -> tuple[np.ndarray, np.ndarray]:
        """Grid coordinates x, y [m], shapes (nx,) and (ny,): centres of cells."""
        pairs = zip(self.points, self.lengths, strict=True)
        x, y = ((np.arange(n) + 0.5) * (length / n) for n, length in pairs)
        return x, y

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
        along = mean_sine(self.wavenumber_x, x)
        return along * mean_sine(self.wavenumber_y, y)

    def _matrix(self, f):
        """View a vector as coefficients over (l, k)."""
        cx, cy = self.cutoff
        return f.reshape(*f.shape[:-1], cy, cx)

    def to_grid(self, f: np.ndarray) -> np.ndarray:
        """Field on the grid.

        Parameters
        ----------
        f : ndarray, shape (n_real,)

        Returns
        -------
        ndarray, shape (ny, nx)
        """
        transform = self._both_sines
        np.multiply(self._matrix(f), 0.25, out=transform.modes[: self.cutoff[1]])
        transform.to_grid()
        return transform.grid.copy()

    def to_modes(self, field: np.ndarray) -> np.ndarray:
        """Vector of a field; what lies beyond the cutoff is lost.

        Parameters
        ----------
        field : ndarray, shape (ny, nx)

        Returns
        -------
        ndarray, shape (n_real,)
        """
        self._both_sines.grid[...] = field
        self._both_sines.to_modes()
        modes = self._both_sines.spectrum[: self.cutoff[1]].ravel()
        return modes / (self.points[0] * self.points[1])

    def ddx(self, f: np.ndarray) -> np.ndarray:
        """Galerkin derivative in x, shape (n_real,), over all leading axes.

        The derivative of a sine series is one of cosines; this is its projection
        back on the sines kept, exact and antisymmetric, where interpolation on
        the grid is neither.
        """
        rows = np.asarray(f, dtype=float).reshape(-1, self.cutoff[0])
        result = np.empty(rows.shape)
        block = max(1, SMALL_PRODUCT // max(1, self._even_of_odd.size))
        for start in range(0, len(rows), block):
            part = slice(start, start + block)
            odd, even = (np.ascontiguousarray(rows[part, i::2]) for i in (0, 1))
            result[part, 0::2] = even @ self._odd_of_even
            result[part, 1::2] = odd @ self._even_of_odd
        return result.reshape(np.shape(f))

    def linear_function(
        self,
        damping: np.ndarray,
        frequency: None,
        function: Callable[[np.ndarray], np.ndarray],
    ) -> Callable[[np.ndarray], np.ndarray]:
        """Return ``f -> function(L) f`` for ``L f = -damping f``.

        Parameters
        ----------
        damping : ndarray, shape (n_real,)
            Rates [s-1].
        frequency : None
            Nothing turns between walls.
        function : callable
            Entire function of complex rates, real on the real axis.

        Returns
        -------
        callable
            Takes and returns vectors of shape (..., n_real).

        Raises
        ------
        ValueError
            If there is a frequency.
        """
        if frequency is not None:
            message = "a basin has no pairs of coordinates that could turn: give None"
            raise ValueError(message)
        factor = function(-damping + 0j).real
        return lambda f: np.multiply(f, factor)

    def flow(
        self, damping: np.ndarray, frequency: None, interval: float
    ) -> Callable[[np.ndarray], np.ndarray]:
        """Return ``f -> exp(L interval) f``, with L as in `linear_function`."""
        return self.linear_function(
            damping, frequency, lambda rate: np.exp(rate * interval)
        )

    def wave(self, waves: tuple[int, int], phase: float = 0.0) -> np.ndarray:
        """Vector of ``sin(k x) sin(l y)``.

        Parameters
        ----------
        waves : tuple of int
            Half waves in x and y.
        phase : float
            Must be 0.

        Returns
        -------
        ndarray, shape (n_real,)

        Raises
        ------
        DataError
            If it is not one of the modes kept.
        """
        if phase != 0:
            message = (
                f"phase = {phase:g}: a sine wave between walls has no phase; leave it "
                "out"
            )
            raise DataError(message)
        f = np.all(self.waves == np.array(waves), axis=1).astype(float)
        if not f.any():
            message = (
                f"waves = {list(waves)} lies beyond the modes that the grid keeps, "
                f"1 to {self.cutoff[0]} half waves in x and 1 to {self.cutoff[1]} in "
                "y; choose others or a finer grid"
            )
            raise DataError(message)
        return f

    def sine_in_y(self, waves: int) -> np.ndarray:
        """Vector of ``sin(l y)``, the same for all x: projected on the sines kept.

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
        f = self.wave((1, waves))
        self._matrix(f)[waves - 1, ::2] = 4 / (
            np.pi * np.arange(1, self.cutoff[0] + 1, 2)
        )
        return f

    def _velocity_to_grid(self, psi):
        """Fill the transforms' grids with u (sine, cosine) and v (cosine, sine)."""
        psi, cy = self._matrix(psi), self.cutoff[1]
        np.multiply(self._u, psi, out=self._of_u.modes[1 : cy + 1])
        np.multiply(self._v, psi, out=self._of_v.modes[:cy])
        self._of_u.to_grid()
        self._of_v.to_grid()
        return self._of_u.grid, self._of_v.grid

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

        uv is a series of sines in both directions and the squares are of
        cosines in both: two transforms each way, and all derivatives of a
        single coefficient.
        """
        u, v = self._velocity_to_grid(psi)
        shear, normal = self._both_sines, self._both_cosines
        if other is None:
            np.multiply(u, v, out=shear.grid)
            np.subtract(u, v, out=normal.grid)
            u += v
            normal.grid *= u
        else:
            ua, va = u.copy(), v.copy()
            ub, vb = self._velocity_to_grid(other)
            shear.grid[...] = (ua * vb + ub * va) / 2
            normal.grid[...] = ua * ub - va * vb
        shear.to_modes()
        normal.to_modes()
        cy = self.cutoff[1]
        result = self._shear_flux * shear.spectrum[:cy]
        result += self._normal_flux * normal.spectrum[1 : cy + 1]
        return result.ravel()

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
