"""A user's own basis, completed by the empirical orthogonal functions of the rest.

The hook is called as ``Name(model, **options)``. What it returns has
``vectors``, an array of shape (size, n_modes) whose columns are orthonormal in
the model's inner product, and may have ``labels``, a tuple of as many names.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy import linalg

from eddyshed.solver.errors import ContractError, DataError
from eddyshed.solver.hooks import Hook
from eddyshed.solver.record import TruthRecord, walk

from ..contract import Model, dual_vectors, metric
from .basis import Basis

LARGEST = 8192  # order of the covariance matrix of the rest: 512 MB
ORTHONORMAL = 1e-8  # departure that is more than the round-off of a factorisation


def hooked_basis(
    hook: Hook, model: Model, records: Sequence[TruthRecord], mean: np.ndarray
) -> tuple[Basis, Basis]:
    """Make a user's basis, and its remainder.

    Parameters
    ----------
    hook : Hook
    model : Model
        Gives the inner product; handed to the hook.
    records : sequence of TruthRecord
        The members of the truth, read in stretches.
    mean : ndarray, shape (size,)
        Its mean.

    Returns
    -------
    resolved, remainder : Basis
        The user's modes in their own order; what varies beside them by falling
        variance.

    Raises
    ------
    ContractError
        If the hook's vectors are not what they must be.
    DataError
        If the state has more than 8192 coordinates, or nothing varies beside
        the user's modes.
    """
    vectors, labels = checked_vectors(hook, model)
    size = model.size
    if size > LARGEST:
        message = (
            f'[resolved] kind = "{hook.name}": a state of {size} coordinates, at most '
            f"{LARGEST} can be completed; use a coarser grid"
        )
        raise DataError(message)
    dual = dual_vectors(model, vectors)
    weights = metric(model)
    # In y = root z the model's inner product is the plain dot product.
    root = np.diag(np.sqrt(weights)) if weights.ndim == 1 else linalg.cholesky(weights)
    covariance, variance, count = np.zeros((size, size)), np.zeros(len(labels)), 0
    for _, _, states in walk(records):
        x = (states - mean) @ dual
        rest = (states - mean - x @ vectors.T) @ root.T
        covariance += rest.T @ rest
        variance += np.square(x).sum(axis=0)
        count += len(states)
    values, flat = linalg.eigh(covariance / count)
    values, flat = values[::-1], flat[:, ::-1][:, : size - len(labels)]
    # Beyond this eigenvectors are round-off, and may lie along the user's modes.
    varying = values[: size - len(labels)] > 1e-12 * max(values[0], 0.0)
    if not varying.any():
        message = (
            f'[resolved] kind = "{hook.name}": nothing varies beside its modes; keep '
            "fewer"
        )
        raise DataError(message)
    others = linalg.solve_triangular(root, flat[:, varying])
    largest = np.abs(others).argmax(axis=0)
    others = others * np.sign(others[largest, np.arange(len(largest))])
    return (
        Basis(
            vectors=vectors,
            labels=labels,
            partners=np.full(len(labels), -1),
            variance=variance / count,
        ),
        Basis(
            vectors=others,
            labels=tuple(f"EOF {i + 1} of the rest" for i in range(len(largest))),
            partners=np.full(len(largest), -1),
            variance=values[: size - len(labels)][varying],
        ),
    )


def checked_vectors(hook: Hook, model: Model) -> tuple[np.ndarray, tuple[str, ...]]:
    """Vectors and labels of a user's basis.

    Raises
    ------
    ContractError
        If they are not what they must be.
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
    return vectors, tuple(labels)
