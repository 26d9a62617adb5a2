"""A user's own basis.

The hook is called as ``Name(model, **options)``. What it returns has
``vectors``, an array of shape (size, n_modes) whose columns are orthonormal in
the model's inner product, and may have ``labels``, a tuple of as many names.
"""

from __future__ import annotations

import numpy as np

from eddyshed.solver.errors import ContractError
from eddyshed.solver.hooks import Hook

from ..contract import Model, dual_vectors
from .basis import Basis

ORTHONORMAL = 1e-8  # departure that is more than the round-off of a factorisation


def hooked_basis(hook: Hook, model: Model) -> Basis:
    """Make a user's basis.

    Parameters
    ----------
    hook : Hook
    model : Model
        Gives the inner product; handed to the hook.

    Returns
    -------
    Basis
        The user's modes in their own order, without variances: they are the
        truth's to say.

    Raises
    ------
    ContractError
        If the hook's vectors are not what they must be.
    """
    made = hook(model)
    where, size = f'[resolved] kind = "{hook.name}"', model.size
    try:
        vectors = np.array(getattr(made, "vectors", None), dtype=float)
    except (TypeError, ValueError):
        vectors = np.empty(0)
    shape = vectors.shape
    if len(shape) != 2 or shape[0] != size or not 0 < shape[1] < size:
        message = (
            f"{where}: its vectors have shape {shape}, must be ({size}, n) with n from "
            f"1 to {size - 1}: a column for each mode, and something left out"
        )
        raise ContractError(message)
    products = vectors.T @ dual_vectors(model, vectors)
    off = np.abs(products - np.eye(shape[1])).max()
    if not off <= ORTHONORMAL:
        message = (
            f"{where}: its vectors are off from orthonormal by {off:.3g}; make them "
            "orthonormal in the model's inner product, model.inner"
        )
        raise ContractError(message)
    given = getattr(made, "labels", None)
    labels = tuple(f"mode {i + 1}" for i in range(shape[1])) if given is None else given
    if len(labels) != shape[1] or not all(isinstance(name, str) for name in labels):
        message = f"{where}: {len(labels)} labels for {shape[1]} modes; give texts"
        raise ContractError(message)
    return Basis(
        vectors=vectors,
        labels=tuple(labels),
        partners=np.full(shape[1], -1),
        variance=np.zeros(shape[1]),
    )
