"""Reduced equations written out for people, term by term."""

from __future__ import annotations

from itertools import combinations_with_replacement

import numpy as np

from .diffusion import DiffusionModel
from .polynomial import DEGREES, packed

NEGLIGIBLE = 1e-3  # of the largest term of a line: smaller ones are not written
PER_LINE = 4  # terms in a line of text


def written(model: DiffusionModel, scale: np.ndarray) -> str:
    """Write an equation in the sense of Ito and in that of Stratonovich.

    Parameters
    ----------
    model : DiffusionModel
    scale : ndarray, shape (nx,)
        Typical size of each coordinate, such as its standard deviation: it
        decides which terms are too small to be written.

    Returns
    -------
    str
    """
    names = [
        f"x{i + 1} = {label}, typically {size:.3g}"
        for i, (label, size) in enumerate(zip(model.labels, scale, strict=True))
    ]
    parts = [
        f"{model.name}: departures from the mean of the truth, in SI units",
        "\n".join(names),
        "In the sense of Ito:",
        _equations(model.drift, scale),
    ]
    if np.any(model.stratonovich_part.constant) or np.any(
        model.stratonovich_part.linear
    ):
        parts += [
            "In the sense of Stratonovich (same noise):",
            _equations(model.stratonovich_drift, scale),
        ]
    else:
        parts.append(
            "In the sense of Stratonovich: the same, for the noise does not change "
            "along itself."
        )
    kind = "additive" if model.is_additive else "multiplicative"
    parts += [
        f"Covariance of the noise per second ({kind}), <dM_i dM_j> = a_i,j dt:",
        "\n".join(_covariances(model, scale)),
        f"Terms below {NEGLIGIBLE:g} of the largest in their line, at typical sizes, "
        "are not written, nor are covariances below that of the two variances.",
    ]
    return "\n\n".join(parts)


def _equations(drift, scale):
    lines = []
    rows = [packed(getattr(drift, name)) for name in DEGREES]
    for i in range(drift.nx):
        terms = [row[i] for row in rows]
        lines.append(_line(f"dx{i + 1}/dt =", terms, scale, " + noise"))
    return "\n".join(lines)


def _covariances(model, scale):
    """Lines for the covariances of the noise that are not negligible."""
    nx = model.nx
    forms = {(i, j): _form(model, i, j) for i in range(nx) for j in range(i, nx)}
    sizes = {
        pair: sum(size for size, _, _ in _sized(form, scale))
        for pair, form in forms.items()
    }
    for (i, j), form in forms.items():
        if i == j or sizes[i, j] > NEGLIGIBLE * np.sqrt(sizes[i, i] * sizes[j, j]):
            yield _line(f"a{i + 1},{j + 1} =", form, scale)


def _form(model, i, j):
    """Coefficients of a_ij as a polynomial, degree by degree, each product once."""
    noise = model.noise
    linear = noise[0, i, 1:, j] + noise[1:, i, 0, j]
    square = noise[1:, i, 1:, j]
    square = (square + square.T) / 2
    return [
        np.array([noise[0, i, 0, j]]),
        linear,
        packed(square[np.newaxis])[0],
    ]


def _sized(terms, scale):
    """Size at typical coordinates, coefficient and product, of every term."""
    found = []
    for degree, coefficients in enumerate(terms):
        products = combinations_with_replacement(range(len(scale)), degree)
        for value, chosen in zip(coefficients, products, strict=True):
            size = abs(value) * np.prod(scale[list(chosen)])
            found.append((size, value, _product(chosen)))
    return found


def _line(head, terms, scale, tail=""):
    """A sum of terms in products of coordinates, without those that are too small."""
    found = _sized(terms, scale)
    largest = max(size for size, _, _ in found)
    shown = [
        (value, what) for size, value, what in found if size > NEGLIGIBLE * largest
    ]
    if not shown:
        return f"{head} 0{tail}"
    words = []
    for k, (value, what) in enumerate(shown):
        gap = "\n        " if k and k % PER_LINE == 0 else " "
        sign = "- " if value < 0 else "+ " if k else ""
        words.append(f"{gap}{sign}{abs(value):.4g}{what}")
    return f"{head}{''.join(words)}{tail}"


def _product(chosen):
    words = []
    for i in dict.fromkeys(chosen):
        power = chosen.count(i)
        words.append(f" x{i + 1}" + (f"^{power}" if power > 1 else ""))
    return "".join(words)
