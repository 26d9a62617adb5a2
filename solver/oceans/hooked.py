"""A user's own model in the place of an ocean.

It knows ``dz/dt = F(t) + A z + B(z, z)`` and an inner product, and has no
space: nothing that a grid or a wavenumber is needed for can be asked of it.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from ..errors import ContractError
from ..hooks import Hook

PARTS = ("forcing", "linear", "bilinear", "inner")


class HookedModel:
    """What a truth run needs of a model, from the contract alone.

    Parameters
    ----------
    hook : Hook
        Makes the model when it is called.

    Raises
    ------
    ContractError
        If what is made is no model.

    Notes
    -----
    No part of the equation is stepped exactly, so that either scheme is the
    classical Runge-Kutta method of order four. A model may say its `unit`.
    """

    waves = None  # none: the coordinates are no waves
    field_units: dict[str, str] = {}  # noqa: RUF012 (never changed)
    linear_fields: dict[str, Any] = {}  # noqa: RUF012 (the same)

    def __init__(self, hook: Hook):
        model = hook()
        missing = [name for name in PARTS if not callable(getattr(model, name, None))]
        size = getattr(model, "size", None)
        if missing or not isinstance(size, int | np.integer):
            message = (
                f'hook "{hook.name}" made a {type(model).__name__}, which lacks '
                f"{', '.join(missing) or 'an int as its size'}; a model has size, "
                f"{', '.join(PARTS)}: see eddyshed.reduce.contract"
            )
            raise ContractError(message)
        self.model = model
        self.size = int(size)
        self.unit = str(getattr(model, "unit", "1"))
        given = getattr(model, "labels", None)
        self.labels = tuple(given or (f"z{i}" for i in range(self.size)))
        self.partners = np.full(self.size, -1)
        # Read by random forcing, of which there is none: no coordinate is a flow.
        self.enstrophy_weights = np.zeros(self.size)
        squared = "1" if self.unit == "1" else f"({self.unit})2"
        self.budget_units = {
            "energy": (squared, "half the inner product of the state with itself")
        }

    def __getattr__(self, name: str) -> Any:
        if name.startswith("_") or name == "model":  # while a copy is unpickled
            raise AttributeError(name)
        return getattr(self.model, name)

    def tendency(self, t: float, z: np.ndarray) -> np.ndarray:
        """dz/dt, shape (..., size), a new array each time."""
        fused = getattr(self.model, "tendency", None)
        if fused is not None:
            return np.array(fused(t, z))
        model = self.model
        return model.forcing(t) + model.linear(z) + model.bilinear(z, z)

    explicit = tendency

    def exact_flow(self, interval: float) -> Callable[[np.ndarray], np.ndarray]:
        """Return the identity: there is no linear part that is stepped exactly."""
        return np.copy

    def linear_function(
        self, function: Callable[[np.ndarray], np.ndarray]
    ) -> Callable[[np.ndarray], np.ndarray]:
        """Return ``z -> function(0) z``."""
        scale = float(np.real(function(np.zeros(1, dtype=complex))[0]))
        return lambda z: scale * z

    def budget(self, t: float, z: np.ndarray) -> dict[str, float]:
        """Energy of a state."""
        return {"energy": float(self.model.inner(z, z)) / 2}

    def scales(self) -> tuple[tuple[str, float, str], ...]:
        """Return nothing: what its coordinates mean is not known."""
        return ()
