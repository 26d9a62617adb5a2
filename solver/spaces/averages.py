"""Averages of waves and sines over an interval, in closed form.

Products of them are the averages, over a rectangle, of the functions that the
spaces are made of.
"""

from __future__ import annotations

import numpy as np

Interval = tuple[float, float]


def mean_wave(wavenumber: np.ndarray, interval: Interval) -> np.ndarray:
    """Average of ``exp(i k x)`` over an interval.

    Parameters
    ----------
    wavenumber : ndarray, shape (...)
        k [m-1].
    interval : tuple of float
        From and to [m]; if they are equal, the average is the value there.

    Returns
    -------
    ndarray of complex, shape (...)
    """
    start, end = interval
    # numpy's sinc has a pi in it, and is 1 at an interval of no length.
    return np.exp(0.5j * wavenumber * (start + end)) * np.sinc(
        wavenumber * ((end - start) / (2 * np.pi))
    )


def mean_sine(wavenumber: np.ndarray, interval: Interval) -> np.ndarray:
    """Average of ``sin(k x)`` over an interval, as `mean_wave`, shape (...)."""
    return mean_wave(wavenumber, interval).imag
