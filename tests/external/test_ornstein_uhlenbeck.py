"""The Ornstein-Uhlenbeck process and its fit against published formulas.

Numbers are the formulas of the sources named beside each test, worked out to
the printed digits by a script that shares no code with this project.
"""

import numpy as np
import pytest
from scipy import integrate

from eddyshed.reduce.noise.fit import OrnsteinUhlenbeck, fit_ornstein_uhlenbeck
from eddyshed.reduce.statistics.correlation import correlation_function

PRINTED = 1e-11  # twelve digits are printed of numbers of order one

# C. W. Gardiner, Handbook of Stochastic Methods, ch. 4 (multivariate process);
# H. Risken, The Fokker-Planck Equation, ch. 6: dx = -A x dt + B dW.
A = np.array([[1.0, 2.0], [-0.5, 0.8]])
B = np.array([[0.7, 0.0], [0.3, 0.4]])
C = np.array([[0.235123456790, 0.004938271605], [0.004938271605, 0.159336419753]])


@pytest.fixture(scope="module")
def process():
    return OrnsteinUhlenbeck(rate=A, covariance=C)


def test_diffusion_balances_decay(process):
    np.testing.assert_allclose(process.diffusion, B @ B.T, rtol=0, atol=PRINTED)


@pytest.mark.parametrize(
    ("lag", "propagator", "innovation"),
    [
        (
            0.5,
            [[0.529753268425, -0.611649568130], [0.152912392032, 0.590918225238]],
            [[0.112728811665, 0.042397627742], [0.042397627742, 0.097308500361]],
        ),
        (
            1.0,
            [[0.187109726859, -0.685458235115], [0.171364558779, 0.255655550371]],
            [[0.153293804239, 0.025665424595], [0.025665424595, 0.141584943972]],
        ),
    ],
)
def test_exact_steps(process, lag, propagator, innovation):
    np.testing.assert_allclose(
        process.propagator(lag), propagator, rtol=0, atol=PRINTED
    )
    np.testing.assert_allclose(
        process.innovation_covariance(lag), innovation, rtol=0, atol=PRINTED
    )


def test_spectrum(process):
    found = process.spectrum(1.3)
    cross = 0.001621808772 + 0.186435118536j
    expected = [[0.267817118283, cross], [np.conj(cross), 0.183136833282]]
    np.testing.assert_allclose(found, expected, rtol=0, atol=PRINTED)


def test_spectrum_adds_up_to_the_covariance(process):
    # Wiener-Khinchin; the frequency axis is folded on (-pi/2, pi/2).
    def integrand(angle):
        return process.spectrum(np.tan(angle)) / np.cos(angle) ** 2 / (2 * np.pi)

    total, _ = integrate.quad_vec(integrand, -np.pi / 2, np.pi / 2, epsabs=1e-10)
    # The tolerance of the quadrature, for each of two halves, and the print.
    np.testing.assert_allclose(total, C, rtol=0, atol=3e-10)


def test_integral_covariance_is_the_integral(process):
    total, _ = integrate.quad_vec(process.lag_covariance, 0, 60, epsabs=1e-12)
    # What is left beyond 60 e-folding times of 1 / 0.9 is below 1e-23.
    np.testing.assert_allclose(process.integral_covariance, total, rtol=0, atol=1e-11)


def test_largest_growth_of_a_decaying_system(process):
    # C. Penland and P. D. Sardeshmukh (1995), J. Climate 8, 1999: squared norm.
    growth = np.linalg.norm(process.propagator(1.0), 2) ** 2
    assert growth == pytest.approx(0.549900093197, abs=PRINTED)


@pytest.mark.parametrize(("turn", "area"), [(0.5, 0.4), (1, 0.5), (2, 0.4), (-1, -0.5)])
def test_levy_area(turn, area):
    # G. A. Pavliotis and A. M. Stuart, Multiscale Methods, ch. 11: rate
    # [[1, a], [-a, 1]] and unit noise give the area a / (1 + a**2) a time, and
    # the diffusion 1 / (1 + a**2).
    process = OrnsteinUhlenbeck(rate=[[1, turn], [-turn, 1]], covariance=np.eye(2) / 2)
    integral = process.integral_covariance
    # Round-off of a 2 x 2 solve.
    assert integral[1, 0] - integral[0, 1] == pytest.approx(area, abs=1e-15)
    expected = np.eye(2) / (1 + turn**2)
    np.testing.assert_allclose(process.zero_frequency, expected, atol=1e-15)


def test_red_noise():
    # K. Hasselmann (1976), Tellus 28, 473: s**2 / (theta**2 + omega**2).
    theta = 0.3
    process = OrnsteinUhlenbeck(rate=[[theta]], covariance=[[1.0]])

    def power(omega):
        return process.spectrum(omega)[0, 0].real

    assert power(theta) / power(0.0) == pytest.approx(0.5, rel=1e-14)
    for multiple, slope in ((1, -1.0), (3, -1.8), (10, -1.980198)):
        ratio = np.exp(1e-4)
        up, down = power(multiple * theta * ratio), power(multiple * theta / ratio)
        # Six decimals are printed; the difference errs by 1e-8 of the slope.
        assert np.log(up / down) / 2e-4 == pytest.approx(slope, abs=1e-6)


def test_scalar_process_is_an_autoregression():
    # theta = 0.5, sigma = 0.8, dt = 0.1; Gardiner, ch. 4.
    process = OrnsteinUhlenbeck(rate=[[0.5]], covariance=[[0.64]])
    assert process.diffusion[0, 0] == pytest.approx(0.8**2, rel=1e-14)
    assert process.propagator(0.1)[0, 0] == pytest.approx(0.951229424501, abs=1e-12)
    found = process.innovation_covariance(0.1)[0, 0]
    assert found == pytest.approx(0.060904052457, abs=1e-12)


@pytest.mark.parametrize(
    ("step", "euler"), [(0.1, 0.526315789474), (0.2, 0.555555555556), (0.5, 2 / 3)]
)
def test_steps_keep_the_stationary_variance(step, euler):
    # P. E. Kloeden and E. Platen, Numerical Solution of Stochastic Differential
    # Equations: for theta = sigma = 1 the exact step keeps 1/2 at any step, the
    # Euler-Maruyama step makes it 0.5 / (1 - dt / 2).
    process = OrnsteinUhlenbeck(rate=[[1.0]], covariance=[[0.5]])
    factor = process.propagator(step)[0, 0]
    noise = process.innovation_covariance(step)[0, 0]
    assert noise / (1 - factor**2) == pytest.approx(0.5, rel=1e-14)
    assert step / (1 - (1 - step) ** 2) == pytest.approx(euler, abs=1e-12)

    series = process.simulate(40_000, step, np.random.default_rng(4), members=20)
    variances = (series**2).mean(axis=(1, 2))
    error = variances.std(ddof=1) / np.sqrt(20)
    # Student's t with 19 degrees of freedom exceeds 5 in 8e-5 of cases; the
    # stream is fixed. Euler's variance is out by more than 10 errors.
    assert abs(variances.mean() - 0.5) < 5 * error
    assert abs(variances.mean() - euler) > 10 * error


def test_bias_of_the_lag_one_correlation():
    # M. G. Kendall (1954), Biometrika 41, 403; F. H. C. Marriott and J. A. Pope
    # (1954), Biometrika 41, 390: -(1 + 3 phi) / n when the mean is estimated,
    # for sums over the n - 1 products and n squares, each divided by its number.
    phi, times, modes = 0.9, 500, 4000
    process = OrnsteinUhlenbeck(rate=[[-np.log(phi)]], covariance=[[1.0]])
    series = process.simulate(times, 1.0, np.random.default_rng(5), members=modes)
    found = correlation_function(np.swapaxes(series, 0, 2), 1)[1] * times / (times - 1)
    error = found.std(ddof=1) / np.sqrt(modes)
    expected = -(1 + 3 * phi) / times
    # Four standard errors, and 10 / n**2 for the next order. The bias for a
    # known mean, -2 phi / n, lies outside.
    tolerance = 4 * error + 10 / times**2
    assert abs(found.mean() - phi - expected) < tolerance
    assert abs(-2 * phi / times - expected) > tolerance


def test_linear_wave_is_recovered():
    # A stochastically forced wave with decay 0.075 and frequency -0.24 has the
    # correlation exp(-0.075 t) cos(0.24 t) (P. Mueller and C. Frankignoul 1981,
    # J. Phys. Oceanogr. 11, 287, from memory: linear Rossby waves as this
    # process). The best possible standard error of rate and frequency is
    # sqrt(decay / T) (Cramer-Rao); matching integrals costs more, not less.
    decay, frequency = 0.075, -0.24
    process = OrnsteinUhlenbeck(
        rate=[[decay, -frequency], [frequency, decay]], covariance=2 * np.eye(2)
    )
    for lag in (1.0, 5.0, 20.0):
        expected = np.exp(-decay * lag) * np.cos(frequency * lag)
        found = process.lag_covariance(lag)[0, 0] / 2
        assert found == pytest.approx(expected, abs=1e-14)
    series = process.simulate(40_000, 0.5, np.random.default_rng(6))
    fit = fit_ornstein_uhlenbeck(series, 0.5, window=60.0, partners=[1, 0])
    best = np.sqrt(decay / 20_000)
    for found, true in ((fit.decay, decay), (fit.frequency, frequency)):
        # 20 batches: Student's t with 19 degrees of freedom exceeds 4 in 8e-4
        # of cases; the stream is fixed.
        assert np.all(np.abs(found.value - true) < 4 * found.error)
        # The jackknife error itself is known to a sixth with 20 batches.
        assert np.all(found.error > best * (1 - 2 / 6))
        assert np.all(found.error < 4 * best)
    assert fit.variance.value[0] == pytest.approx(2, abs=4 * fit.variance.error[0])


def test_error_of_a_fit_is_that_of_the_bartlett_estimate():
    # M. S. Bartlett (1950); M. B. Priestley, Spectral Analysis and Time Series,
    # ch. 6: relative variance 4 w / (3 T) of the estimate at frequency zero, w
    # the window. The correction for the window changes rates by factors: the
    # logarithm of the rate by that of the integral times q / (x |dq / dx|),
    # q(x) = 1 / x - (1 - exp(-x)) / x**2, x the window in e-folding times.
    window, record, modes = 8.0, 1000.0, 150
    process = OrnsteinUhlenbeck(rate=np.eye(modes), covariance=np.eye(modes))
    series = process.simulate(5000, record / 5000, np.random.default_rng(7))
    fit = fit_ornstein_uhlenbeck(series, record / 5000, window=window)
    q = 1 / window - (1 - np.exp(-window)) / window**2
    slope = -1 / window**2 + 2 / window**3
    expected = np.sqrt(4 * window / (3 * record)) * q / (window * abs(slope))
    scatter = fit.decay.value.std(ddof=1)
    # 150 modes give a scatter to 6 %. The formula is the limit of long windows
    # and does not know that dividing by the estimated variance helps: 25 %.
    assert scatter == pytest.approx(expected, rel=0.25)
    assert np.sqrt((fit.decay.error**2).mean()) == pytest.approx(scatter, rel=0.2)
