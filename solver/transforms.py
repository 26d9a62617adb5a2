"""Planned Fourier transforms: the only module that knows pyFFTW.

An instance owns its plans and their buffers. Plans are neither shareable
between threads nor picklable, so an instance belongs to one worker; pickling
one carries its shape, and the copy plans anew.

Plans are made with ``FFTW_ESTIMATE``. Timed planning picks different
algorithms, and so different last bits, in different processes; a truth run
that cannot be repeated to the bit is worth less than the time it would save.
"""

from __future__ import annotations

import sys
from typing import ClassVar

# It would load Dask wherever that is installed, which takes longer than all the
# rest of a command and is of no use here; None stands for a module that is absent.
_HIDE_DASK = "dask" not in sys.modules
if _HIDE_DASK:
    sys.modules["dask"] = None
import pyfftw  # noqa: E402

if _HIDE_DASK:
    del sys.modules["dask"]


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

        self.modes, self.grid, self.spectrum = (
            array(columns),
            array(rows),
            array(columns),
        )
        self._columns, self._rows = array(columns), array(rows)
        self._columns_back, self._rows_back = array(columns), array(rows)
        self._y_to_grid = _plan(self.modes, self._columns, 0, "FFTW_BACKWARD")
        self._x_to_grid = _plan(self._rows, self.grid, 1, "FFTW_BACKWARD")
        self._x_to_modes = _plan(self.grid, self._rows_back, 1, "FFTW_FORWARD")
        self._y_to_modes = _plan(self._columns_back, self.spectrum, 0, "FFTW_FORWARD")

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


class WallTransform:
    """Two-dimensional transform between walls in y, and in x walls or none.

    Parameters
    ----------
    shape : tuple of int
        Grid points (ny, nx).
    columns : int
        Wavenumbers in x that are not zero, and so are transformed in y.
    kinds : tuple of str
        What the field is a series of in y and in x: ``sine``, ``cosine``, and
        in x also ``wave``.

    Attributes
    ----------
    modes : ndarray, shape (ny, columns)
        Input of :meth:`to_grid`, left as it was; complex if x has no walls.
    grid : ndarray, shape (ny, nx)
        Output of :meth:`to_grid` and input of :meth:`to_modes`, which may
        spoil it.
    spectrum : ndarray, shape (ny, columns)
        Output of :meth:`to_modes`.

    Notes
    -----
    Between walls the grid is that of cell centres, ``(j + 1/2) L / n``, for sines
    and cosines alike. Row (column) i stands for the sine of i + 1 half waves or
    the cosine of i; columns of cosines start at one half wave, those of waves
    at zero. In :meth:`to_grid` a coefficient counts twice for each direction
    with walls; :meth:`to_modes` gives n times the coefficient of each sine, of
    each cosine but the constant, and of each wave. FFTW calls these
    transforms RODFT01 and REDFT01 and their inverses RODFT10 and REDFT10.
    """

    _NAMES: ClassVar = {"sine": "FFTW_RODFT", "cosine": "FFTW_REDFT"}

    def __init__(self, shape: tuple[int, int], columns: int, kinds: tuple[str, str]):
        self._arguments = tuple(shape), columns, tuple(kinds)
        ny, nx = shape
        waves = kinds[1] == "wave"
        dtype, width = ("complex128", nx // 2 + 1) if waves else ("float64", nx)
        first = 1 if kinds[1] == "cosine" else 0
        # One buffer for each way: between the two stages most columns are zero.
        there = pyfftw.zeros_aligned((ny, width), dtype=dtype)
        back = pyfftw.zeros_aligned((ny, width), dtype=dtype)
        self.modes = pyfftw.zeros_aligned((ny, columns), dtype=dtype)
        self.grid = pyfftw.zeros_aligned((ny, nx), dtype="float64")
        self.spectrum = pyfftw.zeros_aligned((ny, columns), dtype=dtype)
        self._beyond = there[:, first + columns :] if waves else None
        kept = slice(first, first + columns)
        up, across = (self._NAMES.get(kind, "") for kind in kinds)
        self._to_rows = _plan(_real(self.modes), _real(there[:, kept]), 0, f"{up}01")
        self._from_rows = _plan(
            _real(back[:, kept]), _real(self.spectrum), 0, f"{up}10"
        )
        self._along = _plan(
            there, self.grid, 1, "FFTW_BACKWARD" if waves else f"{across}01"
        )
        self._from_grid = _plan(
            self.grid, back, 1, "FFTW_FORWARD" if waves else f"{across}10"
        )

    def __reduce__(self):
        return type(self), self._arguments

    def to_grid(self) -> None:
        """Fill `grid` from `modes`."""
        if self._beyond is not None:
            self._beyond[...] = 0  # FFTW uses the input of this one as workspace
        self._to_rows.execute()
        self._along.execute()

    def to_modes(self) -> None:
        """Fill `spectrum` from `grid`."""
        self._from_grid.execute()
        self._from_rows.execute()


def _plan(source, target, axis, direction):
    """Plan of transforms along one axis of a two-dimensional array."""
    if not direction.endswith("WARD"):
        direction = (direction,)
    return pyfftw.FFTW(
        source,
        target,
        axes=(axis,),
        direction=direction,
        flags=("FFTW_ESTIMATE",),
        threads=1,
    )


def _real(array):
    """View complex numbers as pairs of real ones: both parts go the same way."""
    return array.view("float64") if array.dtype.kind == "c" else array
