"""Multiplying small matrices, one for each wave, into fields of a space."""

from __future__ import annotations

import numpy as np


class WaveBlocks:
    """Multiplies the block of each wave into the amplitudes of two fields.

    Parameters
    ----------
    blocks : ndarray of complex, shape (2, 2, n_real)
        Equal in both parts of a wave.
    partners : ndarray of int, shape (n_real,)
        Those of the space. The two parts of a wave stand side by side; waves
        that do not vary in x may have a single part, and stand first.

    Notes
    -----
    The two parts are taken as one complex number, as the space's turn by a
    quarter multiplies with i. The block of a single part must be real.
    """

    def __init__(self, blocks: np.ndarray, partners: np.ndarray):
        self._single = int(np.count_nonzero(partners < 0))
        self._alone = blocks[..., : self._single].real.copy()
        self._pairs = blocks[..., self._single :: 2].copy()

    def __call__(self, modes: np.ndarray) -> np.ndarray:
        """Multiply into an array of shape (..., 2, n_real)."""
        modes = np.ascontiguousarray(modes, dtype=float)
        result, single = np.empty_like(modes), self._single
        _multiply(self._alone, modes[..., :single], result[..., :single])
        _multiply(
            self._pairs,
            modes[..., single:].view(complex),
            result[..., single:].view(complex),
        )
        return result


def _multiply(blocks, modes, result):
    """Multiply blocks (2, 2, n) into modes (..., 2, n)."""
    np.multiply(blocks[:, 0], modes[..., np.newaxis, 0, :], out=result)
    result += blocks[:, 1] * modes[..., np.newaxis, 1, :]
