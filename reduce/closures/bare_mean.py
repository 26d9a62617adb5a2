"""Truncation about the mean: the unresolved modes are held at their time mean.

The mean of what was dropped still steers the resolved modes; its fluctuations
and its response to them do not exist.
"""

from __future__ import annotations

from ..reduced import ReducedModel
from .data import ClosureData


def close(data: ClosureData) -> ReducedModel:
    """Make the truncation about the mean state.

    Parameters
    ----------
    data : ClosureData

    Returns
    -------
    ReducedModel
        Without noise.
    """
    operators = data.operators
    return ReducedModel(
        name="bare_mean",
        x_forcing=operators.F1,
        x_from_x=operators.A11,
        x_from_xx=operators.B111,
        variation=data.resolved_variation(),
    )
