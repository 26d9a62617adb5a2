"""What closures are made from, of small random truths: for the tests of closures.

Import as ``from closure_cases import ...``; ``conftest.py`` makes it importable.
"""

from __future__ import annotations

import numpy as np
from splits import divided
from toys import orthonormal_vectors, random_model, random_weights

from eddyshed.reduce.closures.data import ClosureData
from eddyshed.reduce.coupling import covariance
from eddyshed.reduce.noise.fit import fit_ornstein_uhlenbeck
from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.reduce.operators import galerkin

SIZE, NX, NY = 9, 3, 6


def no_noise():
    return fit_ornstein_uhlenbeck(np.empty((1, 100, 0)), 1.0, window=4.0)


def data_of(model, states, vectors, nx, *, step=1.0, calibrated=True, **options):
    """All that a closure is made from, and the series of the unresolved modes."""
    split, y = divided(model, states, vectors, nx, step=step, **options)
    noise = (
        fit_ornstein_uhlenbeck(y, step, window=8.0, structure="real diagonal")
        if y.shape[2]
        else no_noise()
    )
    return ClosureData(
        model=model,
        split=split,
        operators=galerkin(model, vectors[:, :nx], vectors[:, nx:], split.mean),
        noise=noise,
        covariance_y=covariance(y, y),
        covariance_xy=covariance(split.x, y),
        mean_calibration=calibrated,
    ), y


def random_case(*, ny=NY, mean=None, **options):
    """A closure's data of a random conserving model along red random states."""
    rng = np.random.default_rng(51)
    weights = random_weights(rng, SIZE) / SIZE
    model = random_model(rng, SIZE, weights=weights)
    vectors = orthonormal_vectors(rng, weights, NX + ny)
    red = OrnsteinUhlenbeck(rate=np.eye(SIZE), covariance=np.eye(SIZE))
    states = red.simulate(3000, 0.3, rng)[0] @ rng.standard_normal((SIZE, SIZE))
    states += rng.standard_normal(SIZE) if mean is None else mean
    return data_of(model, states, vectors, NX, step=0.3, **options)
