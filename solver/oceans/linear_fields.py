"""The fields of an ocean that are linear in its state, as weights."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, slots=True, kw_only=True)
class LinearField:
    """A field as a linear function of the state.

    Attributes
    ----------
    unit, long_name : str
        Of the field.
    weights : ndarray, shape (n_parts, n_real)
        With the state cut into parts of n_real coordinates each, the
        coefficients of the field in the space are ``(weights * parts).sum(0)``.
    derivative : str, optional
        "x" or "y" if the field is the derivative, in that direction of the
        space, of the one that the weights give.
    """

    unit: str
    long_name: str
    weights: np.ndarray
    derivative: str | None = None


def flow_fields(
    streamfunction: np.ndarray, k_squared: np.ndarray, up: str = "northward"
) -> dict[str, LinearField]:
    """Streamfunction, relative vorticity and velocities of one flow.

    Parameters
    ----------
    streamfunction : ndarray, shape (n_parts, n_real)
        Weights of its streamfunction [m2 s-1].
    k_squared : ndarray, shape (n_real,)
        Minus the eigenvalue of the Laplacian [m-2].
    up : str
        What the second direction of the space is called.

    Returns
    -------
    dict of str to LinearField
    """
    return {
        "streamfunction": LinearField(
            unit="m2 s-1", long_name="streamfunction", weights=streamfunction
        ),
        "vorticity": LinearField(
            unit="s-1",
            long_name="relative vorticity",
            weights=-k_squared * streamfunction,
        ),
        "eastward_velocity": LinearField(
            unit="m s-1",
            long_name="eastward velocity",
            weights=-streamfunction,
            derivative="y",
        ),
        f"{up}_velocity": LinearField(
            unit="m s-1",
            long_name=f"{up} velocity",
            weights=streamfunction,
            derivative="x",
        ),
    }
