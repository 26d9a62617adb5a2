"""Slow modes coupled to fast noise, drawn at random: what limit tests start from.

Import as ``from slow_fast import ...``; ``conftest.py`` makes it importable.
"""

from __future__ import annotations

import numpy as np
from toys import random_model

from eddyshed.reduce.reduced import ReducedModel


def skew(rng, size):
    """Random antisymmetric matrix."""
    square = rng.standard_normal((size, size))
    return square - square.T


def random_rate(rng, size, *, damping=1.0):
    """Rate that is not normal, whose symmetric part is positive definite."""
    root = rng.standard_normal((size, size)) / np.sqrt(size)
    return damping * np.eye(size) + root @ root.T + skew(rng, size) / np.sqrt(size)


def in_blocks(tensor, nx):
    """Blocks of a quadratic operator on z = (x, y), without y on y."""
    x, y = slice(None, nx), slice(nx, None)
    return {
        "x_from_xx": tensor[x, x, x],
        "x_from_xy": tensor[x, x, y],
        "x_from_yy": tensor[x, y, y],
        "y_from_xx": tensor[y, x, x],
        "y_from_xy": tensor[y, x, y],
    }


def gibbs_model(rng, nx, ny, *, variance):
    """A system with the invariant measure N(0, variance I), at every eps.

    Its linear and quadratic terms conserve ``x.x + y.y`` and the volume of
    (x, y); the noise of y has equal variances and any rate with a positive
    symmetric part, which is then balanced by construction.
    """
    n = nx + ny
    tensor = random_model(rng, n).tensor / n
    tensor[nx:, nx:, nx:] = 0
    # Take off the divergence 2 sum_b B[b, b, a] z_a with terms that conserve
    # energy: |x|^2 d - (d.z) x, of divergence -(nx - 1) d.x - nx d.y.
    divergence = 2 * np.einsum("bba->a", tensor)
    d = divergence / np.where(np.arange(n) < nx, nx - 1, nx)
    for j in range(nx):
        tensor[:, j, j] += d
        tensor[j, j, :] -= d / 2
        tensor[j, :, j] -= d / 2
    linear = skew(rng, n)
    return ReducedModel(
        name="gibbs",
        x_forcing=np.zeros(nx),
        x_from_x=linear[:nx, :nx],
        x_from_y=linear[:nx, nx:],
        y_forcing=np.zeros(ny),
        y_from_x=linear[nx:, :nx],
        rate=random_rate(rng, ny),
        covariance=variance * np.eye(ny),
        **in_blocks(tensor, nx),
    )


def random_covariance(rng, size):
    """Positive definite, nothing like a multiple of the identity."""
    root = rng.standard_normal((size, size)) / np.sqrt(size)
    return root @ root.T + np.diag(rng.uniform(0.2, 2.0, size))


def random_slow_fast(rng, nx, ny):
    """A damped system with every term, and noise that is far from equilibrium.

    The noise has a covariance C and a rate ``(D / 2 + J) C^-1`` with D positive
    and J antisymmetric, so that ``rate C + C rate^T = D``.
    """
    n = nx + ny
    tensor = random_model(rng, n).tensor / n
    covariance = random_covariance(rng, ny)
    balance = random_covariance(rng, ny) + skew(rng, ny) / np.sqrt(ny)
    return ReducedModel(
        name="random",
        x_forcing=rng.standard_normal(nx),
        x_from_x=skew(rng, nx) / nx - np.eye(nx),
        x_from_y=rng.standard_normal((nx, ny)) / np.sqrt(ny),
        y_forcing=rng.standard_normal(ny),
        y_from_x=rng.standard_normal((ny, nx)) / np.sqrt(ny),
        rate=balance @ np.linalg.inv(covariance),
        covariance=(covariance + covariance.T) / 2,
        **in_blocks(tensor, nx),
    )


def faster(model, eps):
    """The same system with noise that is 1 / eps^2 as fast.

    In terms of y / eps the equation of :mod:`eddyshed.reduce.homogenised`:
    only the mean of the quadratic terms stays as it is.
    """
    mean = np.einsum("imn,mn->i", model.x_from_yy, model.covariance)
    return ReducedModel(
        name=model.name,
        x_forcing=model.x_forcing + mean - mean / eps,
        x_from_x=model.x_from_x,
        x_from_xx=model.x_from_xx,
        x_from_y=model.x_from_y / eps,
        x_from_xy=model.x_from_xy / eps,
        x_from_yy=model.x_from_yy / eps,
        y_forcing=model.y_forcing / eps,
        y_from_x=model.y_from_x / eps,
        y_from_xx=model.y_from_xx / eps,
        y_from_xy=model.y_from_xy / eps,
        rate=model.rate / eps**2,
        covariance=model.covariance,
    )
