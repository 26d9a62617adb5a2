"""White closure in open loop: the noise without the damping that belongs to it.

As ``white``, but the limit of noise that does not know of the resolved modes:
both feedbacks are gone, the noise and the drift that it induces are the same.
Its distance from ``white`` is what the feedback does.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from ..contract import conserves_energy
from ..diffusion import DiffusionModel
from . import coloured_open, white
from .data import ClosureData


def close(data: ClosureData) -> DiffusionModel:
    """Make the white closure in open loop.

    Parameters
    ----------
    data : ClosureData

    Returns
    -------
    DiffusionModel

    Raises
    ------
    DataError
        As that of ``white``.

    Notes
    -----
    If the quadratic terms conserve energy, ``d<x.x>/dt`` is a quadratic form in
    x, of drift and noise together. The smallest and the largest eigenvalue of
    its matrix bound the rate at which x.x grows where x is large.
    """
    model, _ = white.limit_of(data, coloured_open.close(data), "white_open")
    notes = [*model.notes, coloured_open.OPEN]
    if conserves_energy(data.model) and np.any(model.drift.linear):
        linear = model.drift.linear
        growth = linear + linear.T + np.einsum("jiki->jk", model.noise[1:][:, :, 1:])
        low, high = np.linalg.eigvalsh(growth)[[0, -1]]
        notes.append(
            f"far from rest the mean of x.x changes at {low:.3g} to {high:.3g} s-1 "
            f"times itself{', so it grows without end' if low > 0 else ''}"
        )
    return replace(model, notes=tuple(notes))
