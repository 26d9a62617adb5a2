"""A model seen in another inner product than its own."""

from __future__ import annotations

from typing import Any

import numpy as np

from eddyshed.solver.errors import DataError
from eddyshed.solver.inner_products import InnerProduct


class Weighted:
    """A model whose inner product is a given one; all else is as it was.

    Parameters
    ----------
    model : Model
        The equation, with states in its own coordinates.
    product : InnerProduct
        What its states are weighed with.

    Attributes
    ----------
    energy_conserving : bool
        Whether ``inner(z, B(z, z)) = 0`` in this product.
    unit : str
        Unit of coordinates that are orthonormal in this product.
    """

    def __init__(self, model: Any, product: InnerProduct):
        self._model = model
        self._weights = product.weights
        self.energy_conserving = product.conserved
        self.unit = product.unit

    def __getattr__(self, name: str) -> Any:
        if name.startswith("_"):  # not there yet while a copy is being unpickled
            raise AttributeError(name)
        return getattr(self._model, name)

    def inner(self, u: np.ndarray, w: np.ndarray) -> np.ndarray:
        """Inner product of states [square of `unit`], shape (...)."""
        return np.sum(self._weights * np.multiply(u, w), axis=-1)


def in_product(model: Any, name: str) -> Any:
    """Model in one of its inner products.

    Parameters
    ----------
    model : Model
        Has a method `inner_product`, as every ocean does.
    name : str
        ``energy``, ``l2`` or ``enstrophy``.

    Returns
    -------
    Model
        The model itself for ``energy``, in which its coordinates are orthonormal.

    Raises
    ------
    DataError
        If the model has no such product.
    """
    if name == "energy":
        return model
    try:
        product = model.inner_product(name)
    except DataError as error:
        message = f"[resolved] {error}"
        raise DataError(message) from error
    return Weighted(model, product)
