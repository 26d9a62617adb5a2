"""Closures: what each keeps of the equation, and whether it returns what is known."""

from dataclasses import replace

import numpy as np
import pytest
from closure_cases import NX, NY, data_of, no_noise, random_case
from scipy import linalg, signal
from splits import resolved_only
from toys import Quadratic

from eddyshed.reduce.closures import CLOSURES, closure
from eddyshed.reduce.closures.data import ClosureData
from eddyshed.reduce.closures.instrumental import instrumental_fit
from eddyshed.reduce.contract import tendency
from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.reduce.operators import galerkin
from eddyshed.reduce.reduced import compiled_drift
from eddyshed.reduce.simulation import simulate, step_rule
from eddyshed.reduce.statistics.resampling import moments
from eddyshed.solver.errors import DataError
from eddyshed.solver.randomness import stream


def test_every_closure_is_there():
    data, _ = random_case()
    for name, what in CLOSURES.items():
        model = closure(name)(data)
        assert model.name == name
        assert model.nx == NX
        assert what


# --- Bare -------------------------------------------------------------------


def drift_of_x(model, x):
    """Drift of the resolved modes of a model without noise, for rows of x."""
    made, _ = compiled_drift(model)(x.T.copy(), np.empty((0, len(x))))
    return made.T


def test_bare_knows_nothing_of_the_unresolved_modes():
    data, _ = random_case()
    model, vectors = data.model, data.split.resolved.vectors
    bare, bare_mean = closure("bare")(data), closure("bare_mean")(data)
    assert bare.ny == bare_mean.ny == 0
    x = np.random.default_rng(1).standard_normal((5, NX))
    kept_mean = vectors @ model.inner(vectors.T, data.split.mean)
    for reduced, mean in ((bare, kept_mean), (bare_mean, data.split.mean)):
        full = tendency(model, 0.0, mean + x @ vectors.T)
        expected = model.inner(vectors.T, full[:, np.newaxis])
        # Round-off of sums of a thousand products of order ten.
        np.testing.assert_allclose(drift_of_x(reduced, x), expected, atol=1e-10)
    assert np.abs(bare.x_forcing - bare_mean.x_forcing).max() > 0.1


def test_bare_closures_agree_where_the_unresolved_mean_is_zero():
    data, _ = random_case()
    vectors = data.split.resolved.vectors
    mean = vectors @ data.model.inner(vectors.T, data.split.mean)
    operators = galerkin(data.model, vectors, data.split.unresolved.vectors, mean)
    data = replace(data, split=replace(data.split, mean=mean), operators=operators)
    bare, bare_mean = closure("bare")(data), closure("bare_mean")(data)
    for name in ("x_forcing", "x_from_x", "x_from_xx"):
        # Round-off of sums of a hundred products of order ten.
        np.testing.assert_allclose(
            getattr(bare, name), getattr(bare_mean, name), atol=1e-11
        )


# --- Coloured ---------------------------------------------------------------


def test_coloured_closure_conserves_energy_in_its_quadratic_terms():
    # The energy of x and y together, x.x + y.y, as in the full equation.
    data, _ = random_case()
    model = closure("coloured")(data)
    rng = np.random.default_rng(2)
    for _ in range(20):
        x, y = rng.standard_normal(NX), rng.standard_normal(NY)
        terms = [
            x[:, None, None] * model.x_from_xx * x[:, None] * x,
            2 * x[:, None, None] * model.x_from_xy * x[:, None] * y,
            x[:, None, None] * model.x_from_yy * y[:, None] * y,
            y[:, None, None] * model.y_from_xx * x[:, None] * x,
            2 * y[:, None, None] * model.y_from_xy * x[:, None] * y,
        ]
        work = sum(term.sum() for term in terms)
        size = sum(np.abs(term).sum() for term in terms)
        # Round-off of a sum of 300 terms.
        assert abs(work) < 1e-13 * size


def mean_drift(model, data):
    """Mean of the drift along the truth, y y by the covariance of the noise."""
    cx, cxy = data.covariance_x, data.covariance_xy
    dx = (
        model.x_forcing
        + np.einsum("ijk,jk->i", model.x_from_xx, cx)
        + 2 * np.einsum("ijm,jm->i", model.x_from_xy, cxy)
        + np.einsum("imn,mn->i", model.x_from_yy, model.covariance)
    )
    dy = (
        model.y_forcing
        + np.einsum("mjk,jk->m", model.y_from_xx, cx)
        + 2 * np.einsum("mjn,jn->m", model.y_from_xy, cxy)
    )
    return dx, dy


def test_calibrated_mean_drift_vanishes():
    data, _ = random_case()
    model = closure("coloured")(data)
    dx, dy = mean_drift(model, data)
    # Round-off of sums of a hundred products of order ten.
    np.testing.assert_allclose(dx, 0, atol=1e-11)
    np.testing.assert_allclose(dy, 0, atol=1e-11)


def test_uncalibrated_constant_is_that_of_the_equation():
    # It has the mean drift of the truth itself, B122 : Cy in place of that of
    # the noise: the mean of the full tendency, for nothing is left out.
    data, _ = random_case(calibrated=False)
    model = closure("coloured")(data)
    dx, dy = mean_drift(model, data)
    np.testing.assert_allclose(dx, data.split.tendency.mean(axis=(0, 1)), atol=1e-11)
    np.testing.assert_allclose(dy, 0, atol=1e-11)
    calibrated = closure("coloured")(replace(data, mean_calibration=True))
    shift = calibrated.x_forcing - model.x_forcing
    typical = np.sqrt(np.mean(data.split.tendency**2, axis=(0, 1)))
    (share,) = calibrated.facts.values()
    assert share == pytest.approx(np.max(np.abs(shift) / typical), rel=1e-12)
    assert share > 0.01
    assert any("mean calibration shifts" in note for note in calibrated.notes)
    assert not any("mean calibration" in note for note in model.notes)


def test_coloured_closure_keeps_the_equation_and_the_noise():
    data, _ = random_case()
    op, model = data.operators, closure("coloured")(data)
    pairs = {
        "x_from_x": op.A11,
        "x_from_xx": op.B111,
        "x_from_y": op.A12,
        "x_from_xy": op.B112,
        "x_from_yy": op.B122,
        "y_from_x": op.A21,
        "y_from_xx": op.B211,
        "y_from_xy": op.B212,
        # The rate alone: it holds what the equation has of y on y already.
        "rate": data.noise.process.rate,
        "covariance": data.noise.process.covariance,
    }
    for name, expected in pairs.items():
        np.testing.assert_array_equal(getattr(model, name), expected)
    assert set(data.noise.notes) <= set(model.notes)


def test_coloured_closure_returns_a_known_process():
    # dx/dt = -a x + c y1 + b y1 y2 with independent red y1 and y2 of variances C and
    # rates g. A filter of red noise of variance R and rate r has the variance
    # R / (a (a + r)) (Gardiner, Handbook of Stochastic Methods, ch. 3 and 4), and the
    # product is red as well, of variance C1 C2 and rate g1 + g2.
    a, b, c = 0.2, 0.5, 0.3
    g, variance = np.array([1.0, 2.0]), np.array([1.0, 0.5])

    def filtered(g, variance):
        linear = c**2 * variance[0] / (a * (a + g[0]))
        return linear + b**2 * variance.prod() / (a * (a + g.sum()))

    tensor = np.zeros((3, 3, 3))
    tensor[0, 1, 2] = tensor[0, 2, 1] = b / 2
    model = Quadratic(
        constant=np.zeros(3),
        matrix=np.array([[-a, c, 0], [0, -g[0], 0], [0, 0, -g[1]]]),
        tensor=tensor,
        weights=np.eye(3),
    )
    process = OrnsteinUhlenbeck(rate=np.diag(g), covariance=np.diag(variance))
    step = 0.1
    y = process.simulate(60_000, step, np.random.default_rng(61))[0]
    force = c * y[:, 0] + b * y[:, 0] * y[:, 1]
    decay = np.exp(-a * step)
    x = signal.lfilter([step / 2, decay * step / 2], [1, -decay], force)
    states = np.column_stack([x, y])[2000:]
    data, _ = data_of(model, states, np.eye(3), 1, step=step)
    made = closure("coloured")(data)
    # The equation comes back to round-off, the noise to its errors, with a mean of
    # some hundredths that the modes have in a finite record.
    mean = data.split.mean
    np.testing.assert_allclose(made.x_from_x, [[-a]], atol=1e-13)
    expected = [[c + b * mean[2], b * mean[1]]]
    np.testing.assert_allclose(made.x_from_y, expected, atol=1e-13)
    np.testing.assert_allclose(made.x_from_yy, [[[0, b / 2], [b / 2, 0]]], atol=1e-13)
    for name in ("x_from_xx", "x_from_xy", "y_from_x", "y_from_xx", "y_from_xy"):
        assert not getattr(made, name).any()
    fit = data.noise
    assert np.all(np.abs(fit.decay.value - g) < 4 * fit.decay.error)
    assert np.all(np.abs(fit.variance.value - variance) < 4 * fit.variance.error)

    h, every = step_rule(made, np.sqrt([filtered(g, variance)]), interval=1.0)
    run = simulate(
        made,
        np.zeros((32, 1)),
        step=h,
        n_steps=1500 * every,
        every=every,
        streams=[stream(62, member, "noise") for member in range(32)],
    )
    found = moments(run.series[:, 50:], 1.0, rng=np.random.default_rng(63))
    # The errors of the fit reach the variance through the formula above.
    parts = [found.variance.error[0]]
    for k in range(2):
        for estimate, is_rate in ((fit.decay, True), (fit.variance, False)):
            change = np.zeros(2)
            change[k] = estimate.error[k]
            changed = filtered(g + change * is_rate, variance + change * (not is_rate))
            parts.append(changed - filtered(g, variance))
    # Four standard errors; the steps' bias, (0.3)^2 / 12, is below one of them.
    error = np.linalg.norm(parts)
    assert abs(found.variance.value[0] - filtered(g, variance)) < 4 * error
    assert error < 0.05 * filtered(g, variance)
    assert abs(found.mean.value[0]) < 4 * found.mean.error[0]


# --- Residual ---------------------------------------------------------------

# dx = L x dt + xi dt with red noise xi; the equation knows another damping, A.
DAMPING = np.array([[-0.1, 0.05], [-0.05, -0.15]])
KNOWN = np.array([[-0.02, 0.0], [0.0, 0.03]])
NOISE_RATE, NOISE_VARIANCE = 1.0, np.array([0.2, 0.1])
RECORD_STEP = 0.2


def joint_process():
    """The process of x and xi together (Gardiner, ch. 4)."""
    eye, zero = np.eye(2), np.zeros((2, 2))
    rate = np.block([[-DAMPING, -eye], [zero, NOISE_RATE * eye]])
    diffusion = np.diag([0, 0, *(2 * NOISE_RATE * NOISE_VARIANCE)])
    covariance = linalg.solve_continuous_lyapunov(rate, diffusion)
    return OrnsteinUhlenbeck(rate=rate, covariance=covariance)


def residual_data(x, rate, step=RECORD_STEP):
    size = x.shape[1]
    model = Quadratic(
        constant=np.zeros(size),
        matrix=KNOWN,
        tensor=np.zeros((size, size, size)),
        weights=np.eye(size),
    )
    return ClosureData(
        model=model,
        split=resolved_only(x, step=step, rate=rate),
        operators=galerkin(model, np.eye(size), np.zeros((size, 0)), np.zeros(size)),
        noise=no_noise(),
        covariance_y=np.zeros((0, 0)),
        covariance_xy=np.zeros((size, 0)),
        mean_calibration=True,
    )


@pytest.fixture(scope="module")
def residual_truths():
    """Twelve independent truths of 400 decay times each."""
    truths = joint_process().simulate(
        20_000, RECORD_STEP, np.random.default_rng(71), members=12
    )
    result = []
    for truth in truths:
        x = truth[:, :2] - truth[:, :2].mean(axis=0)
        result.append(residual_data(x, x @ DAMPING.T + truth[:, 2:]))
    return result


def mean_and_error(values):
    values = np.array(values)
    return values.mean(axis=0), values.std(axis=0, ddof=1) / np.sqrt(len(values))


def limit_of_damping(lag):
    """L of the closure, from a record without end."""
    lagged = joint_process().lag_covariance(lag)[:, :2]
    rates = np.hstack([DAMPING, np.eye(2)]) @ lagged
    return rates @ np.linalg.inv(lagged[:2])


# Student's with 11 degrees of freedom is beyond five in 4e-4 of cases.
FAR = 5.0
# Bias of the damping, relative to its norm, at the lag that the closure chooses.
MISSED = 0.15


def test_residual_closure_recovers_damping_and_noise(residual_truths):
    made = [closure("residual")(data) for data in residual_truths]
    damping, error = mean_and_error([model.x_from_x for model in made])
    # What the estimator tends to in a long record: the noise has forgotten the
    # instrument but for exp(-2.3), at the lag that is chosen, which costs that share
    # of the damping over the correlation of x at the lag.
    limit, _ = mean_and_error(
        [limit_of_damping(model.facts["lag of the instrument [s]"]) for model in made]
    )
    assert np.all(np.abs(damping - limit) < FAR * error)
    # So the true damping is missed by a seventh of its norm.
    norm = np.linalg.norm(DAMPING, 2)
    assert np.linalg.norm(limit - DAMPING, 2) < MISSED * norm
    assert np.all(np.abs(damping - DAMPING) < FAR * error + MISSED * norm)
    # What is missed stays in the noise, which is that much faster and weaker.
    rate, error = mean_and_error([model.rate for model in made])
    assert np.all(np.abs(rate - NOISE_RATE * np.eye(2)) < FAR * error + MISSED)
    covariance, error = mean_and_error([model.covariance for model in made])
    off = np.abs(covariance - np.diag(NOISE_VARIANCE))
    assert np.all(off < FAR * error + MISSED * NOISE_VARIANCE[0])
    for model in made:
        np.testing.assert_array_equal(model.x_from_y, np.eye(2))
        assert not model.x_from_xy.any()
        assert not model.notes


def test_regression_at_the_same_instant_finds_no_damping(residual_truths):
    # Why the closure takes an instrument: in a stationary record the mean of
    # d(x x')/dt vanishes, so the naive damping D and what is known, A, have
    # (A + D) C + C (A + D)' = 0, whatever the true damping is. The trace of A + D,
    # minus the rate at which it loses volume, then vanishes too.
    net, volume = [], []
    for data in residual_truths:
        x, r = data.split.x[0], data.coupling[0]
        naive = np.linalg.lstsq(x, r, rcond=None)[0].T
        half = (naive + KNOWN) @ data.covariance_x
        net.append(half + half.T)
        volume.append(np.trace(naive + KNOWN))
    value, error = mean_and_error(net)
    assert np.all(np.abs(value) < FAR * error)
    value, error = mean_and_error(volume)
    assert abs(value) < FAR * error
    # The true one is far from it: -0.25.
    assert error < 0.01 < abs(np.trace(DAMPING)) / 10


def test_residual_closure_simulates_the_variance_of_its_truth(residual_truths):
    # What is missed of the damping is not missed in the variance: it stays in the
    # noise. The joint process of x and xi, solved exactly (Lyapunov).
    made = [closure("residual")(data) for data in residual_truths]
    found = []
    for model in made:
        zero = np.zeros((2, 2))
        joint = np.block([[-model.x_from_x, -np.eye(2)], [zero, model.rate]])
        half = model.rate @ model.covariance
        diffusion = linalg.block_diag(zero, half + half.T)
        found.append(np.diag(linalg.solve_continuous_lyapunov(joint, diffusion))[:2])
    ratio = np.log(found) - np.log(np.diag(joint_process().covariance)[:2])
    value, error = mean_and_error(ratio)
    # A third of what is missed above.
    assert np.all(np.abs(value) < FAR * error + MISSED / 3)


def test_residual_closure_shifts_the_mean_tendency_to_zero():
    rng = np.random.default_rng(72)
    x = OrnsteinUhlenbeck(rate=np.eye(2) / 5, covariance=np.eye(2)).simulate(
        5000, 0.2, rng
    )[0]
    x -= x.mean(axis=0)
    data = residual_data(x, rng.standard_normal(x.shape) - 0.5 * x + 3.0)
    tensor = rng.standard_normal((2, 2, 2))
    tensor += tensor.transpose(0, 2, 1)
    data = replace(data, operators=replace(data.operators, B111=tensor))
    model = closure("residual")(data)
    drift = model.x_forcing + np.einsum("ijk,jk->i", tensor, data.covariance_x)
    # Round-off of products of order one; the mean of x and xi is zero.
    np.testing.assert_allclose(drift, 0, atol=1e-13)


def test_a_residual_closure_that_grows_says_so():
    rng = np.random.default_rng(73)
    process = OrnsteinUhlenbeck(rate=np.eye(2) / 10, covariance=np.eye(2))
    x = process.simulate(20_000, 0.2, rng)[0]
    fast = OrnsteinUhlenbeck(rate=np.eye(2), covariance=0.01 * np.eye(2))
    noise = fast.simulate(20_000, 0.2, rng)[0]
    x -= x.mean(axis=0)
    model = closure("residual")(residual_data(x, 0.1 * x + noise))
    (note,) = (note for note in model.notes if "linearly unstable" in note)
    growth = np.linalg.eigvals(model.x_from_x).real.max()
    assert growth > 0
    assert f"grows at {growth:.3g} s-1" in note


def test_modes_that_cannot_be_told_apart_are_refused():
    # Two modes equal but for a thousandth: the lagged covariance has a condition
    # number of a million at any lag.
    rng = np.random.default_rng(74)
    process = OrnsteinUhlenbeck(rate=np.eye(2) / 10, covariance=np.eye(2))
    x = process.simulate(5000, 0.2, rng)[0]
    x[:, 1] = x[:, 0] + 1e-3 * x[:, 1]
    data = residual_data(x, rng.standard_normal(x.shape))
    with pytest.raises(
        DataError, match=r"residual closure.*one record earlier has cond"
    ):
        closure("residual")(data)


def test_the_lag_is_shortened_where_it_is_too_long():
    # The difference of two modes forgets itself within three noise times: it leaves
    # the lagged covariance near singular there, and sound at a shorter lag.
    rng = np.random.default_rng(75)
    process = OrnsteinUhlenbeck(rate=np.diag([0.01, 3.0]), covariance=np.eye(2))
    x = process.simulate(50_000, 0.2, rng)[0] @ np.array([[1, 1], [0.05, -0.05]])
    slow = OrnsteinUhlenbeck(rate=np.eye(2) / 3, covariance=np.eye(2))
    noise = slow.simulate(50_000, 0.2, rng)[0]
    data = residual_data(x - x.mean(axis=0), noise)
    model = closure("residual")(data)
    assert model.facts["condition of the lagged covariance"] < 1e3
    # Three integral times of the noise would be nine.
    assert model.facts["lag of the instrument [s]"] < 1


# --- Damped -----------------------------------------------------------------


def test_damped_closure_is_the_residual_one_without_its_noise(residual_truths):
    data = residual_truths[0]
    damped, residual = closure("damped")(data), closure("residual")(data)
    assert damped.ny == 0
    for name in ("x_forcing", "x_from_x", "x_from_xx"):
        np.testing.assert_array_equal(getattr(damped, name), getattr(residual, name))
    # What it is good for: a state decays as the linear equation says.
    decay = -np.linalg.eigvals(damped.x_from_x).real.max()
    assert damped.facts["slowest decay time [s]"] == pytest.approx(1 / decay)
    run = simulate(
        damped,
        np.ones((1, 2)),
        step=0.1,
        n_steps=100,
        every=100,
        streams=[stream(1, 0, "none")],
    )
    expected = linalg.expm(10 * damped.x_from_x) @ np.ones(2)
    # Order four with h L = 0.02.
    np.testing.assert_allclose(run.series[0, -1], expected, rtol=1e-6)


def test_errors_of_the_fitted_damping_are_its_scatter(residual_truths):
    fits = [
        instrumental_fit(data.split.x, data.coupling, data.split.step, "test")
        for data in residual_truths
    ]
    scatter = np.std([fit.damping.value for fit in fits], axis=0, ddof=1)
    stated = np.sqrt(np.mean([fit.damping.error**2 for fit in fits], axis=0))
    # The scatter of twelve is known to a fifth, the lag adds a little to it; four
    # entries. A factor of two is beyond three such errors.
    assert np.all(np.abs(np.log(stated / scatter)) < np.log(2))


def test_a_lag_outlasts_the_memory_of_the_noise_not_that_of_the_coupling():
    # Noise of memory 5 against damping of 0.1: what the noise drives comes back in
    # r = L x + xi with the opposite sign, and shortens the memory of r.
    eye = np.eye(2)
    rate = np.block([[0.1 * eye, -eye], [0 * eye, 0.2 * eye]])
    covariance = linalg.solve_continuous_lyapunov(rate, np.diag([0, 0, 0.4, 0.4]))
    process = OrnsteinUhlenbeck(rate=rate, covariance=covariance)
    joint = process.simulate(20_000, 0.5, np.random.default_rng(76))
    x = joint[..., :2] - joint[..., :2].mean(axis=1)
    fit = instrumental_fit(x, joint[..., 2:] - 0.1 * x, 0.5, "test")
    assert 3 * 5 * 0.7 < fit.lag < 3 * 5 * 1.4


def test_a_damping_known_poorly_says_so():
    rng = np.random.default_rng(77)
    process = OrnsteinUhlenbeck(rate=np.eye(2) / 10, covariance=np.eye(2))
    x = process.simulate(2000, 0.2, rng)[0]
    x -= x.mean(axis=0)
    model = closure("damped")(residual_data(x, rng.standard_normal(x.shape)))
    assert any("known poorly" in note for note in model.notes)


def test_more_modes_than_the_record_can_tell_apart_are_refused():
    rng = np.random.default_rng(78)
    process = OrnsteinUhlenbeck(rate=np.eye(2) / 5, covariance=np.eye(2))
    x = process.simulate(150, 0.2, rng)
    slow = OrnsteinUhlenbeck(rate=np.eye(2), covariance=np.eye(2))
    noise = slow.simulate(150, 0.2, rng)
    with pytest.raises(DataError, match="some closure: 2 modes need a record of 10"):
        instrumental_fit(x - x.mean(axis=1), noise, 0.2, "some")
