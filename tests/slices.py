"""Fields of a space written out as functions, to test it and its oceans by quadrature.

Import as ``from slices import ...``; ``conftest.py`` makes it importable.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Functions:
    """Functions of a basis, and their first derivatives, on a set of points.

    Attributes
    ----------
    value, x, y : ndarray, shape (points, n)
    weights : ndarray, shape (points,)
        Of the quadrature that gives a domain mean.
    """

    value: np.ndarray
    x: np.ndarray
    y: np.ndarray
    weights: np.ndarray

    def project(self, field):
        """Amplitudes of a field, shape (points,), on an orthogonal basis."""
        power = self.weights @ self.value**2
        return (self.weights * field) @ self.value / power


def functions(space, walls, x, y, weights):
    """All functions that a space periodic in x keeps, from what its modes are.

    Parameters
    ----------
    space : Periodic or Channel
        Only its cutoff and its lengths are used.
    walls : bool
        Sines in y rather than waves.
    x, y, weights : ndarray, shape (points,)
    """
    (cx, cy), (lx, ly) = space.cutoff, space.lengths
    value, by_x, by_y = [], [], []
    for k in range(cx + 1):
        for m in range(1, cy + 1) if walls or k == 0 else range(-cy, cy + 1):
            kx, ky = 2 * np.pi * k / lx, (1 if walls else 2) * np.pi * m / ly
            for part in (0, np.pi / 2):
                if walls and k == 0 and part:
                    continue
                angle = kx * x - part + (0 if walls else ky * y)
                cos, sin = np.cos(angle), np.sin(angle)
                if walls:
                    up, up_y = np.sin(ky * y), ky * np.cos(ky * y)
                    value.append(cos * up)
                    by_x.append(-kx * sin * up)
                    by_y.append(cos * up_y)
                else:
                    value.append(cos)
                    by_x.append(-kx * sin)
                    by_y.append(-ky * sin)
    return Functions(
        *(np.array(rows).T.copy() for rows in (value, by_x, by_y)), weights
    )


def quadrature(space, walls):
    """The functions on points that integrate products of three of them exactly."""
    n = 4 * max(space.cutoff) + 4
    along = (np.arange(n) + 0.3) * (space.lengths[0] / n)
    # Gauss-Legendre: 12 points and 6 for each radian-pair of the fastest product.
    nodes, weights = np.polynomial.legendre.leggauss(12 + 12 * space.cutoff[1])
    up = (nodes + 1) / 2 * space.lengths[1]
    x, y = (part.ravel() for part in np.meshgrid(along, up))
    return functions(space, walls, x, y, np.repeat(weights / 2, n) / n)


def amplitudes(space, walls):
    """Matrix from the coefficients of a space to amplitudes of the functions."""
    x, y = (part.ravel() for part in np.meshgrid(*space.grid_axes))
    on_grid = functions(space, walls, x, y, np.full(len(x), 1 / len(x))).value
    samples = np.array([space.to_grid(unit).ravel() for unit in np.eye(space.n_real)]).T
    matrix, *_ = np.linalg.lstsq(on_grid, samples, rcond=None)
    return matrix
