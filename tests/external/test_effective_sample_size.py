"""Effective sample sizes and sampling errors against published formulas.

For the AR(1) series x_t = phi x_(t-1) + noise of unit variance, which is an
Ornstein-Uhlenbeck process sampled once a step:

- M. S. Bartlett (1946), J. R. Stat. Soc. Suppl. 8, 27: scatter of sample
  correlations and variances;
- C. E. Leith (1973), J. Appl. Meteorol. 12, 1066; H. von Storch and F. W.
  Zwiers, Statistical Analysis in Climate Research, ch. 6: effective size;
- Z. A. Lomnicki (1961), Metrika 4, 37: scatter of skewness and kurtosis.
"""

import numpy as np
import pytest

from eddyshed.reduce.noise.fit import OrnsteinUhlenbeck
from eddyshed.reduce.statistics.correlation import (
    correlation_function,
    effective_size,
    integral_time,
)
from eddyshed.reduce.statistics.resampling import moments

PHI = 0.9
# The integral time ends where the correlation is 0.05: of an exponential, and
# of the straight lines between its samples, that leaves 0.95.
SEEN = 0.95


def autoregression(times, modes, entropy):
    """Many AR(1) series of unit variance as the modes of one member."""
    process = OrnsteinUhlenbeck(rate=[[-np.log(PHI)]], covariance=[[1.0]])
    rng = np.random.default_rng(entropy)
    return np.swapaxes(process.simulate(times, 1.0, rng, members=modes), 0, 2)


def relative_error_of_variance(number):
    """Of the variance of a normal number estimated from `number` of them."""
    return np.sqrt(2 / number)


def test_scatter_of_the_mean():
    # Exact: n over (1 + phi) / (1 - phi) - 2 phi (1 - phi**n) / (n (1 - phi)**2).
    times, modes = 1000, 2000
    inflation = (1 + PHI) / (1 - PHI)
    inflation -= 2 * PHI * (1 - PHI**times) / (times * (1 - PHI) ** 2)
    assert times / inflation == pytest.approx(53.134962805526, abs=1e-11)
    means = autoregression(times, modes, 1).mean(axis=(0, 1))
    size = 1 / (means**2).mean()
    # Four standard errors of a variance from 2000 means.
    tolerance = 4 * relative_error_of_variance(modes)
    assert size == pytest.approx(53.134962805526, rel=tolerance)


def test_scatter_of_the_variance():
    # n (1 - phi**2) / (1 + phi**2), for n much larger than the integral time.
    times, modes = 1000, 2000
    expected = times * (1 - PHI**2) / (1 + PHI**2)
    assert expected == pytest.approx(104.972375690608, abs=1e-11)
    variances = (autoregression(times, modes, 2) ** 2).mean(axis=(0, 1))
    size = 2 / variances.var(ddof=1)
    # A sum of squares over 105 values is skewed: kurtosis 3 + 12 / 105 of its
    # own, which raises the error of its variance by 3 %.
    tolerance = 4 * 1.03 * relative_error_of_variance(modes)
    assert size == pytest.approx(expected, rel=tolerance)


def test_effective_sizes_from_series():
    # Asymptotic: n (1 - phi) / (1 + phi), 52.63 in 1000, and as above.
    times, modes = 100_000, 40
    series = autoregression(times, modes, 3)
    found = effective_size(series, 1.0)
    for size, expected in (
        (found.mean, times * (1 - PHI) / (1 + PHI) / SEEN),
        (found.variance, times * (1 - PHI**2) / (1 + PHI**2)),
    ):
        # Both stated and observed scatter must explain the distance.
        error = size.error.mean() / np.sqrt(modes)
        assert abs(size.value.mean() - expected) < 4 * error
        assert size.error.mean() == pytest.approx(size.value.std(ddof=1), rel=0.5)
    # The sizes do not depend on the unit of time, the integral time does.
    assert effective_size(series, 60.0).mean.value == pytest.approx(found.mean.value)
    time = integral_time(series, 60.0).value.mean()
    expected = 60.0 * (1 + PHI) / (1 - PHI) / 2 * SEEN
    # sqrt(4 window / T) with a window of 28.4 samples, 40 modes: 0.5 %.
    assert time == pytest.approx(expected, rel=4 * 0.0054)


def test_scatter_of_correlations():
    # Bartlett's formula at lags 1, 2 and far out: 1.9e-4, 6.517e-4, 9.526e-3.
    times, modes = 1000, 2000
    found = correlation_function(autoregression(times, modes, 4), 100)
    two = ((1 + PHI**2) * (1 - PHI**4) / (1 - PHI**2) - 4 * PHI**4) / times
    assert two == pytest.approx(6.517e-4, rel=1e-4)
    far = (1 + PHI**2) / (1 - PHI**2) / times
    assert far == pytest.approx(9.526315789e-3, rel=1e-9)
    for lag, expected in ((1, (1 - PHI**2) / times), (2, two), (100, far)):
        # Four standard errors; the next order in 1 / n is that of 53 values in
        # the mean, 1 / 53. Products lost beyond the ends take lag / n.
        tolerance = 4 * relative_error_of_variance(modes) + 2 / 53
        scatter = found[lag].var(ddof=1) / (1 - lag / times)
        assert scatter == pytest.approx(expected, rel=tolerance)


def test_bootstrap_errors_of_moments():
    # Lomnicki: (6 / n) (1 + phi**3) / (1 - phi**3) for the skewness,
    # (24 / n) (1 + phi**4) / (1 - phi**4) for the kurtosis.
    times, modes = 20_000, 60
    series = autoregression(times, modes, 5)
    found = moments(series, 1.0, rng=np.random.default_rng(6))

    def inflated(power):
        return (1 + PHI**power) / (1 - PHI**power) / times

    for name, power, scale, true in (
        ("mean", 1, 1, 0),
        ("variance", 2, 2, 1),
        ("skewness", 3, 6, 0),
        ("kurtosis", 4, 24, 3),
    ):
        estimate = getattr(found, name)
        expected = np.sqrt(scale * inflated(power))
        error = np.sqrt((estimate.error**2).mean())
        # An error from 400 resamples of 260 blocks is good to 5 %, of 60 modes
        # to 0.7 %; fourth moments of blocks have heavy tails, thrice that. To
        # this add 2 % for the correction of the block edges.
        assert error == pytest.approx(expected, rel=0.02 + 4 * 0.02)
        distance = np.abs(estimate.value.mean() - true)
        assert distance < 4 * expected / np.sqrt(modes)
