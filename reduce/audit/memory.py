"""Whether the unresolved modes remember as an Ornstein-Uhlenbeck process does.

Looked at are the units (pairs that turn, and single modes) that hold most of
the variance: half of it, but at most twelve.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from ..noise.innovations import INNOVATION_LAGS, largest_innovation
from ..noise.lag_pairs import complex_units, regressed_units, unit_pairs
from ..noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from ..statistics.correlation import correlation_scales
from ..statistics.jackknife import jackknife_error
from .batches import Batches
from .findings import Assumption, Measured

SHARE = 0.5  # of the variance, in the units that are looked at
UNITS = 12  # at most
FRACTIONS = (0.25, 0.5, 1.0, 1.5, 2.0, 3.0, 4.0)  # lags, in times of the envelope
BANDS = (0.0, 0.5, 1.0, 2.0, 4.0)  # of frequency from the peak, in decay rates
FLOOR = 0.02  # of a correlation whose logarithm is taken

DERIVED = ("coloured", "white")
EXPONENTIAL = Assumption(
    name="memory: shape",
    sentence="The unresolved modes forget exponentially, as the fitted noise does.",
    closures=DERIVED,
    statistic="rms difference of the correlation function and that of the fit, up to "
    "four correlation times",
    setting="memory_shape",
    sense="at most",
    meaning="the noise has the right integral and the wrong shape of memory: expect "
    "short lags to be off, and little else",
    remedy="none is needed while the noise is fast; else keep these modes",
    votes=False,
)
LAGS = Assumption(
    name="memory: lags",
    sentence="The rate inferred from the correlation does not depend on the lag.",
    closures=DERIVED,
    statistic="factor between the decay rates inferred at a half and at two "
    "correlation times, whichever is larger over the other",
    setting="lag_consistency",
    sense="at most",
    meaning="no single rate describes these modes: a fit to one lag would depend on "
    "the lag",
    remedy="match integrals, not lags (the default does)",
    votes=False,
    logarithmic=True,
)
SPECTRUM = Assumption(
    name="memory: spectrum",
    sentence="The spectrum of the unresolved modes is that of the fitted noise.",
    closures=DERIVED,
    statistic="factor between the power of the modes and that of the fit, either over "
    "the other, in the worst of four bands about the peak, up to four decay rates",
    setting="spectrum",
    sense="at most",
    meaning="the noise drives the slow modes at other frequencies than the truth does",
    remedy="keep these modes, or choose the method of the fit by what the slow modes "
    "feel",
    votes=False,
    logarithmic=True,
)
WHITENESS = Assumption(
    name="memory: innovations",
    sentence="What is new in each sample of an unresolved mode has nothing to do with "
    "what was new before.",
    closures=DERIVED,
    statistic="largest correlation of innovations under the fitted noise, lags of one "
    f"to {INNOVATION_LAGS} records",
    setting="innovations",
    sense="at most",
    meaning="the modes are smooth in time and the noise is not: lags of a few records "
    "look different",
    remedy="none is needed while the noise is fast",
    votes=False,
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LagFindings:
    """Complex correlations of leading units at lags of their own.

    Attributes
    ----------
    units : list of tuple of int
        One or two modes each.
    lags : ndarray of int, shape (unit, lag)
        In records.
    replicates : ndarray of complex, shape (batch + 1, unit, lag)
        From the record, then with each batch left out.
    batches : Batches
    """

    units: list[tuple[int, ...]]
    lags: np.ndarray
    replicates: np.ndarray
    batches: Batches

    @property
    def value(self) -> np.ndarray:
        """Correlations in the record, shape (unit, lag)."""
        return self.replicates[0]

    def error(self, statistic):
        """Jackknife error of a function of the correlations, shape (unit,)."""
        return self.batches.error(np.array([statistic(r) for r in self.replicates]))

    def measured(self, value, error, labels, tries=1):
        """Put numbers and names together."""
        return Measured(
            value=value,
            error=error,
            places=[labels[unit[0]] for unit in self.units],
            freedom=self.batches.freedom,
            tries=tries,
            more=self.batches.more,
        )


def leading_units(variance: np.ndarray, partners: np.ndarray) -> list[tuple[int, ...]]:
    """Units that hold half of the variance, at most twelve, largest first."""
    units = [
        (mode,) if partner < 0 else (mode, int(partner))
        for mode, partner in enumerate(partners)
        if partner < 0 or mode < partner
    ]
    held = np.array([variance[list(unit)].sum() for unit in units])
    order = np.argsort(-held, kind="stable")
    enough = int(np.searchsorted(np.cumsum(held[order]), SHARE * held.sum())) + 1
    return [units[k] for k in order[: min(enough, UNITS)]]


def lag_findings(
    y: np.ndarray, step: float, partners: np.ndarray, where: str
) -> LagFindings:
    """Correlations of the leading units, with each batch left out.

    Parameters
    ----------
    y : ndarray, shape (member, time, ny)
    step : float
    partners : ndarray of int, shape (ny,)
    where : str
        For errors.
    """
    units = leading_units(y.var(axis=(0, 1)), partners)
    part = y[:, :, [mode for unit in units for mode in unit]]
    scales = correlation_scales(part, step)
    batches = Batches.of(part, step, where)
    lags, replicates, column = [], [], 0
    for unit in units:
        wave = len(unit) == 2
        # The envelope of a wave outlasts its phase.
        time = (scales.squared if wave else scales.time).value[column]
        steps = np.round(np.array(FRACTIONS) * time / step)
        lags.append(np.clip(steps, 1, y.shape[1] // 4).astype(int))
        second = np.array([column + 1 if wave else -1])
        series = complex_units(part, np.array([column]), second)
        column += len(unit)
        # Of fewer than two batches none can be left out; the error is then unknown.
        number = max(2, batches.number)
        found = [regressed_units(unit_pairs(series, lag, number)) for lag in lags[-1]]
        replicates.append([correlation[:, 0] for correlation, _ in found])
    return LagFindings(
        units=units,
        lags=np.array(lags),
        replicates=np.array(replicates).transpose(2, 0, 1),
        batches=batches,
    )


def complex_rate(process: OrnsteinUhlenbeck, unit: tuple[int, ...]) -> complex:
    """Decay and frequency of a unit: it goes as ``exp(-(decay + i w) t)``.

    The part of lower index is the real one; see `NoiseFit.frequency`.
    """
    rate = process.rate
    if len(unit) == 1:
        return complex(rate[unit[0], unit[0]])
    one, other = unit
    decay = (rate[one, one] + rate[other, other]) / 2
    return complex(decay, (rate[other, one] - rate[one, other]) / 2)


def exponential(
    found: LagFindings, process: OrnsteinUhlenbeck, step: float, labels
) -> Measured:
    """Root mean square difference from the fit; noise in its square is taken out."""
    fitted = np.array(
        [
            np.exp(-complex_rate(process, unit) * lags * step)
            for unit, lags in zip(found.units, found.lags, strict=True)
        ]
    )

    def misfit(rho):
        return np.mean(np.abs(rho - fitted) ** 2, axis=1)

    noise = np.mean(jackknife_error(found.replicates) ** 2, axis=1)
    square = np.maximum(misfit(found.value) - noise, 0.0)
    root = np.sqrt(square)
    error = found.error(misfit) / (2 * np.maximum(root, 0.05))
    return found.measured(root, error, labels)


def lag_consistency(found: LagFindings, labels) -> Measured:
    """Factor between the rates at half a correlation time and at two.

    ``-ln|rho(lag)| / lag`` does not depend on the lag for an Ornstein-Uhlenbeck
    process (C. Penland and P. D. Sardeshmukh 1995, J. Climate 8:1999).
    """
    short, long = FRACTIONS.index(0.5), FRACTIONS.index(2.0)

    def rates(rho):
        modulus = np.clip(np.abs(rho), FLOOR, 1 - 1e-9)
        return -np.log(modulus) / np.maximum(found.lags, 1)

    def factor(rho):
        rate = rates(rho)
        return np.log(rate[:, long] / rate[:, short])

    ratio = np.exp(np.abs(factor(found.value)))
    return found.measured(ratio, ratio * found.error(factor), labels)


def spectrum(
    y: np.ndarray, step: float, process: OrnsteinUhlenbeck, units, labels
) -> Measured:
    """Power against that of the fit, in the worst of four bands of each unit.

    Sampled at steps h, a process with the propagator ``p = exp(-rate h)`` has the
    spectrum ``(1 - |p|^2) / |1 - p exp(-i w h)|^2`` (D. L. Gilman, F. J. Fuglister
    and J. M. Mitchell 1963, J. Atmos. Sci. 20:182, for a real p): what is beyond
    the highest frequency is folded in. Values of a periodogram are independent
    exponentials times the spectrum, so the mean of n errs by ``1 / sqrt(n)``, of
    the whole series if it is complex and of half of it if it is real.
    """
    centred = y - y.mean(axis=(0, 1))
    members, times, _ = centred.shape
    frequency = 2 * np.pi * np.fft.fftfreq(times, step)
    value, error = [], []
    for unit in units:
        mode = centred[:, :, unit[0]].astype(complex)
        if len(unit) == 2:
            mode += 1j * centred[:, :, unit[1]]
        power = np.mean(np.abs(np.fft.fft(mode, axis=1)) ** 2, axis=0) / times
        power /= np.mean(np.abs(mode) ** 2)
        rate = complex_rate(process, unit)
        onward = np.exp(-rate * step)
        folded = np.abs(1 - onward * np.exp(-1j * frequency * step)) ** 2
        ratio = power * folded / (1 - np.abs(onward) ** 2)
        # Of the two ways round, the shorter; the mean was taken off at zero.
        away = np.angle(np.exp(1j * (frequency + rate.imag) * step)) / step
        away = np.abs(away) / rate.real
        rows = []
        for low, high in pairwise(BANDS):
            inside = (away >= low) & (away < high) & (frequency != 0)
            count = inside.sum() * members / (1 if len(unit) == 2 else 2)
            if count >= 8:  # the mean of fewer is far from a normal
                mean = ratio[inside].mean()
                rows.append((abs(np.log(mean)), 1 / np.sqrt(count)))
        beyond = [off - 2 * spread for off, spread in rows]
        off, spread = rows[int(np.argmax(beyond))] if rows else (0.0, np.inf)
        value.append(np.exp(off))
        error.append(np.exp(off) * spread)
    return Measured(
        value=np.array(value),
        error=np.array(error),
        places=[labels[unit[0]] for unit in units],
        tries=len(BANDS) - 1,
    )


def whiteness(
    y: np.ndarray, step: float, process: OrnsteinUhlenbeck, units, labels
) -> Measured:
    """Largest correlation of innovations, of each leading unit."""
    rows = [mode for unit in units for mode in unit]
    found, tries = largest_innovation(y, step, process, rows)
    return Measured(
        value=found.value,
        error=found.error,
        places=[labels[mode] for mode in rows],
        tries=tries,
    )
