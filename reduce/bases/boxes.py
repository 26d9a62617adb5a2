"""Box averages: what instruments measure is what is kept."""

from __future__ import annotations

from itertools import combinations

import numpy as np
from scipy import linalg

from eddyshed.solver.boxes import BoxSettings, box_averages
from eddyshed.solver.errors import DataError

from ..contract import Model
from .basis import Basis, Flat, Measured, dependent
from .settings import BoxesSettings

SECTION = "resolved.boxes"
EDGE = 1e-9  # of the domain: sides that share no more have an edge in common
NOTHING = 1e-9  # of a usual representer: an average that is zero but for round-off


def boxes_basis(settings: BoxesSettings, model: Model) -> Basis:
    """Make the modes that hold averages over rectangles exactly.

    Parameters
    ----------
    settings : BoxesSettings
        The rectangles and their fields.
    model : Model
        An ocean: it knows its fields and their averages.

    Returns
    -------
    Basis
        One mode for each box, named like it, and the averages as what is
        measured. The variances are zero: they are the truth's to say.

    Raises
    ------
    DataError
        If a box does not fit the ocean, if two overlap, if one is a combination
        of others, or if its average is always zero.

    Notes
    -----
    The average over a box is the inner product of the state with one vector,
    its Riesz representer: the state of least energy that has it. These vectors
    span the resolved space. They are given the length one and made orthogonal
    by the inverse root of their matrix of inner products, which treats them
    alike and moves them least (P.-O. Loewdin 1950, J. Chem. Phys. 18:365). As
    the averages are inner products with the span, its coordinates hold them
    exactly, and what is unresolved has none of them.
    """
    averages = box_averages(model, settings.boxes, SECTION)
    _check_apart(settings.boxes, model)
    flat = Flat.of(model)
    found = flat.representers(averages.rows)
    _check_independent(found, averages, model, settings.boxes)
    found /= np.linalg.norm(found, axis=0)
    vectors = found @ _inverse_root(found.T @ found)
    # Once more: the first time leaves round-off times the condition.
    vectors = flat.vectors(vectors @ _inverse_root(vectors.T @ vectors))
    count = len(averages.names)
    if count >= model.size:
        message = (
            f"[{SECTION}] has {count} boxes for {model.size} coordinates, and some "
            "must be left unresolved; give fewer boxes or more grid points"
        )
        raise DataError(message)
    return Basis(
        vectors=vectors,
        labels=averages.names,
        partners=np.full(count, -1),
        variance=np.zeros(count),
        measured=Measured(
            matrix=averages.rows @ vectors,
            labels=averages.names,
            units=averages.units,
            long_names=averages.long_names,
        ),
    )


def _inverse_root(matrix):
    """Inverse of the root of a symmetric positive matrix."""
    values, vectors = linalg.eigh(matrix)
    return (vectors / np.sqrt(values)) @ vectors.T


def _check_apart(boxes, model):
    """Refuse boxes of one field that overlap."""
    for (one, first), (other, second) in combinations(boxes.items(), 2):
        if first.field == second.field and all(
            _meet(getattr(first, name), getattr(second, name), length)
            for name, length in zip(
                _directions(model), model.space.lengths, strict=True
            )
        ):
            message = (
                f"[{SECTION}.{one}] and [{SECTION}.{other}] overlap, and average the "
                "same field; move or shrink one of them, or leave it out"
            )
            raise DataError(message)


def _directions(model):
    """What the two directions of an ocean are called."""
    return getattr(model, "directions", ("x", "y"))


def _meet(one, other, length):
    """Whether two sides, which may wrap around, have more than an edge in common."""

    def pieces(side):
        start, end = (0.0, length) if side is None else side
        return [(start, end)] if start < end else [(start, length), (0.0, end)]

    return any(
        min(a[1], b[1]) - max(a[0], b[0]) > EDGE * length
        for a in pieces(one)
        for b in pieces(other)
    )


def _check_independent(representers, averages, model, boxes):
    """Refuse boxes of which one says nothing, or nothing that others do not."""
    names = averages.names
    length = np.linalg.norm(representers, axis=0)
    # The same fields over a ninth of the domain, which is no period of any wave.
    x, y = model.space.lengths
    up = _directions(model)[1]
    ninths = {
        name: BoxSettings(field=box.field, **{"x": (0.0, x / 3), up: (0.0, y / 3)})
        for name, box in boxes.items()
    }
    rows = box_averages(model, ninths, SECTION).rows
    typical = np.linalg.norm(Flat.of(model).representers(rows), axis=0)
    zero = np.flatnonzero(length < NOTHING * typical)
    if zero.size:
        message = (
            f"[{SECTION}.{names[zero[0]]}]: the average is zero whatever the flow "
            "does, as over the whole of a periodic direction; choose another rectangle"
        )
        raise DataError(message)
    found = dependent(representers)
    if found is None:
        return
    number, others = found
    partners = ", ".join(f"[{SECTION}.{names[k]}]" for k in others)
    message = (
        f"[{SECTION}.{names[number]}] is a combination of {partners} to one part in a "
        "million: its average follows from theirs; leave out one of them, or move it"
    )
    raise DataError(message)
