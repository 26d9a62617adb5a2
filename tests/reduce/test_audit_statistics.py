"""Statistics of the audit against published values, formulas and brute force."""

from types import SimpleNamespace

import numpy as np
import pytest
from audit_systems import NAMES, STEP, red
from scipy import linalg
from toys import orthonormal_vectors, random_model

from eddyshed.reduce.audit import balance, memory, normality, perturbation, sizes
from eddyshed.reduce.audit.batches import Batches
from eddyshed.reduce.audit.fitted import structure
from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.reduce.operators import galerkin
from eddyshed.reduce.settings import AuditSettings
from eddyshed.reduce.statistics.estimate import Estimate

RNG = np.random.default_rng


# --- Memory -------------------------------------------------------------------


def test_two_rates_fail_the_lags():
    # rho = 0.5 exp(-t) + 0.5 exp(-0.1 t): -ln rho / t is 0.452, 0.236 and 0.169 at 1, 5
    # and 10 (by hand): over twice as fast at 1 as at 10. Penland and Sardeshmukh
    # (1995), J. Climate 8:1999, for the test.
    series = red([1, 10], 24_000, RNG(1))
    y = (series.sum(axis=1) / np.sqrt(2))[np.newaxis, :, np.newaxis]
    found = memory.lag_findings(y, STEP, np.array([-1]), "test")
    lags = found.lags[0] * STEP
    expected = 0.5 * np.exp(-lags) + 0.5 * np.exp(-0.1 * lags)
    errors = found.error(lambda rho: rho[:, 3].real)
    assert abs(found.value[0, 3].real - expected[3]) < 4 * errors[0]
    factor = memory.lag_consistency(found, NAMES)
    short, long = 1, memory.FRACTIONS.index(2.0)
    rates = -np.log(expected) / lags
    assert abs(factor.value[0] - rates[short] / rates[long]) < 4 * factor.error[0]
    assert factor.value[0] - 2.1 * factor.error[0] > AuditSettings().lag_consistency


def test_a_wave_turns_the_way_that_the_fit_says():
    # exp(-(g + i w) t) with g = 0.3, w = 0.9: a frequency of the other sign is far off.
    rate = np.array([[0.3, -0.9], [0.9, 0.3]])
    process = OrnsteinUhlenbeck(rate=rate, covariance=np.eye(2))
    assert memory.complex_rate(process, (0, 1)) == 0.3 + 0.9j
    y = process.simulate(24_000, STEP, RNG(2))
    partners = np.array([1, 0])
    found = memory.lag_findings(y, STEP, partners, "test")
    assert found.units == [(0, 1)]
    shape = memory.exponential(found, process, STEP, NAMES)
    spectrum = memory.spectrum(y, STEP, process, found.units, NAMES)
    assert shape.value[0] < 0.05
    assert abs(np.log(spectrum.value[0])) < 4 * spectrum.error[0] / spectrum.value[0]
    # A fit four times too quick lacks a factor of four at the peak, where that is.
    decay = np.array([[1.2, -0.9], [0.9, 1.2]])
    quick = OrnsteinUhlenbeck(rate=decay, covariance=np.eye(2))
    far = memory.spectrum(y, STEP, quick, found.units, NAMES)
    assert 3 < far.value[0] < 5
    other = OrnsteinUhlenbeck(rate=rate.T, covariance=np.eye(2))
    assert memory.exponential(found, other, STEP, NAMES).value[0] > 0.4
    assert memory.spectrum(y, STEP, other, found.units, NAMES).value[0] > 4


def test_red_noise_has_its_spectrum():
    # Of an AR(1) series with 0.9 the power at zero is ((1 + 0.9) / (1 - 0.9))^2 = 361
    # times that at the highest frequency (Gilman, Fuglister and Mitchell 1963); that
    # of a process four times as quick is off by a factor near four at the peak.
    rate = -np.log(0.9)
    right = OrnsteinUhlenbeck(rate=np.array([[rate]]), covariance=np.eye(1))
    y = right.simulate(40_000, 1.0, RNG(3))
    found = memory.spectrum(y, 1.0, right, [(0,)], NAMES)
    # The largest of four bands, each with an error of its own: 4 of them.
    assert np.log(found.value[0]) < 4 * found.error[0] / found.value[0]
    quick = OrnsteinUhlenbeck(rate=np.array([[4 * rate]]), covariance=np.eye(1))
    away = memory.spectrum(y, 1.0, quick, [(0,)], NAMES).value[0]
    assert 3 < away < 5


def test_yearly_sunspots_are_no_red_noise():
    # Open data carried by statsmodels. Their AR(2) fit has a period of 10.9 years, so
    # an AR(1) leaves innovations that are anything but white.
    datasets = pytest.importorskip("statsmodels.datasets")
    spots = datasets.sunspots.load_pandas().data["SUNACTIVITY"].to_numpy()
    y = (spots - spots.mean())[np.newaxis, :, np.newaxis]
    # r1 = 0.8202 (309 years); its logarithm is the rate.
    process = OrnsteinUhlenbeck(
        rate=np.array([[-np.log(0.8202012944)]]), covariance=np.array([[y.var()]])
    )
    found = memory.whiteness(y, 1.0, process, [(0,)], ["sunspots"])
    assert found.value[0] - 3 * found.error[0] > AuditSettings().innovations


def test_the_temperature_of_the_equatorial_pacific_fails_the_lag_test():
    # Open data carried by statsmodels: monthly anomalies, whose -ln r / lag grows from
    # 0.090 at one month to 0.223 at nine.
    datasets = pytest.importorskip("statsmodels.datasets")
    table = datasets.elnino.load_pandas().data.to_numpy()[:, 1:]
    anomalies = (table - table.mean(axis=0)).ravel()
    y = anomalies[np.newaxis, :, np.newaxis]
    found = memory.lag_findings(y, 1.0, np.array([-1]), "test")
    rate = -np.log(np.abs(found.value[0])) / found.lags[0]
    assert rate[memory.FRACTIONS.index(2.0)] > 1.4 * rate[memory.FRACTIONS.index(0.25)]
    assert memory.lag_consistency(found, NAMES).value[0] > 1.45


# --- Normality ----------------------------------------------------------------


def test_errors_of_shape_know_of_serial_correlation():
    # AR(1) with 0.9 and 5000 values: skewness and kurtosis scatter by 0.0875 and 0.152
    # (Lomnicki 1961, Metrika 4:37); of independent values by 0.035 and 0.069.
    rng = RNG(4)
    step = -np.log(0.9)
    series = [red([1, 1], 5000 * step, rng, step)[np.newaxis] for _ in range(60)]
    found = [normality.shape(one, step, NAMES[:2], rng) for one in series]
    tails = np.concatenate([one.value for one, _ in found])
    errors = np.concatenate([one.error for one, _ in found])
    skew = np.concatenate([other.error for _, other in found])
    # Block bootstraps err by a fifth; the naive errors are less than half of these.
    assert np.median(errors) == pytest.approx(0.152, rel=0.2)
    assert np.median(skew) == pytest.approx(0.0875, rel=0.2)
    # 120 values: the naive test rejects a quarter and more, this one a few.
    assert np.mean(np.abs(tails - 3) > 1.96 * np.sqrt(24 / 5000)) > 0.2
    assert np.mean(np.abs(tails - 3) > 1.96 * errors) < 0.15


def test_joint_kurtosis_of_six_points():
    # (1,2) (2,1) (3,4) (4,3) (5,7) (6,5): b2 = 5.013411603599 (definition of Mardia
    # 1970, Biometrika 57:519, worked by hand), over 2 (2 + 2).
    rows = np.array([(1, 2), (2, 1), (3, 4), (4, 3), (5, 7), (6, 5)], dtype=float)
    assert normality.mardia_ratio(rows) == pytest.approx(5.013411603599 / 8, rel=1e-11)


def test_joint_kurtosis_of_normals_has_its_mean():
    # Exactly p (p + 2) (n - 1) / (n + 1) for n normal rows (Mardia 1970): 14.940 for
    # 500 in three dimensions, with a standard deviation of 0.49.
    rng = RNG(5)
    found = [normality.mardia_ratio(rng.standard_normal((500, 3))) for _ in range(200)]
    spread = 0.489897949 / 15 / np.sqrt(200)
    assert abs(np.mean(found) - 14.940119760 / 15) < 4 * spread


# --- Batches ------------------------------------------------------------------


def test_batches_give_the_error_of_a_variance():
    # Var / C^2 = 2 J / T with J the integral of rho^2, one decay time.
    rng = RNG(6)
    found, errors = [], []
    for _ in range(200):
        n = red([1], 400, rng)
        batches = Batches.of(n[np.newaxis], STEP, "test")
        value, error = batches.jackknife(*batches.means(n**2), lambda mean: mean)
        found.append(value[0])
        errors.append(error[0])
    expected = np.sqrt(2 / 400)
    assert np.std(found) == pytest.approx(expected, rel=0.2)  # 4 errors of 200 draws
    assert np.mean(errors) == pytest.approx(expected, rel=0.1)


def test_too_short_a_record_has_no_error_and_says_how_much_is_missing():
    n = red([1], 12, RNG(7))
    batches = Batches.of(n[np.newaxis], STEP, "test")
    assert batches.number == 0
    _, error = batches.jackknife(*batches.means(n), lambda mean: mean)
    assert np.isinf(error).all()
    # Four batches of six times are needed.
    assert Batches.by(1.0, 12 * batches.more / batches.more).more > 1
    assert Batches.by(1.0, 12 * Batches.by(1.0, 12.0).more).number == 4


def test_the_bias_of_a_curved_statistic_goes():
    # E exp(4 mean) of 40 values is exp(16 / 80) = 1.22, not 1.
    rng = RNG(8)
    batches = Batches(number=20, widening=1.0, more=1.0)
    found = [
        batches.jackknife(*batches.means(n), lambda mean: np.exp(4 * mean))[0][0]
        for n in rng.standard_normal((800, 40, 1))
    ]
    # Scatter of 0.8 for each: four errors of the mean.
    assert abs(np.mean(found) - 1) < 4 * 0.8 / np.sqrt(800)


# --- Operators ----------------------------------------------------------------


@pytest.fixture(scope="module")
def case():
    rng = RNG(9)
    model = random_model(rng, 7)
    vectors = orthonormal_vectors(rng, model.weights, 7)
    operators = galerkin(model, vectors[:, :2], vectors[:, 2:], np.zeros(7))
    return model, vectors, operators


def test_size_of_the_perturbation_is_its_norm(case):
    _, _, operators = case
    rate = np.diag([1.0, 2.0, 3.0, 4.0, 5.0])
    process = OrnsteinUhlenbeck(rate=rate, covariance=np.eye(5))

    class Noise:
        pass

    noise = Noise()
    noise.process, noise.rate_error = process, np.zeros((5, 5))
    x = red([1, 1], 200, RNG(10))
    batches = Batches.of(x[np.newaxis], STEP, "test")
    norms = [
        np.linalg.norm(2 * np.einsum("mjn,j->mn", operators.B212, one)) for one in x
    ]
    expected = np.sqrt(np.mean(np.square(norms))) / np.linalg.norm(rate)
    found = perturbation.operator_ratio(x, operators, noise, batches)
    # The correction of the bias is a small part of the error.
    assert abs(found.value[0] - expected) < 0.2 * found.error[0]


def test_numerical_abscissa_is_growth_at_once(case):
    # d/dt |exp(L t)| at t = 0 is the numerical abscissa of L; expm by scipy.
    _, _, operators = case
    rate = np.diag([1.0, 2.0, 3.0, 4.0, 5.0])
    x = np.array([[0.3, -0.2]])
    matrix = 2 * np.einsum("mjn,j->mn", operators.B212, x[0]) - rate
    t = 1e-6
    growth = (np.linalg.norm(linalg.expm(matrix * t), 2) - 1) / t
    found = perturbation.numerical_abscissa(x, operators, rate)[0]
    assert found == pytest.approx(growth, abs=1e-4)
    # In the long run: |exp(L t)| goes as exp(alpha t).
    alpha = perturbation.spectral_abscissa(x, operators, rate)[0]
    late = [np.linalg.norm(linalg.expm(matrix * t), 2) for t in (40.0, 41.0)]
    assert alpha == pytest.approx(np.log(late[1] / late[0]), abs=0.2)
    assert alpha <= found


def test_terms_add_up_to_the_tendency(case):
    from splits import divided

    model, vectors, _ = case
    states = red([1] * 7, 100, RNG(11))
    split, _ = divided(model, states, vectors[:, :6], 2, step=STEP)
    operators = galerkin(model, vectors[:, :2], vectors[:, 2:6], split.mean)
    rows = (np.zeros(50, int), np.arange(50))
    found = sizes.terms_of(model, split, operators, states[:50], rows)
    total = model.constant + model.linear(states[:50])
    total = total + model.bilinear(states[:50], states[:50])
    dual = model.weights @ vectors
    np.testing.assert_allclose(sum(found.slow.values()), total @ dual[:, :2])
    np.testing.assert_allclose(
        sum(found.fast.values()) + operators.F2, total @ dual[:, 2:6]
    )
    np.testing.assert_allclose(found.fast_tendency, total @ dual[:, 2:6])
    # One direction of seven is in no mode: the energy of what is along it.
    away = ((states[:50] - split.mean) @ dual[:, 6]) ** 2
    np.testing.assert_allclose(found.left_out[:, 0], away, atol=1e-12)


def test_without_a_left_out_direction_nothing_is_in_no_mode(case):
    from splits import divided

    model, vectors, _ = case
    states = red([1] * 7, 100, RNG(12))
    split, _ = divided(model, states, vectors, 2, step=STEP)
    operators = galerkin(model, vectors[:, :2], vectors[:, 2:], split.mean)
    rows = (np.zeros(50, int), np.arange(50))
    found = sizes.terms_of(model, split, operators, states[:50], rows)
    for terms, tendency in (
        (found.slow, found.slow_tendency),
        (found.fast, found.fast_tendency),
    ):
        assert np.abs(terms["in no mode"]).max() < 1e-10 * np.abs(tendency).max()


def test_pairs_count_as_fitted_together():
    n = red([1, 1, 1], 800, RNG(13))
    y = np.stack([n[:, 0], n[:, 0] + 0.1 * n[:, 1], n[:, 2]], axis=1)
    batches = Batches.of(y[np.newaxis], STEP, "test")
    apart = structure(y, 4, np.array([-1, -1, -1]), batches)
    paired = structure(y, 4, np.array([1, 0, -1]), batches)
    assert apart.value[0] > 0.3
    assert abs(paired.value[0]) < 3 * paired.error[0]


def test_independent_modes_share_nothing_on_average():
    # Squares of sample covariances would give a share of about 0.2 here.
    rng = RNG(14)
    shares = []
    for _ in range(60):
        y = red([1] * 6, 60, rng)
        batches = Batches.of(y[np.newaxis], STEP, "test")
        shares.append(structure(y, 4, np.full(6, -1), batches).value[0])
    assert abs(np.mean(shares)) < 4 * np.std(shares) / np.sqrt(60)


# --- Balance ------------------------------------------------------------------


def test_growth_of_a_white_drift_errs_as_the_times_of_the_noise():
    # One mode: A11 + A12 A21 / rate = -1 + 3 / rate, whose derivative is -3 / rate^2.
    rate, error = 2.0, 0.1
    noise = SimpleNamespace(
        process=OrnsteinUhlenbeck(rate=[[rate]], covariance=[[1.0]]),
        decay=Estimate([rate], [error]),
        batches=20,
    )
    operators = SimpleNamespace(A11=np.array([[-1.0]]))
    linear = np.array([[-1 + 3 / rate]])
    found = balance.white_growth(linear, operators, noise, 10.0)
    assert found.value[0] == pytest.approx(10 * 0.5)
    assert found.error[0] == pytest.approx(10 * 3 / rate**2 * error)
    assert found.freedom == 19
