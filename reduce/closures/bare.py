"""Bare truncation: nothing is known of the unresolved modes, not even their mean.

The equation is projected on the resolved modes with everything else set to
zero. It is what one would run without any of this, and the floor for all
other closures.
"""

from __future__ import annotations

import numpy as np

from ..contract import project
from ..operators import galerkin
from ..reduced import ReducedModel
from .data import ClosureData


def close(data: ClosureData) -> ReducedModel:
    """Make the bare truncation.

    Parameters
    ----------
    data : ClosureData

    Returns
    -------
    ReducedModel
        Without noise; x are departures from the truth's mean, as in every
        closure, so results compare.

    Notes
    -----
    With the resolved part of the mean state as the point of expansion, x and
    the truth's x agree while no unresolved mean enters.
    """
    vectors = data.split.resolved.vectors
    kept_mean = vectors @ project(data.model, vectors, data.split.mean)
    operators = galerkin(
        data.model,
        vectors,
        np.zeros((len(vectors), 0)),
        kept_mean,
        times=data.split.times,
    )
    return ReducedModel(
        name="bare",
        x_forcing=operators.F1,
        x_from_x=operators.A11,
        x_from_xx=operators.B111,
        variation=operators.variation,
    )
