"""Whether a series bears out what Ornstein-Uhlenbeck noise assumes of it.

No model of the flow is needed: the checks look at the series, and one of
them at what a fitted process leaves unexplained. Each sets a statistic, with
its standard error, against a threshold, coordinate by coordinate; whether it
holds depends on the whole interval, not on the point.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import special

from ..statistics.correlation import correlation_scales
from ..statistics.estimate import Estimate
from ..statistics.jackknife import jackknife_error
from ..statistics.resampling import shape_of
from ..statistics.series import checked_series, checked_step
from ..statistics.stationarity import stationarity
from .innovations import largest_innovation
from .lag_integrals import units_of
from .lag_pairs import lag_correlations
from .ornstein_uhlenbeck import OrnsteinUhlenbeck

WRONG = 0.05  # probability of a wrong verdict on one check of one coordinate
BATCHES = 20
SKEWNESS = 0.5  # of a gamma distribution with 16 degrees of freedom
TAILS = 1.0  # excess kurtosis: fourth moments a third too large
PREDICTABLE = 0.2  # correlation of innovations: 4 % of their variance foreseen
RATES = 1.25  # factor between rates from two lags
SHIFT = 0.5  # standard deviations, between halves
SPREAD = 1.5  # factor between the variances of halves
TREND = 1.0  # standard deviations over the record: a twelfth of the variance
LAGS = (0.25, 0.5, 1.0, 1.5)  # integral times at which rates are compared


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SeriesCheck:
    """One assumption, tested on every coordinate.

    Parameters
    ----------
    name : str
        Short name.
    assumption : str
        What is assumed, in a sentence.
    statistic : str
        What was measured.
    found : Estimate, shape (n,)
        The statistic, never negative.
    threshold : float
        What it may be at most.
    quantile : float or ndarray, shape (n,)
        Standard errors to either side of the interval that is compared.
    """

    name: str
    assumption: str
    statistic: str
    found: Estimate
    threshold: float
    quantile: float | np.ndarray

    @property
    def verdicts(self) -> list[str]:
        """For each coordinate ``holds``, ``fails`` or ``undecided``."""
        reach = self.quantile * self.found.error
        return [
            "fails" if low > self.threshold else "holds" if high < self.threshold
            else "undecided"
            for low, high in zip(
                self.found.value - reach, self.found.value + reach, strict=True
            )
        ]  # fmt: skip

    @property
    def worst(self) -> int:
        """Coordinate that speaks most against the assumption."""
        order = {"fails": 2, "undecided": 1, "holds": 0}
        beyond = self.found.value - self.threshold
        distance = beyond / np.where(self.found.error > 0, self.found.error, np.inf)
        keys = [order[verdict] for verdict in self.verdicts]
        return int(np.lexsort((distance, keys))[-1])


def check_series(
    series: np.ndarray,
    step: float,
    process: OrnsteinUhlenbeck,
    rng: np.random.Generator,
    partners: np.ndarray | None = None,
) -> list[SeriesCheck]:
    """Test normality, innovations, lags and stationarity.

    Parameters
    ----------
    series : ndarray, shape (member, time, mode)
    step : float
        Time between samples [s].
    process : OrnsteinUhlenbeck
        A fit, whose innovations are looked at.
    rng : numpy.random.Generator
        For the block bootstrap of the moments.
    partners : array_like of int, shape (mode,), optional
        Pairs, as the fit was given them.

    Returns
    -------
    list of SeriesCheck

    Raises
    ------
    DataError
        If the series cannot be used.
    """
    series = checked_series(series, "series checks")
    step = checked_step(step, "series checks")
    return [
        *normality(series, step, rng),
        whiteness(series, step, process),
        lag_consistency(series, step, partners),
        *stationary(series, step),
    ]


def normality(
    series: np.ndarray, step: float, rng: np.random.Generator
) -> list[SeriesCheck]:
    """Skewness and excess kurtosis; see `shape_of` for their errors."""
    skewness, excess, _ = shape_of(series, step, rng=rng)
    return [
        SeriesCheck(
            name="normality: symmetry",
            assumption="The series is Gaussian: its symmetry.",
            statistic="absolute skewness",
            found=Estimate(np.abs(skewness.value), skewness.error),
            threshold=SKEWNESS,
            quantile=_normal(1),
        ),
        SeriesCheck(
            name="normality: tails",
            assumption="The series is Gaussian: its tails.",
            statistic="absolute excess kurtosis",
            found=Estimate(np.abs(excess.value), excess.error),
            threshold=TAILS,
            quantile=_normal(1),
        ),
    ]


def whiteness(
    series: np.ndarray, step: float, process: OrnsteinUhlenbeck
) -> SeriesCheck:
    """Largest correlation of what the process cannot foresee one step ahead.

    The largest of eight lags is judged with the quantile of one in eight times the
    probability (Bonferroni).
    """
    found, lags = largest_innovation(series, step, process)
    return SeriesCheck(
        name="whiteness",
        assumption="What is new in each sample has nothing to do with what was new "
        "before.",
        statistic="largest correlation of innovations one step apart, lags of 1 to "
        f"{lags} steps",
        found=found,
        threshold=PREDICTABLE,
        quantile=_normal(lags),
    )


def lag_consistency(
    series: np.ndarray, step: float, partners: np.ndarray | None = None
) -> SeriesCheck:
    """Decay inferred at several lags (C. Penland and P. D. Sardeshmukh (1995)).

    ``-log |rho(lag)| / lag`` does not depend on the lag if the series, or the
    complex amplitude of a wave, is an Ornstein-Uhlenbeck process. Lags of a
    quarter to one and a half integral times are compared with the shortest of
    them; that which is farthest beyond what its error allows is shown. A
    correlation below 0.05 counts as 0.05. Errors are by the jackknife over 20
    batches.
    """
    size = series.shape[2]
    first, second = units_of(partners, size, "lag consistency")
    scales = correlation_scales(series, step)
    rows, longest = np.zeros((2, size)), series.shape[1] // 4
    for one, other in zip(first, second, strict=True):
        columns = [one] if other < 0 else [one, other]
        # The amplitude of a wave outlives its phase.
        time = scales.time.value[one] if other < 0 else scales.squared.value[one]
        steps = np.unique(
            [min(max(1, round(part * time / step)), longest) for part in LAGS]
        )
        if len(steps) < 2:
            steps = np.array([1, 2])
        rates = np.stack(
            [
                -np.log(np.clip(modulus, 0.05, 1 - 1e-12)) / lag
                for lag in steps
                for modulus in [lag_correlations(series[:, :, columns], lag, BATCHES)]
            ]
        )
        ratio = np.log(rates[1:] / rates[0])
        error = np.array([jackknife_error(one) for one in ratio])
        beyond = (np.abs(ratio[:, 0]) - np.log(RATES)) / np.maximum(error, 1e-12)
        worst = int(beyond.argmax())
        rows[:, columns] = np.array([[abs(ratio[worst, 0])], [error[worst]]])
    return SeriesCheck(
        name="lag consistency",
        assumption="The rate does not depend on the lag that it is inferred at.",
        statistic="factor between the decays inferred at two lags (logarithm)",
        found=Estimate(rows[0], rows[1]),
        threshold=float(np.log(RATES)),
        quantile=float(special.stdtrit(BATCHES - 1, 1 - WRONG / 2 / (len(LAGS) - 1))),
    )


def stationary(series: np.ndarray, step: float) -> list[SeriesCheck]:
    """Means and variances of the halves, and the trend; see `stationarity`."""
    departures = stationarity(series, step)
    rows = (
        ("mean", "the means of the halves differ by, in standard deviations",
         departures.mean_shift, SHIFT),
        ("variance", "ratio of the variances of the halves (logarithm)",
         departures.variance_shift, np.log(SPREAD)),
        ("trend", "change along the linear trend, in standard deviations",
         departures.trend, TREND),
    )  # fmt: skip
    return [
        SeriesCheck(
            name=f"stationarity: {name}",
            assumption="The statistics of the series do not change with time.",
            statistic=statistic,
            found=Estimate(np.abs(found.value), found.error),
            threshold=float(threshold),
            quantile=special.stdtrit(departures.freedom, 1 - WRONG / 2),
        )
        for name, statistic, found, threshold in rows
    ]


def _normal(number):
    """Normal quantile for one of a number of intervals that are to hold at once."""
    return float(special.ndtri(1 - WRONG / 2 / number))
