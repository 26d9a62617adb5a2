"""Planned Fourier transforms: the only module that knows pyFFTW.

One :class:`ComplexTransform` owns one pair of plans and their three buffers.
Plans are neither shareable between threads nor picklable, so an instance
belongs to one worker; pickling one carries its shape, and the copy plans
anew.

Plans are made with ``FFTW_ESTIMATE``. Timed planning picks different
algorithms, and so different last bits, in different processes; a truth run
that cannot be repeated to the bit is worth less than the time it would save.
"""

from __future__ import annotations

import pyfftw


class ComplexTransform:
    """Two-dimensional complex transform between kept modes and the grid.

    Parameters
    ----------
    shape : tuple of int
        Grid points (ny, nx).
    cutoff : int
        Largest wavenumber kept in x. Columns of other wavenumbers are zero on
        the way to the grid and not computed on the way back.

    Attributes
    ----------
    modes : ndarray of complex, shape (ny, 2 cutoff + 1)
        Input of :meth:`to_grid`; columns are the wavenumbers 0..cutoff,
        -cutoff..-1 in x. It is left as it was, so entries that stay zero need
        to be set only once.
    grid : ndarray of complex, shape (ny, nx)
        Output of :meth:`to_grid` and input of :meth:`to_modes`.
    spectrum : ndarray of complex, shape (ny, 2 cutoff + 1)
        Output of :meth:`to_modes`.

    Notes
    -----
    ``grid = sum_k modes_k exp(i k.x)`` and ``spectrum_k = sum_x grid
    exp(-i k.x)``: no factor is applied in either direction, the caller folds
    ``1/(nx ny)`` into coefficients that it multiplies with anyway.

    Each direction is two sets of one-dimensional transforms, along y on the
    kept columns and along x on the rows. That saves a third of the columns,
    and the columns lie an odd number of elements apart: at a power of two they
    would fall on the same lines of the cache, which untimed plans do not avoid
    (ten times slower at 256 points).
    """

    def __init__(self, shape: tuple[int, int], cutoff: int):
        self.shape, self.cutoff = tuple(shape), cutoff
        ny, nx = self.shape
        columns, rows = (ny, 2 * cutoff + 1), (ny, nx)

        def array(size):
            return pyfftw.zeros_aligned(size, dtype="complex128")

        def plan(source, target, axis, direction):
            return pyfftw.FFTW(
                source,
                target,
                axes=(axis,),
                direction=direction,
                flags=("FFTW_ESTIMATE",),
                threads=1,
            )

        self.modes, self.grid, self.spectrum = (
            array(columns),
            array(rows),
            array(columns),
        )
        self._columns, self._rows = array(columns), array(rows)
        self._columns_back, self._rows_back = array(columns), array(rows)
        self._y_to_grid = plan(self.modes, self._columns, 0, "FFTW_BACKWARD")
        self._x_to_grid = plan(self._rows, self.grid, 1, "FFTW_BACKWARD")
        self._x_to_modes = plan(self.grid, self._rows_back, 1, "FFTW_FORWARD")
        self._y_to_modes = plan(self._columns_back, self.spectrum, 0, "FFTW_FORWARD")

    def __reduce__(self):
        return type(self), (self.shape, self.cutoff)

    def to_grid(self) -> None:
        """Fill `grid` from `modes`."""
        kept = self.cutoff + 1
        self._y_to_grid.execute()
        self._rows[:, :kept] = self._columns[:, :kept]
        self._rows[:, self.shape[1] - self.cutoff :] = self._columns[:, kept:]
        self._x_to_grid.execute()

    def to_modes(self) -> None:
        """Fill `spectrum` from `grid`."""
        kept = self.cutoff + 1
        self._x_to_modes.execute()
        self._columns_back[:, :kept] = self._rows_back[:, :kept]
        self._columns_back[:, kept:] = self._rows_back[:, self.shape[1] - self.cutoff :]
        self._y_to_modes.execute()
