"""Whether the mean tendencies balance, and whether the reduced models are stable."""

from __future__ import annotations

import numpy as np

from ..noise.fit import NoiseFit
from ..operators import Operators
from .batches import Batches
from .findings import Assumption, Measured

MEANS = Assumption(
    name="balance: means",
    sentence="The terms in the modes add up to a mean tendency of nought.",
    closures=("coloured", "white"),
    statistic="absolute mean of F1 + A11 x + B111 + A12 y + 2 B112 + B122 along the "
    "truth, over the rms resolved tendency",
    setting="mean_balance",
    sense="at most",
    meaning="what is in no mode pushes the mean; the shift of the constant hides it",
    remedy="raise [unresolved] variance",
    votes=False,
)
STABILITY = Assumption(
    name="balance: stability",
    sentence="The linear part of the reduced model decays.",
    closures=("damped", "residual"),
    statistic="largest growth rate times the longest correlation time of the modes",
    setting="growth",
    sense="at most",
    meaning="the model runs away, or is held by its quadratic terms alone, far from "
    "the truth",
    remedy="run a longer truth, or keep fewer modes",
)
WHITE_STABILITY = Assumption(
    name="balance: white stability",
    sentence="The linear drift of the white closure, with no cubic term to hold it, "
    "decays.",
    closures=("white",),
    statistic="largest growth rate of its drift, times the longest correlation time "
    "of the modes",
    setting="growth",
    sense="at most",
    meaning="the model runs away, or is held by its quadratic terms alone, far from "
    "the truth",
    remedy="take the coloured closure, or keep the modes that feed back",
)
COUPLED_STABILITY = Assumption(
    name="balance: coupled stability",
    sentence="The linear part of modes and noise together decays.",
    closures=("coloured",),
    statistic="largest growth rate of x and y about the mean state, times the longest "
    "correlation time of the modes",
    setting="growth",
    sense="at most",
    meaning="only quadratic terms, which conserve energy, hold the coupled model",
    remedy="run the benchmark: it shows whether they do",
    votes=False,
)


def mean_balance(
    explained: np.ndarray, tendency: np.ndarray, batches: Batches, labels
) -> Measured:
    """Mean of the terms in the modes, over the rms tendency.

    Parameters
    ----------
    explained, tendency : ndarray, shape (time, nx)
        Sum of the terms in the modes, and all of it.
    batches : Batches
    labels : sequence of str

    Notes
    -----
    The tendency itself has a mean of (end - start) / length, which is chance and
    is taken off.
    """
    scale = np.sqrt(np.mean(tendency**2, axis=0))
    scale = np.where(scale > 0, scale, 1.0)
    left = (explained - tendency) / scale
    value, error = batches.jackknife(*batches.means(left), lambda mean: mean)
    return Measured(
        value=np.abs(value),
        error=error,
        places=labels,
        freedom=batches.freedom,
        more=batches.more,
    )


def growth(
    matrix: np.ndarray, errors: np.ndarray, time: float, freedom: float, place: str
) -> Measured:
    """Largest real part of the eigenvalues of a matrix whose entries have errors.

    Parameters
    ----------
    matrix, errors : ndarray, shape (n, n)
        [s-1]
    time : float
        What the rate is multiplied by [s].
    freedom : float
        Degrees of freedom of the errors.
    place : str

    Notes
    -----
    To first order an eigenvalue changes by ``w . dA v / (w . v)`` with its left and
    right eigenvectors (G. W. Stewart and J. Sun 1990, Matrix Perturbation Theory,
    ch. IV); the errors of the entries are taken to be independent.
    """
    values, right = np.linalg.eig(matrix)
    worst = int(values.real.argmax())
    error = np.inf
    if np.all(np.isfinite(errors)):
        left = np.linalg.inv(right)[worst]
        change = np.real(np.outer(left, right[:, worst]))
        error = float(np.sqrt(np.sum((change * errors) ** 2)))
    return Measured(
        value=np.array([values[worst].real * time]),
        error=np.array([error * time]),
        places=[place],
        freedom=freedom,
    )


def white_growth(
    linear: np.ndarray, operators: Operators, noise: NoiseFit, time: float
) -> Measured:
    """Largest growth rate of the linear drift of the white closure.

    Parameters
    ----------
    linear : ndarray, shape (nx, nx)
        Of the drift [s-1].
    operators : Operators
    noise : NoiseFit
    time : float
        What the rate is multiplied by [s].

    Notes
    -----
    All that the noise adds to the equation's own linear part is proportional to
    times of the noise, and is taken to have their relative error: rms over the modes,
    weighted by variance, as if all erred together.
    """
    weights = np.diag(noise.process.covariance)
    relative = noise.decay.error / noise.decay.value
    error = np.sqrt(weights @ relative**2 / weights.sum())
    added = np.abs(linear - operators.A11)
    freedom = max(1, noise.batches - 1)
    return growth(linear, error * added, time, freedom, "resolved modes")


def coupled_matrix(operators, noise: NoiseFit) -> tuple[np.ndarray, np.ndarray]:
    """Linear part of modes and noise about the mean state, and its errors."""
    matrix = np.block(
        [[operators.A11, operators.A12], [operators.A21, -noise.process.rate]]
    )
    errors = np.zeros_like(matrix)
    errors[operators.nx :, operators.nx :] = noise.rate_error
    return matrix, errors
