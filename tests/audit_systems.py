"""Systems of which it is known whether they keep an assumption, and by how much.

Import as ``from audit_systems import ...``; ``conftest.py`` makes it importable.
Each function draws one record of some length (in correlation times) from a
stream and returns the finding that the audit makes of it. The degree says how
the system stands to the assumption: it keeps it well, lies on the threshold of
the defaults (where an audit must not say "fails" more often than by chance),
or breaks it clearly. Everything else of the system is as assumed.
"""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np

from eddyshed.reduce.audit import (
    balance,
    dependence,
    fitted,
    memory,
    normality,
    perturbation,
    record,
    separation,
    sizes,
)
from eddyshed.reduce.audit.batches import Batches
from eddyshed.reduce.audit.findings import judge
from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.reduce.settings import AuditSettings

STEP = 0.25  # of the decay time of the fast series
NAMES = ("m0", "m1", "m2", "m3", "m4", "m5")


def red(times, length, rng, step=STEP):
    """Independent standard Ornstein-Uhlenbeck series, shape (time, series)."""
    size = len(times)
    process = OrnsteinUhlenbeck(
        rate=np.diag(1 / np.asarray(times, float)), covariance=np.eye(size)
    )
    return process.simulate(int(length / step), step, rng)[0]


def _judged(assumption, measured):
    threshold = getattr(AuditSettings(), assumption.setting)
    return judge(assumption, measured, threshold, assumption.closures)


def _pick(degree, keeps, edge, breaks):
    return {"keeps": keeps, "edge": edge, "breaks": breaks}[degree]


def _batches(series):
    return Batches.of(series[np.newaxis], STEP, "test")


def separated(degree, length, rng):
    """Two modes whose time is 8, 2.5 or 1 times that of their noise."""
    ratio = _pick(degree, 8.0, 2.5, 1.0)
    series = red([ratio, ratio, 1, 1], length * ratio, rng)[np.newaxis]
    found = separation.separation(series[..., :2], series[..., 2:], STEP, NAMES[:2])
    return _judged(separation.SEPARATION, found)


def tails(degree, length, rng):
    """A normal times the exponential of another: kurtosis 3 exp(4 s^2)."""
    kurtosis = _pick(degree, 3.0, 4.5, 15.0)
    n = red([1] * 4, length, rng)
    r = n[:, :2] * np.exp(np.sqrt(np.log(kurtosis / 3)) / 2 * n[:, 2:])
    found, _ = normality.shape(r[np.newaxis], STEP, NAMES[:2], rng)
    return _judged(normality.TAILS, found)


def symmetry(degree, length, rng):
    """``n + a (n^2 - 1)``, of skewness ``(6 a + 8 a^3) / (1 + 2 a^2)^1.5``."""
    a = _pick(degree, 0.0, 0.0865, 0.4)
    n = red([1, 1], length, rng)
    _, found = normality.shape((n + a * (n**2 - 1))[np.newaxis], STEP, NAMES[:2], rng)
    return _judged(normality.SYMMETRY, found)


def joint(degree, length, rng):
    """Two normals times one exponential: Mardia's ratio is ``exp(4 s^2)``."""
    ratio = _pick(degree, 1.0, 1.5, 5.0)
    n = red([1] * 3, length, rng)
    r = n[:, :2] * np.exp(np.sqrt(np.log(ratio)) / 2 * n[:, 2:])
    return _judged(normality.JOINT, normality.joint(r[np.newaxis], STEP))


def unresolved(degree, length, rng):
    """As `tails`, all modes together."""
    kurtosis = _pick(degree, 3.0, 4.5, 15.0)
    n = red([1] * 4, length, rng)
    y = n[:, :2] * np.exp(np.sqrt(np.log(kurtosis / 3)) / 2 * n[:, 2:])
    return _judged(normality.UNRESOLVED, normality.unresolved(y, _batches(y)))


def fourth(degree, length, rng):
    """A product of two normals against a fit that is off by a factor."""
    off = np.exp(_pick(degree, 0.0, 0.6, 1.5))
    n = red([1, 1], length, rng)
    product = n[:, :1] * n[:, 1:]
    found = normality.fourth_moments(product, np.array([off]), _batches(n), NAMES[:1])
    return _judged(normality.FOURTH, found)


def _mixed(degree, length, rng):
    """Sum of a fast and a slow series of equal variance; the fit has its integral."""
    slow = _pick(degree, 1.0, None, 10.0)
    n = red([1, slow, 1, slow], length * (1 + slow) / 2, rng)
    y = ((n[:, ::2] + n[:, 1::2]) / np.sqrt(2))[np.newaxis]
    rate = 2 / (1 + slow)
    process = OrnsteinUhlenbeck(rate=rate * np.eye(2), covariance=np.eye(2))
    return y, process, memory.lag_findings(y, STEP, np.array([-1, -1]), "test")


def shape(degree, length, rng):
    """One rate, looked at with its own and with one twenty times too slow."""
    _, process, found = _mixed("keeps", length, rng)
    if degree == "breaks":
        process = OrnsteinUhlenbeck(rate=process.rate / 20, covariance=np.eye(2))
    measured = memory.exponential(found, process, STEP, NAMES)
    return _judged(memory.EXPONENTIAL, measured)


def lags(degree, length, rng):
    """One rate, and a sum of two that differ ten times, at lags inferred."""
    _, _, found = _mixed(degree, length, rng)
    return _judged(memory.LAGS, memory.lag_consistency(found, NAMES))


def spectral(degree, length, rng):
    """One rate, looked at with its own and with one four times too quick."""
    y, process, found = _mixed("keeps", length, rng)
    if degree == "breaks":
        process = OrnsteinUhlenbeck(rate=process.rate * 4, covariance=np.eye(2))
    measured = memory.spectrum(y, STEP, process, found.units, NAMES)
    return _judged(memory.SPECTRUM, measured)


def innovations(degree, length, rng):
    """White innovations, and those of a series smooth in time, as flows are."""
    y, process, found = _mixed("keeps", length, rng)
    if degree == "breaks":
        y = (y + np.roll(y, 1, axis=1)) / 2
    measured = memory.whiteness(y, STEP, process, found.units, NAMES)
    return _judged(memory.WHITENESS, measured)


def dependent(degree, length, rng):
    """``y = a x + n`` with a share of 0, 0.1 or 0.4 explained."""
    share = _pick(degree, 0.0, 0.1, 0.4)
    n = red([1] * 4, length, rng)
    y = np.sqrt(share) * n[:, :2] + np.sqrt(1 - share) * n[:, 2:]
    found = dependence.explained(n[:, :2], y, _batches(n), "all")
    return _judged(dependence.MEAN, found)


def modulated(degree, length, rng):
    """An energy of which a share of 0, 0.4 or 0.8 is a function of x."""
    share = _pick(degree, 0.0, 0.4, 0.8)
    n = red([1] * 3, length, rng)
    square = (n[:, :1] ** 2 - 1) / np.sqrt(2)
    energy = np.sqrt(share) * square + np.sqrt(1 - share) * n[:, 2:]
    found = dependence.explained(n[:, :2], energy, _batches(n), "all")
    return _judged(dependence.ENERGY, found)


def operator(degree, length, rng):
    """Two modes that turn and stretch three others, against a known rate."""
    ratio = _pick(degree, 0.5, 1.0, 2.0)
    tensor = np.random.default_rng(5).standard_normal((3, 2, 3))
    tensor *= ratio * np.sqrt(3) / 2 / np.linalg.norm(tensor)
    operators = SimpleNamespace(B212=tensor, nx=2)
    process = OrnsteinUhlenbeck(rate=np.eye(3), covariance=np.eye(3))
    noise = SimpleNamespace(process=process, rate_error=np.zeros((3, 3)))
    x = red([1, 1], length, rng)
    found = perturbation.operator_ratio(x, operators, noise, _batches(x))
    return _judged(perturbation.KAPPA, found)


def forced(degree, length, rng):
    """Rms of one series over that of another, in ratios of 0.05, 0.2 and 0.5."""
    ratio = _pick(degree, 0.05, 0.2, 0.5)
    n = red([1] * 4, length, rng)
    found = perturbation.ratio_of_sizes(ratio * n[:, :2], n[:, 2:], _batches(n), "all")
    return _judged(perturbation.FORCING, found)


def growing(degree, length, rng):
    """Share of time above a level: 0.023, 0.3 and 0.7 of a normal."""
    level = _pick(degree, 2.0, 0.5244, -0.5244)
    n = red([1], length, rng)
    found = perturbation.growth_share(n[:, 0] - level, _batches(n))
    return _judged(perturbation.ABSCISSA, found)


def replaced(degree, length, rng):
    """The opposite sense: ratios of 1.4, 0.7 and 0.3."""
    ratio = _pick(degree, 1.4, 0.7, 0.3)
    n = red([1] * 4, length, rng)
    found = perturbation.ratio_of_sizes(ratio * n[:, :2], n[:, 2:], _batches(n), "all")
    return _judged(sizes.REPLACED, found)


def quick(degree, length, rng):
    """Times in ratios of 0.4, 1 and 3, in 8 stretches."""
    ratio = _pick(degree, 0.4, 1.0, 3.0)
    each = length / 8
    parts = [red([ratio, 1.0], each, rng) for _ in range(8)]
    n = np.concatenate(parts)
    found = sizes.replaced_time(n[:, :1], n[:, 1:], STEP, 8)
    return _judged(sizes.QUICK, found)


def negligible(degree, length, rng):
    """Coupling over tendency in ratios of 0.1, 0.3 and 0.9."""
    ratio = _pick(degree, 0.1, 0.3, 0.9)
    n = red([1] * 4, length, rng)
    found = perturbation.ratio_of_sizes(ratio * n[:, :2], n[:, 2:], _batches(n), "all")
    return _judged(sizes.COUPLING, found)


def structured(degree, length, rng):
    """Two series that share a part: their squared correlation is twice c^2 of all."""
    share = _pick(degree, 0.0, 0.2, 0.45)
    c = np.sqrt(share / (1 - share))  # off-diagonal 2 c^2 of 2 + 2 c^2, at each lag
    n = red([1] * 3, length, rng)
    y = np.sqrt(1 - c) * n[:, :2] + np.sqrt(c) * n[:, 2:]
    found = fitted.structure(y, 4, np.array([-1, -1]), _batches(y))
    return _judged(fitted.STRUCTURE, found)


def balanced(degree, length, rng):
    """A mean push of 0, 0.2 and 0.8 in a tendency of unit size."""
    push = _pick(degree, 0.0, 0.2, 0.8)
    n = red([1] * 4, length, rng)
    tendency = 10 * n[:, 2:]
    explained = tendency + push * 10 + 2 * n[:, :2]
    found = balance.mean_balance(explained, tendency, _batches(n), NAMES[:2])
    return _judged(balance.MEANS, found)


def stable(degree, length, rng):
    """A matrix known with errors that fall as the record grows."""
    growth = _pick(degree, -1.0, 0.0, 1.0)
    matrix = np.array([[growth, 0.5], [0.0, growth - 2.0]])
    errors = np.full((2, 2), 2 / np.sqrt(length))
    # The scatter that errors are estimated from has 19 degrees of freedom.
    drawn = matrix + errors * rng.standard_normal((2, 2))
    known = errors * np.sqrt(rng.chisquare(19, (2, 2)) / 19)
    return _judged(balance.STABILITY, balance.growth(drawn, known, 1.0, 19, "all"))


def left_out(degree, length, rng):
    """Shares of 0.01, 0.05 and 0.2 in no mode."""
    share = _pick(degree, 0.01, 0.05, 0.2)
    n = red([1, 1], length, rng) ** 2
    total = share * n[:, :1] + (1 - share) * n[:, 1:]
    energies = np.concatenate([share * n[:, :1], total], axis=1)
    found = record.left_out_share(energies, _batches(energies))
    return _judged(record.LEFT_OUT, found)


def _halves(shift, factor, length, rng):
    x = red([1, 1], length, rng)
    half = len(x) // 2
    x[half:] *= np.sqrt(factor)
    x[half:] += shift
    x -= x.mean(axis=0)  # as in a divided truth
    return record.shifts(x[np.newaxis], STEP, NAMES[:2])


def shifted(degree, length, rng):
    """Means of the halves apart by so many standard deviations of either."""
    shift = _pick(degree, 0.0, 1.0, 3.0)
    return _judged(record.SHIFT, _halves(shift, 1.0, length, rng)[0])


def spread(degree, length, rng):
    """Variances of the halves in a ratio of 1, 2 and 6."""
    factor = _pick(degree, 1.0, 2.0, 6.0)
    return _judged(record.SPREAD, _halves(0.0, factor, length, rng)[1])


def trending(degree, length, rng):
    """A line that changes by 0, 1.73 and 5 standard deviations."""
    change = _pick(degree, 0.0, 1.73, 5.0)
    x = red([1, 1], length, rng)
    x += change * np.linspace(-0.5, 0.5, len(x))[:, np.newaxis]
    found = record.shifts(x[np.newaxis], STEP, NAMES[:2])[2]
    return _judged(record.TREND, found)


# name -> (system, whether it has an edge, a long record [correlation times])
SYSTEMS = {
    "record: means": (shifted, True, 400),
    "record: variances": (spread, True, 400),
    "record: trend": (trending, True, 400),
    "separation": (separated, True, 240),
    "normality: tails": (tails, True, 1000),
    "normality: symmetry": (symmetry, True, 800),
    "normality: all together": (joint, True, 2000),
    "normality: unresolved modes": (unresolved, True, 1000),
    "fourth moments": (fourth, True, 400),
    "dependence: mean": (dependent, True, 400),
    "dependence: variance": (modulated, True, 400),
    "perturbation: operator": (operator, True, 400),
    "perturbation: forcing": (forced, True, 400),
    "perturbation: growth": (growing, True, 400),
    "balance: stability": (stable, True, 400),
    "balance: means": (balanced, True, 400),
    "sizes: coupling": (negligible, True, 400),
    "sizes: replaced term": (replaced, True, 400),
    "sizes: replaced time": (quick, True, 1600),
    "memory: shape": (shape, False, 400),
    "memory: spectrum": (spectral, False, 400),
    "memory: lags": (lags, False, 800),
    "memory: innovations": (innovations, False, 400),
    "noise: structure": (structured, True, 400),
    "record: in no mode": (left_out, True, 400),
}
