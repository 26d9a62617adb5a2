"""The doubly periodic box: Fourier modes in x and in y.

A real field without mean is held by its Fourier coefficients in one half of
the wavenumber plane, ``f(x) = sum_k f_k exp(i k.x)`` with ``f_-k = conj f_k``.
The half is: wavenumber (0, l) for l = 1..Ly, then (k, l) for l = -Ly..Ly
(slow) and k = 1..Lx (fast). No coefficient is stored twice. A field is the
real vector of their real and imaginary parts, interleaved; the real part of
c is the amplitude of ``2 cos(k.x)`` and the imaginary part that of
``-2 sin(k.x)``.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cached_property

import numpy as np

from ..errors import DataError
from ..transforms import ComplexTransform
from .averages import Interval, mean_wave


class Periodic:
    """Fourier space on a box that repeats in x and y.

    Parameters
    ----------
    points : tuple of int
        Grid points (nx, ny); even, at least 8.
    lengths : tuple of float
        Size of the box (x, y) [m].

    Attributes
    ----------
    cutoff : tuple of int
        Largest integer wavenumber kept in x and y, ``(n - 1) // 3``: the
        product of two fields on the grid then holds no aliased coefficient
        in the kept range (Orszag 1971, J. Atmos. Sci. 28:1074).
    n_real : int
        Length of a field's vector.
    waves : ndarray of int, shape (n_real, 2)
        Wavenumbers in x and y of each coordinate, in waves per box.
    partners : ndarray of int, shape (n_real,)
        Index of the other part, cosine or sine, of the same wave.
    wavenumber_x, wavenumber_y : ndarray, shape (n_real,)
        Wavenumbers [m-1].
    k_squared : ndarray, shape (n_real,)
        Minus the eigenvalue of the Laplacian [m-2].
    norm : ndarray, shape (n_real,)
        The domain mean of a product is ``sum(norm * f * g)``.
    x_is_periodic, y_is_periodic : bool
        Whether the space repeats in that direction.
    """

    x_is_periodic = True
    y_is_periodic = True

    def __init__(self, points: tuple[int, int], lengths: tuple[float, float]):
        self.points = tuple(points)
        self.lengths = tuple(lengths)
        nx, ny = self.points
        self.cutoff = (nx - 1) // 3, (ny - 1) // 3
        cx, cy = self.cutoff
        block_y, block_x = np.meshgrid(
            np.arange(-cy, cy + 1), np.arange(1, cx + 1), indexing="ij"
        )
        waves = np.concatenate(
            [
                np.stack([np.zeros(cy, dtype=int), np.arange(1, cy + 1)], axis=1),
                np.stack([block_x.ravel(), block_y.ravel()], axis=1),
            ]
        )
        self.waves = np.repeat(waves, 2, axis=0)
        self.n_real = len(self.waves)
        self.partners = np.arange(self.n_real) ^ 1
        self.norm = np.full(self.n_real, 2.0)
        self.wavenumber_x = 2 * np.pi / self.lengths[0] * self.waves[:, 0]
        self.wavenumber_y = 2 * np.pi / self.lengths[1] * self.waves[:, 1]
        self.k_squared = self.wavenumber_x**2 + self.wavenumber_y**2
        self._transform = ComplexTransform((ny, nx), cx)
        kx, ky = self.wavenumber_x[::2], self.wavenumber_y[::2]
        self._by_x = 1j * kx
        # Coefficients of the packed product, see `advection`.
        self._velocity = kx - 1j * ky
        self._minus_velocity = -self._velocity
        self._flux = (kx + 1j * ky) ** 2 / (4j * nx * ny)
        self._at_wave = np.empty(len(waves), dtype=complex)
        self._at_minus = np.empty(len(waves), dtype=complex)
        self._conjugate = np.empty(len(waves), dtype=complex)

    @cached_property
    def labels(self) -> tuple[str, ...]:
        """Name of each coordinate: part and wavenumbers in x and y."""
        return tuple(
            f"{('cos', 'sin')[i % 2]} {k},{m}" for i, (k, m) in enumerate(self.waves)
        )

    @property
    def grid_axes(self) -> tuple[np.ndarray, np.ndarray]:
        """Grid coordinates x, y [m], shapes (nx,) and (ny,)."""
        nx, ny = self.points
        return (
            np.arange(nx) * (self.lengths[0] / nx),
            np.arange(ny) * (self.lengths[1] / ny),
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
        along = mean_wave(self.wavenumber_x[::2], x)
        return (2 * along * mean_wave(self.wavenumber_y[::2], y)).conj().view(float)

    def _scatter(self, at_wave, at_minus):
        """Place coefficients of k and of -k in the transform's input."""
        modes, ny, (cx, cy) = self._transform.modes, self.points[1], self.cutoff
        block = at_wave[cy:].reshape(2 * cy + 1, cx)
        mirror = at_minus[cy:].reshape(2 * cy + 1, cx)
        modes[ny - cy :, 1 : cx + 1] = block[:cy]
        modes[: cy + 1, 1 : cx + 1] = block[cy:]
        modes[cy::-1, :cx:-1] = mirror[: cy + 1]
        modes[ny - 1 : ny - cy - 1 : -1, :cx:-1] = mirror[cy + 1 :]
        modes[1 : cy + 1, 0] = at_wave[:cy]
        modes[ny - 1 : ny - cy - 1 : -1, 0] = at_minus[:cy]

    def _gather(self, at_wave, at_minus):
        """Read coefficients of k and of -k from the transform's output."""
        spectrum, ny, (cx, cy) = self._transform.spectrum, self.points[1], self.cutoff
        block = at_wave[cy:].reshape(2 * cy + 1, cx)
        mirror = at_minus[cy:].reshape(2 * cy + 1, cx)
        block[:cy] = spectrum[ny - cy :, 1 : cx + 1]
        block[cy:] = spectrum[: cy + 1, 1 : cx + 1]
        mirror[: cy + 1] = spectrum[cy::-1, :cx:-1]
        mirror[cy + 1 :] = spectrum[ny - 1 : ny - cy - 1 : -1, :cx:-1]
        at_wave[:cy] = spectrum[1 : cy + 1, 0]
        at_minus[:cy] = spectrum[ny - 1 : ny - cy - 1 : -1, 0]

    def to_grid(self, f: np.ndarray) -> np.ndarray:
        """Field on the grid.

        Parameters
        ----------
        f : ndarray, shape (n_real,)

        Returns
        -------
        ndarray, shape (ny, nx)
        """
        modes = f.view(complex)
        self._scatter(modes, np.conjugate(modes))
        self._transform.to_grid()
        return self._transform.grid.real.copy()

    def to_modes(self, field: np.ndarray) -> np.ndarray:
        """Vector of a field; its mean and what lies beyond the cutoff is lost.

        Parameters
        ----------
        field : ndarray, shape (ny, nx)

        Returns
        -------
        ndarray, shape (n_real,)
        """
        self._transform.grid[...] = field
        self._transform.to_modes()
        modes = np.empty(self.n_real // 2, dtype=complex)
        self._gather(modes, self._at_minus)
        modes /= self.points[0] * self.points[1]
        return modes.view(float)

    def ddx(self, f: np.ndarray) -> np.ndarray:
        """Derivative in x, shape (n_real,), over all leading axes."""
        return (_as_modes(f) * self._by_x).view(float)

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
            the coefficient of each wave by a quarter: it multiplies with i.
        function : callable
            Entire function of complex rates, real on the real axis.

        Returns
        -------
        callable
            Takes and returns vectors of shape (..., n_real).
        """
        rates = -damping[::2] + 1j * (0 if frequency is None else frequency[::2])
        factor = function(rates)
        return lambda f: (_as_modes(f) * factor).view(float)

    def flow(
        self, damping: np.ndarray, frequency: np.ndarray | None, interval: float
    ) -> Callable[[np.ndarray], np.ndarray]:
        """Return ``f -> exp(L interval) f``, with L as in `linear_function`."""
        return self.linear_function(
            damping, frequency, lambda rate: np.exp(rate * interval)
        )

    def wave(self, waves: tuple[int, int], phase: float = 0.0) -> np.ndarray:
        """Vector of ``cos(k.x + phase)``.

        Parameters
        ----------
        waves : tuple of int
            Wavenumbers in x and y, in waves per box.
        phase : float
            Phase of the cosine at the origin.

        Returns
        -------
        ndarray, shape (n_real,)

        Raises
        ------
        DataError
            If the wave lies beyond the modes kept, or has no wavenumber.
        """
        modes = np.zeros(self.n_real // 2, dtype=complex)
        value = np.exp(1j * phase) / 2
        for sign, coefficient in ((1, value), (-1, value.conjugate())):
            same = np.all(self.waves[::2] == sign * np.array(waves), axis=1)
            modes[same] = coefficient
        if not modes.any():
            message = (
                f"waves = {list(waves)} lies beyond the modes that the grid keeps, "
                f"up to {self.cutoff[0]} in x and {self.cutoff[1]} in y, not both 0; "
                "choose other waves or a finer grid"
            )
            raise DataError(message)
        return modes.view(float)

    def sine_in_y(self, waves: int) -> np.ndarray:
        """Vector of ``sin(l y)``, the same for all x.

        Parameters
        ----------
        waves : int
            Waves per box.

        Returns
        -------
        ndarray, shape (n_real,)

        Raises
        ------
        DataError
            If the wave lies beyond the modes kept.
        """
        return self.wave((0, waves), -np.pi / 2)

    def velocity(self, psi: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Velocity ``(-psi_y, psi_x)`` of a streamfunction on the grid.

        Parameters
        ----------
        psi : ndarray, shape (n_real,)

        Returns
        -------
        u, v : ndarray, shape (ny, nx)
        """
        self._velocity_to_grid(psi.view(complex))
        grid = self._transform.grid
        return grid.real.copy(), -grid.imag

    def _velocity_to_grid(self, psi):
        """Fill the transform's grid with w = u - i v of a streamfunction."""
        np.conjugate(psi, out=self._conjugate)
        np.multiply(self._velocity, psi, out=self._at_wave)
        np.multiply(self._minus_velocity, self._conjugate, out=self._at_minus)
        self._scatter(self._at_wave, self._at_minus)
        self._transform.to_grid()

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
        With ``u = -psi_y``, ``v = psi_x`` and the complex velocity
        ``w = u - i v``, whose coefficients are ``(k - i l) psi_k``, two
        integrations by parts (Basdevant 1983, J. Comput. Phys. 50:209) give

        .. math:: J(\psi, \nabla^2\psi)
                  = -\tfrac12 \Im\left[(\partial_x + i\partial_y)^2 w^2\right]

        so one complex transform to the grid, one square, and one transform
        back do the work of five real ones. The coefficient at k of the
        imaginary part needs the transform's output at k and at -k, called G
        and H: ``J_k = c G + conj(c H)`` with ``c = (k + i l)^2 / 4i``. The
        symmetric form for two fields follows by replacing the square with
        the product.
        """
        transform = self._transform
        self._velocity_to_grid(psi.view(complex))
        if other is None:
            np.square(transform.grid, out=transform.grid)
        else:
            first = transform.grid.copy()
            self._velocity_to_grid(other.view(complex))
            transform.grid *= first
        transform.to_modes()
        result = np.empty(self.n_real // 2, dtype=complex)
        self._gather(result, self._at_minus)
        result *= self._flux
        self._at_minus *= self._flux
        np.conjugate(self._at_minus, out=self._at_minus)
        result += self._at_minus
        return result.view(float)

    def jacobian(self, a: np.ndarray, b: np.ndarray) -> np.ndarray:
        """Jacobian ``a_x b_y - a_y b_x`` of two fields.

        Parameters
        ----------
        a, b : ndarray, shape (n_real,)

        Returns
        -------
        ndarray, shape (n_real,)
            Exact Galerkin coefficients: no aliasing.

        Notes
        -----
        It is the imaginary part of ``w_a conj(w_b)``, with w as in
        `advection`: three complex transforms.
        """
        transform = self._transform
        self._velocity_to_grid(a.view(complex))
        first = transform.grid.copy()
        self._velocity_to_grid(b.view(complex))
        np.conjugate(transform.grid, out=transform.grid)
        transform.grid *= first
        transform.to_modes()
        result = np.empty(self.n_real // 2, dtype=complex)
        self._gather(result, self._at_minus)
        np.conjugate(self._at_minus, out=self._at_minus)
        result -= self._at_minus
        result /= 2j * self.points[0] * self.points[1]
        return result.view(float)


def _as_modes(f):
    """Complex coefficients (..., n_real / 2) of real vectors (..., n_real)."""
    return np.ascontiguousarray(f, dtype=float).view(complex)
