"""The doubly periodic box: Fourier modes in x and in y.

A real field without mean is held by its Fourier coefficients in one half of
the wavenumber plane, ``f(x) = sum_k f_k exp(i k.x)`` with ``f_-k = conj f_k``.
The half is: wavenumber (0, l) for l = 1..Ly, then (k, l) for l = -Ly..Ly
(slow) and k = 1..Lx (fast). No coefficient is stored twice, so the array of
modes is itself a vector of independent unknowns.
"""

from __future__ import annotations

import numpy as np

from ..transforms import ComplexTransform


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
    n_modes : int
        Number of complex coefficients.
    waves : ndarray of int, shape (n_modes, 2)
        Integer wavenumbers in x and y, in waves per box.
    kx, ky : ndarray, shape (n_modes,)
        Wavenumbers [m-1].
    k_squared : ndarray, shape (n_modes,)
        ``kx**2 + ky**2`` [m-2].
    """

    def __init__(self, points: tuple[int, int], lengths: tuple[float, float]):
        self.points = tuple(points)
        self.lengths = tuple(lengths)
        nx, ny = self.points
        self.cutoff = (nx - 1) // 3, (ny - 1) // 3
        cx, cy = self.cutoff
        block_y, block_x = np.meshgrid(
            np.arange(-cy, cy + 1), np.arange(1, cx + 1), indexing="ij"
        )
        self.waves = np.concatenate(
            [
                np.stack([np.zeros(cy, dtype=int), np.arange(1, cy + 1)], axis=1),
                np.stack([block_x.ravel(), block_y.ravel()], axis=1),
            ]
        )
        self.n_modes = len(self.waves)
        self.kx = 2 * np.pi / self.lengths[0] * self.waves[:, 0]
        self.ky = 2 * np.pi / self.lengths[1] * self.waves[:, 1]
        self.k_squared = self.kx**2 + self.ky**2
        self._transform = ComplexTransform((ny, nx), cx)
        # Coefficients of the packed product, see `advection`.
        self._velocity = self.kx - 1j * self.ky
        self._minus_velocity = -self._velocity
        self._flux = (self.kx + 1j * self.ky) ** 2 / (4j * nx * ny)
        self._at_wave = np.empty(self.n_modes, dtype=complex)
        self._at_minus = np.empty(self.n_modes, dtype=complex)
        self._conjugate = np.empty(self.n_modes, dtype=complex)

    @property
    def grid_axes(self) -> tuple[np.ndarray, np.ndarray]:
        """Grid coordinates x, y [m], shapes (nx,) and (ny,)."""
        nx, ny = self.points
        return (
            np.arange(nx) * (self.lengths[0] / nx),
            np.arange(ny) * (self.lengths[1] / ny),
        )

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

    def to_grid(self, modes: np.ndarray) -> np.ndarray:
        """Field on the grid.

        Parameters
        ----------
        modes : ndarray of complex, shape (n_modes,)

        Returns
        -------
        ndarray, shape (ny, nx)
        """
        self._scatter(modes, np.conjugate(modes))
        self._transform.to_grid()
        return self._transform.grid.real.copy()

    def to_modes(self, field: np.ndarray) -> np.ndarray:
        """Coefficients of a field; its mean and what lies beyond the cutoff is lost.

        Parameters
        ----------
        field : ndarray, shape (ny, nx)

        Returns
        -------
        ndarray of complex, shape (n_modes,)
        """
        self._transform.grid[...] = field
        self._transform.to_modes()
        modes = np.empty(self.n_modes, dtype=complex)
        self._gather(modes, self._at_minus)
        return modes / (self.points[0] * self.points[1])

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
        psi : ndarray of complex, shape (n_modes,)
            Streamfunction a [m2 s-1].
        other : ndarray of complex, shape (n_modes,), optional
            Streamfunction b; `psi` itself if not given, and the result is
            then the Jacobian ``J(psi, lap psi)``.

        Returns
        -------
        ndarray of complex, shape (n_modes,)
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
        self._velocity_to_grid(psi)
        if other is None:
            np.square(transform.grid, out=transform.grid)
        else:
            first = transform.grid.copy()
            self._velocity_to_grid(other)
            transform.grid *= first
        transform.to_modes()
        result = np.empty(self.n_modes, dtype=complex)
        self._gather(result, self._at_minus)
        result *= self._flux
        self._at_minus *= self._flux
        np.conjugate(self._at_minus, out=self._at_minus)
        result += self._at_minus
        return result
