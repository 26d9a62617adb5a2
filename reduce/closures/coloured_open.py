"""Coloured closure in open loop: the noise does not know of the resolved modes.

As ``coloured``, but y is the fitted process by itself, neither driven nor
modulated by x. Nothing then takes back the energy that the noise gives, so it
is a diagnostic: its distance from ``coloured`` is what the feedback does.
"""

from __future__ import annotations

from dataclasses import replace

from ..reduced import ReducedModel
from . import coloured
from .data import ClosureData

OPEN = (
    "open loop: nothing takes back the energy that the noise gives, so there is no "
    "restoring force but the equation's own; a diagnostic, not a model to use"
)


def close(data: ClosureData) -> ReducedModel:
    """Make the coloured closure in open loop.

    Parameters
    ----------
    data : ClosureData

    Returns
    -------
    ReducedModel
        With the constant of x of the closed loop.
    """
    model = coloured.close(data)
    return replace(
        model,
        name="coloured_open",
        y_forcing=None,
        y_from_x=None,
        y_from_xx=None,
        y_from_xy=None,
        notes=(*model.notes, OPEN),
    )
