"""What figures of an audit are drawn from, as plain data."""

from __future__ import annotations

import numpy as np
from scipy import stats

from .material import Material
from .perturbation import spectral_abscissa

NORMAL = np.linspace(-3.0, 3.0, 25)  # quantiles of a normal
SPECTRAL = 40  # states whose spectral abscissa is taken: eigenvalues are dear


def quantile_curves(m: Material) -> dict:
    """Quantiles of the coupling, in standard deviations, and their errors."""
    series = m.unexplained.reshape(-1, len(m.labels))
    series = (series - series.mean(axis=0)) / series.std(axis=0)
    levels = stats.norm.cdf(NORMAL)
    value = np.quantile(series, levels, axis=0)
    error = np.full(value.shape, np.inf)
    if m.batches.number:
        parts = np.array_split(np.arange(len(series)), m.batches.number)
        left = np.array(
            [np.quantile(np.delete(series, p, axis=0), levels, axis=0) for p in parts]
        )
        spread = np.sqrt((len(parts) - 1) * left.var(axis=0))
        error = m.batches.widening * spread
    return {
        "normal": NORMAL.tolist(),
        "modes": [
            {
                "mode": label,
                "value": value[:, k].tolist(),
                "error": error[:, k].tolist(),
            }
            for k, label in enumerate(m.labels)
        ],
    }


def abscissa_curve(m: Material) -> dict:
    """Abscissas of the fast operator along the truth."""
    x = m.spread[0]
    few = x[:: -(-len(x) // SPECTRAL)]
    worst = spectral_abscissa(few, m.operators, m.noise.process.rate).max()
    times = np.linspace(0, m.split.length, len(m.abscissa), endpoint=False)
    return {
        "time": times.tolist(),
        "numerical": m.abscissa.tolist(),
        "worst_spectral": float(worst),
    }
