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
    """Two-dimensional complex transform between modes and grid.

    Parameters
    ----------
    shape : tuple of int
        Grid points (ny, nx).

    Attributes
    ----------
    modes : ndarray of complex, shape (ny, nx)
        Input of :meth:`to_grid`. It is left as it was, so entries that stay
        zero need to be set only once.
    grid : ndarray of complex, shape (ny, nx)
        Output of :meth:`to_grid` and input of :meth:`to_modes`.
    spectrum : ndarray of complex, shape (ny, nx)
        Output of :meth:`to_modes`.

    Notes
    -----
    ``grid = sum_k modes_k exp(i k.x)`` and ``spectrum_k = sum_x grid
    exp(-i k.x)``: no factor is applied in either direction, the caller folds
    ``1/(nx ny)`` into coefficients that it multiplies with anyway.
    """

    def __init__(self, shape: tuple[int, int]):
        self.shape = tuple(shape)
        self.modes = pyfftw.zeros_aligned(self.shape, dtype="complex128")
        self.grid = pyfftw.zeros_aligned(self.shape, dtype="complex128")
        self.spectrum = pyfftw.zeros_aligned(self.shape, dtype="complex128")
        plan = {"axes": (0, 1), "flags": ("FFTW_ESTIMATE",), "threads": 1}
        self._backward = pyfftw.FFTW(
            self.modes, self.grid, direction="FFTW_BACKWARD", **plan
        )
        self._forward = pyfftw.FFTW(
            self.grid, self.spectrum, direction="FFTW_FORWARD", **plan
        )

    def __reduce__(self):
        return type(self), (self.shape,)

    def to_grid(self) -> None:
        """Fill `grid` from `modes`."""
        self._backward.execute()

    def to_modes(self) -> None:
        """Fill `spectrum` from `grid`."""
        self._forward.execute()
