"""Models with white noise and their schemes, against closed forms."""

from itertools import product

import numpy as np
import pytest
from scipy import integrate, linalg

from eddyshed.reduce.diffusion import DiffusionModel, noise_factor, phi
from eddyshed.reduce.diffusion_schemes import ItoScheme, StratonovichScheme
from eddyshed.reduce.polynomial import Polynomial, compiled
from eddyshed.reduce.simulation import make_scheme, simulate, step_rule
from eddyshed.solver.errors import DataError
from eddyshed.solver.randomness import stream


def streams(entropy, members):
    return [stream(entropy, member, "test") for member in range(members)]


def plain_ito(model, step):
    return ItoScheme(model, step, exact_linear=False)


def random_noise(rng, nx, *, additive=False):
    size = nx * (1 + nx)
    root = rng.standard_normal((size, size)) / size
    if additive:
        root[nx:] = 0
    noise = root @ root.T
    return noise.reshape(1 + nx, nx, 1 + nx, nx)


def random_cubic(rng, nx):
    return Polynomial(
        constant=rng.standard_normal(nx),
        linear=rng.standard_normal((nx,) * 2),
        quadratic=rng.standard_normal((nx,) * 3),
        cubic=rng.standard_normal((nx,) * 4),
    )


# --- Polynomials ------------------------------------------------------------


@pytest.mark.parametrize("nx", [1, 2, 5])
@pytest.mark.parametrize("degree", [0, 1, 2, 3])
def test_polynomials_are_evaluated(nx, degree):
    rng = np.random.default_rng([31, nx, degree])
    names = ("constant", "linear", "quadratic", "cubic")[: degree + 1]
    raw = {name: rng.standard_normal((nx,) * (k + 1)) for k, name in enumerate(names)}
    x = rng.standard_normal((4, 3, nx))
    expected = sum(
        np.einsum(rule, array, *([x] * k))
        for k, (array, rule) in enumerate(
            zip(
                raw.values(),
                (
                    "i->i",
                    "ij,...j->...i",
                    "ijk,...j,...k->...i",
                    "ijkl,...j,...k,...l->...i",
                ),
                strict=False,
            )
        )
    )
    found = Polynomial(**raw)(x)
    assert found.shape == x.shape
    # Round-off of sums of a hundred products of order ten.
    np.testing.assert_allclose(found, np.broadcast_to(expected, x.shape), atol=1e-12)


def test_polynomials_add_up():
    rng = np.random.default_rng(32)
    one, other = random_cubic(rng, 3), random_cubic(rng, 3)
    x = rng.standard_normal((5, 3))
    np.testing.assert_allclose((one + other)(x), one(x) + other(x), atol=1e-12)


@pytest.mark.parametrize(
    ("changes", "complaint"),
    [
        ({"linear": np.ones((2, 3))}, r"linear coefficients of shape \(2, 3\)"),
        ({"cubic": np.ones(2)}, r"cubic coefficients of shape \(2,\)"),
        ({"quadratic": np.full((2, 2, 2), np.nan)}, "quadratic.*not all finite"),
    ],
)
def test_polynomials_that_do_not_fit_are_refused(changes, complaint):
    with pytest.raises(DataError, match=complaint):
        Polynomial(**{"constant": np.zeros(2)} | changes)


def test_a_column_does_not_depend_on_the_others():
    rng = np.random.default_rng(33)
    field = compiled(random_cubic(rng, 3))
    x = rng.standard_normal((3, 64))
    whole = field(x)
    np.testing.assert_array_equal(field(x[:, :16].copy()), whole[:, :16])


# --- The noise --------------------------------------------------------------


def test_diffusion_is_the_covariance_of_what_the_factor_makes():
    rng = np.random.default_rng(34)
    nx = 3
    noise = random_noise(rng, nx)
    noise[1:] *= 1e-4  # of another unit: no smaller for that
    noise[:, :, 1:] *= 1e-4
    model = DiffusionModel(name="m", drift=random_cubic(rng, nx), noise=noise)
    factor = noise_factor(model)
    x = 1e4 * rng.standard_normal(nx)
    made = factor[0] + np.einsum("j,jik->ik", x, factor[1:])
    expected = model.diffusion(x)
    np.testing.assert_allclose(
        made @ made.T, expected, rtol=0, atol=1e-12 * np.abs(expected).max()
    )
    by_hand = sum(
        xp * xq * noise[p, :, q]
        for (p, xp), (q, xq) in product(enumerate([1, *x]), repeat=2)
    )
    np.testing.assert_allclose(expected, by_hand, rtol=1e-12)


def test_a_factor_takes_no_more_normals_than_there_are_directions():
    model = DiffusionModel(
        name="m",
        drift=Polynomial(constant=np.zeros(3)),
        noise=np.einsum("pi,qj->piqj", np.ones((4, 3)), np.ones((4, 3))),
    )
    assert noise_factor(model).shape == (4, 3, 1)
    none = DiffusionModel(name="m", drift=Polynomial(constant=np.zeros(3)))
    assert noise_factor(none).shape == (4, 3, 0)


@pytest.mark.parametrize("stiffness", [0.0, 0.3, 40.0])
def test_noise_is_carried_by_the_linear_drift(stiffness):
    rng = np.random.default_rng(35)
    nx, step = 3, 0.7
    linear = stiffness * (rng.standard_normal((nx, nx)) - 2 * np.eye(nx))
    noise = random_noise(rng, nx)
    model = DiffusionModel(
        name="m", drift=Polynomial(constant=np.zeros(nx), linear=linear), noise=noise
    )
    factor = noise_factor(model, linear, step)
    found = np.einsum("pik,qjk->piqj", factor, factor)

    def moved(s):
        carry = linalg.expm(linear * s)
        return np.einsum("ik,pkql,jl->piqj", carry, noise, carry)

    expected, _ = integrate.quad_vec(moved, 0, step, epsabs=1e-14, epsrel=1e-12)
    np.testing.assert_allclose(
        found, expected, rtol=0, atol=1e-11 * np.abs(expected).max()
    )


def test_phi_functions_of_matrices():
    # phi_k(A) = int_0^1 exp((1 - s) A) s^(k - 1) / (k - 1)! ds (Hochbruck &
    # Ostermann 2010, Acta Numerica 19:209).
    rng = np.random.default_rng(36)
    matrix = rng.standard_normal((4, 4))
    matrix[0] = 0  # singular
    np.testing.assert_allclose(phi(matrix, 0), linalg.expm(matrix), rtol=1e-13)
    for k in (1, 2):
        expected, _ = integrate.quad_vec(
            lambda s, k=k: linalg.expm((1 - s) * matrix) * s ** (k - 1), 0, 1
        )
        np.testing.assert_allclose(phi(matrix, k), expected, rtol=0, atol=1e-12)


@pytest.mark.parametrize(
    ("noise", "complaint"),
    [
        (np.zeros((3, 2, 3, 3)), r"noise of shape \(3, 2, 3, 3\), must be"),
        (np.full((3, 2, 3, 2), np.inf), "not finite"),
        (np.arange(36.0).reshape(3, 2, 3, 2), "not symmetric"),
        (-np.eye(6).reshape(3, 2, 3, 2), "negative variance"),
    ],
)
def test_noise_that_is_none_is_refused(noise, complaint):
    with pytest.raises(DataError, match=f'"m": noise.*{complaint[6:]}'):
        DiffusionModel(name="m", drift=Polynomial(constant=np.zeros(2)), noise=noise)


def test_labels_must_fit():
    drift = Polynomial(constant=np.zeros(2))
    assert DiffusionModel(name="m", drift=drift).labels == ("x1", "x2")
    with pytest.raises(DataError, match="3 labels for 2"):
        DiffusionModel(name="m", drift=drift, labels=("a", "b", "c"))


# --- Schemes: geometric Brownian motion -------------------------------------

GROWTH, NOISE = -0.5, 0.6  # of dX = GROWTH X dt + NOISE X dW, in the sense of Ito


def geometric():
    noise = np.zeros((2, 1, 2, 1))
    noise[1, 0, 1, 0] = NOISE**2
    drift = Polynomial(constant=[0.0], linear=[[GROWTH]])
    return DiffusionModel(name="geometric", drift=drift, noise=noise)


def one_step(scheme, x, normals):
    """States after one step with given normals, of shape (n_normals, member)."""
    state = scheme.begin(np.asarray(x, dtype=float), None, np.empty((0, len(x[0]))))
    scheme.advance(state, scheme.colour(normals[:, np.newaxis])[:, 0], 0.0)
    return state


def geometric_moments(scheme, step):
    """Exact mean, square, and product with the true solution, after one step.

    Gauss's rule for a normal takes the place of sampling. The sign of the
    factor of the noise is free, so it is read off the scheme.
    """
    nodes, weights = np.polynomial.hermite_e.hermegauss(40)
    weights = weights / weights.sum()
    made = one_step(scheme, np.ones((1, 40)), nodes[np.newaxis])[0]
    nodes = nodes * np.sign(made[-1] - made[0])
    true = np.exp((GROWTH - NOISE**2 / 2) * step + NOISE * np.sqrt(step) * nodes)
    return weights @ made, weights @ made**2, weights @ (made * true)


def strong_error(scheme, n):
    """Root mean square of the difference from the solution after n steps."""
    _, square, cross = geometric_moments(scheme(geometric(), 1 / n), 1 / n)
    return np.sqrt(square**n - 2 * cross**n + np.exp(2 * GROWTH + NOISE**2))


# Moments of Heun's method for the Stratonovich equation after n steps, and its
# strong error, worked out for these values (Kloeden & Platen 1992, ch. 9 to 11, for
# the methods; the numbers follow from the moments of a normal).
HEUN = {
    4: (0.625872915269, 0.539849268928, 0.034298569),
    8: (0.615364352808, 0.533096322673, 0.015152287),
    16: (0.610748519740, 0.530100626696, 0.007086004),
    32: (0.608591150700, 0.528675817615, 0.003421438),
}


@pytest.mark.parametrize("n", HEUN)
def test_stratonovich_scheme_has_the_moments_of_heuns_method(n):
    mean, square, _ = geometric_moments(StratonovichScheme(geometric(), 1 / n), 1 / n)
    # The digits that are given.
    assert mean**n == pytest.approx(HEUN[n][0], abs=1e-11)
    assert square**n == pytest.approx(HEUN[n][1], abs=1e-11)
    assert strong_error(StratonovichScheme, n) == pytest.approx(HEUN[n][2], abs=1e-8)


@pytest.mark.parametrize("n", [4, 16])
def test_ito_scheme_has_the_moments_of_its_formula(n):
    h = 1 / n
    mean, square, _ = geometric_moments(plain_ito(geometric(), h), h)
    # X' = X [1 + (1 + GROWTH h / 2)(GROWTH h + NOISE dW)].
    drift = 1 + GROWTH * h + (GROWTH * h) ** 2 / 2
    assert mean == pytest.approx(drift, abs=1e-14)
    noise = (1 + GROWTH * h / 2) ** 2 * NOISE**2 * h
    assert square == pytest.approx(drift**2 + noise, abs=1e-14)
    # With the linear part solved exactly, so is the mean.
    mean, square, _ = geometric_moments(ItoScheme(geometric(), h), h)
    assert mean == pytest.approx(np.exp(GROWTH * h), abs=1e-14)
    noise = NOISE**2 * (np.exp(2 * GROWTH * h) - 1) / (2 * GROWTH)
    assert square == pytest.approx(np.exp(2 * GROWTH * h) + noise, abs=1e-14)


def order(steps, errors):
    return np.polyfit(np.log(steps), np.log(np.abs(errors)), 1)[0]


@pytest.mark.parametrize(
    ("scheme", "strong", "weak"),
    [(plain_ito, 0.5, 1), (ItoScheme, 0.5, 1), (StratonovichScheme, 1, 1)],
)
def test_orders_with_multiplicative_noise(scheme, strong, weak):
    counts = np.array([32, 64, 128, 256])
    errors, moments = [], []
    for n in counts:
        errors.append(strong_error(scheme, n))
        _, square, _ = geometric_moments(scheme(geometric(), 1 / n), 1 / n)
        moments.append(square**n - np.exp(2 * GROWTH + NOISE**2))
    # The next order is a few hundredths of the slope at these steps.
    assert order(1 / counts, errors) == pytest.approx(strong, abs=0.05)
    assert order(1 / counts, moments) == pytest.approx(weak, abs=0.05)


# --- Schemes: noise that does not commute -----------------------------------


def linear_generator(model):
    """Matrix of d/dt of the moments 1, x, x x^T, which close for a linear model."""
    nx, drift, noise = model.nx, model.drift, model.noise
    eye = np.eye(nx)
    blocks = np.zeros((1 + nx + nx**2, 1 + nx + nx**2))
    one, two = slice(1, 1 + nx), slice(1 + nx, None)
    blocks[one, 0], blocks[one, one] = drift.constant, drift.linear
    both = np.einsum("i,jk->ijk", drift.constant, eye)
    both = both + both.transpose(1, 0, 2)
    mixed = noise[0][:, 1:] + noise[1:, :, 0].transpose(1, 0, 2)
    blocks[two, 0] = noise[0, :, 0].ravel()
    blocks[two, one] = (both + mixed.transpose(0, 2, 1)).reshape(nx**2, nx)
    blocks[two, two] = np.kron(drift.linear, eye) + np.kron(eye, drift.linear)
    squares = noise[1:, :, 1:].transpose(1, 3, 0, 2)
    blocks[two, two] += squares.reshape(nx**2, nx**2)
    return blocks


def moments_of(x):
    return np.concatenate([[1], x, np.outer(x, x).ravel()])


def moments_after(scheme, model, step, x):
    """Exact moments 1, x, x x^T after one step from x, by Gauss's rule."""
    made = scheme(model, step)
    # Three nodes for each normal: exact to degree five, and squares are of four.
    nodes, weights = np.polynomial.hermite_e.hermegauss(3)
    grid = np.array(list(product(nodes, repeat=made.n_normals))).T
    mass = np.array([np.prod(w) for w in product(weights, repeat=made.n_normals)])
    mass /= mass.sum()
    state = one_step(made, np.repeat(x[:, np.newaxis], grid.shape[1], 1), grid)
    return np.array([moments_of(column) for column in state.T]).T @ mass


def linear_model():
    """Two coordinates, two normals whose action does not commute."""
    rng = np.random.default_rng(37)
    factor = rng.standard_normal((3, 2, 2)) / 2
    return DiffusionModel(
        name="linear",
        drift=Polynomial(
            constant=rng.standard_normal(2), linear=rng.standard_normal((2, 2)) / 2
        ),
        noise=np.einsum("pik,qjk->piqj", factor, factor),
    )


@pytest.mark.parametrize("scheme", [plain_ito, ItoScheme, StratonovichScheme])
def test_weak_order_one_with_noise_that_does_not_commute(scheme):
    # The local error, in the moments that are known exactly for a linear model
    # (Gardiner, Handbook of Stochastic Methods, sec. 4.4.7), is of one order more.
    model, x = linear_model(), np.array([0.4, -0.7])
    assert StratonovichScheme(model, 1.0).n_normals == 2
    generator = linear_generator(model)
    steps = 0.5 ** np.arange(5, 10)
    errors = [
        np.linalg.norm(
            moments_after(scheme, model, h, x)
            - linalg.expm(generator * h) @ moments_of(x)
        )
        for h in steps
    ]
    assert order(steps, errors) == pytest.approx(2, abs=0.1)


def test_stratonovich_drift_is_the_ito_drift_without_its_part():
    # By hand: (1/2) sum_jk L_jk dL_ik/dx_j, the noise factor differentiated.
    rng = np.random.default_rng(38)
    nx = 3
    model = DiffusionModel(
        name="m", drift=random_cubic(rng, nx), noise=random_noise(rng, nx)
    )
    factor, x = noise_factor(model), rng.standard_normal(nx)
    at_x = factor[0] + np.einsum("j,jik->ik", x, factor[1:])
    expected = np.einsum("jk,jik->i", at_x, factor[1:]) / 2
    found = model.drift(x) - model.stratonovich_drift(x)
    np.testing.assert_allclose(found, expected, rtol=1e-10)


# --- Schemes: additive noise ------------------------------------------------


def damped(rate=1.0, noise=1.0):
    drift = Polynomial(constant=[0.0], linear=[[-rate]])
    array = np.zeros((2, 1, 2, 1))
    array[0, 0, 0, 0] = noise
    return DiffusionModel(name="damped", drift=drift, noise=array)


@pytest.mark.parametrize(
    ("scheme", "variances"),
    [
        # Heun's method, from its recursion; the exact process at any step.
        (plain_ito, (0.498687664042, 0.494505494505, 0.461538461538)),
        (StratonovichScheme, (0.498687664042, 0.494505494505, 0.461538461538)),
        (ItoScheme, (0.5, 0.5, 0.5)),
    ],
)
def test_stationary_variance_of_the_schemes(scheme, variances):
    # dx = -x dt + dW has the variance 1/2 (Kloeden & Platen 1992, ch. 4).
    for step, expected in zip((0.1, 0.2, 0.5), variances, strict=True):
        _, mean, square = moments_after(scheme, damped(), step, np.zeros(1))
        assert mean == pytest.approx(0, abs=1e-15)
        _, mean, _ = moments_after(scheme, damped(), step, np.ones(1))
        assert square / (1 - mean**2) == pytest.approx(expected, abs=1e-11)


def logistic(noise):
    """``dx = (x - x^3) dt`` and additive noise: two wells."""
    array = np.zeros((2, 1, 2, 1))
    array[0, 0, 0, 0] = noise
    drift = Polynomial(constant=[0.0], linear=[[1.0]], cubic=-np.ones((1, 1, 1, 1)))
    return DiffusionModel(name="wells", drift=drift, noise=array)


@pytest.mark.parametrize("scheme", [plain_ito, ItoScheme, StratonovichScheme])
def test_weak_order_two_with_additive_noise(scheme):
    # Local error of E x and E x^2 against the series of the semigroup,
    # exp(L h) f = f + h L f + h^2 L L f / 2 + ..., with L f = b f' + a f'' / 2.
    a, x = 0.3, 0.8
    generator = np.polynomial.Polynomial([0, 1, 0, -1])

    def applied(f):
        return generator * f.deriv() + a / 2 * f.deriv(2)

    steps = 0.5 ** np.arange(5, 9)
    errors = []
    for h in steps:
        found = moments_after(scheme, logistic(a), h, np.array([x]))[1]
        term, exact = np.polynomial.Polynomial([0, 1]), x
        for k in range(1, 8):
            term = applied(term) * (h / k)
            exact += term(x)
        errors.append(found - exact)
    assert order(steps, errors) == pytest.approx(3, abs=0.15)


def test_deterministic_equations_are_solved_to_order_two():
    exact = integrate.solve_ivp(
        lambda _, x: x - x**3, (0, 2), [0.1], rtol=1e-12, atol=1e-13
    ).y[0, -1]
    for scheme in (plain_ito, ItoScheme, StratonovichScheme):
        counts, errors = np.array([32, 64, 128, 256]), []
        for n in counts:
            found = simulate(
                logistic(0.0),
                np.array([[0.1]]),
                step=2 / n,
                n_steps=n,
                every=n,
                streams=streams(0, 1),
                scheme=scheme,
            )
            errors.append(found.series[0, -1, 0] - exact)
        assert order(2 / counts, errors) == pytest.approx(2, abs=0.1)


# --- In the loop ------------------------------------------------------------


def test_both_schemes_sample_the_same_distribution():
    # The density of two wells is exp((x^2 - x^4 / 2) / a) (Risken, The Fokker-Planck
    # Equation, sec. 5.2).
    a = 0.5
    weight = lambda x, k: x**k * np.exp((x**2 - x**4 / 2) / a)  # noqa: E731
    total, second = (integrate.quad(weight, -4, 4, args=(k,))[0] for k in (0, 2))
    model = logistic(a)
    step, every = step_rule(model, np.array([1.0]), interval=2.0)
    for scheme in (make_scheme, StratonovichScheme):
        run = simulate(
            model,
            np.zeros((256, 1)),
            step=step,
            n_steps=60 * every,
            every=every,
            streams=streams(41, 256),
            scheme=scheme,
        )
        each = np.mean(run.series[:, 10:, 0] ** 2, axis=1)
        error = each.std(ddof=1) / 16
        # Four standard errors; the bias of order two is a tenth of one.
        assert abs(each.mean() - second / total) < 4 * error
        assert error < 0.02


@pytest.mark.parametrize("scheme", [make_scheme, StratonovichScheme])
@pytest.mark.parametrize("additive", [True, False])
def test_a_member_does_not_depend_on_its_company(scheme, additive):
    rng = np.random.default_rng(42)
    nx = 3
    drift = random_cubic(rng, nx)
    stable = Polynomial(
        constant=drift.constant,
        linear=drift.linear,
        quadratic=drift.quadratic,
        cubic=-np.einsum("ij,kl->ijkl", np.eye(nx), np.eye(nx)),
    )
    noise = random_noise(rng, nx, additive=additive)
    model = DiffusionModel(name="m", drift=stable, noise=noise)
    assert model.is_additive == additive
    start = rng.standard_normal((37, nx))

    def run(members):
        own = [stream(43, member, "test") for member in members]
        return simulate(
            model,
            start[members],
            step=0.01,
            n_steps=40,
            every=10,
            streams=own,
            scheme=scheme,
        ).series

    whole = run(np.arange(37))
    assert np.all(np.isfinite(whole))
    for members in ([0], [36], [5, 20, 11]):
        np.testing.assert_array_equal(run(np.array(members)), whole[members])


def test_a_member_that_blows_up_is_lost_and_the_rest_go_on():
    drift = Polynomial(constant=[0.0], linear=[[-1.0]], cubic=np.ones((1, 1, 1, 1)))
    run = simulate(
        DiffusionModel(name="cubic", drift=drift),
        np.array([[0.5], [1.5], [0.9]]),
        step=0.01,
        n_steps=200,
        every=100,
        streams=streams(44, 3),
        bound=10.0,
    )
    ((member, when),) = run.lost
    assert member == 1
    # From x0 > 1, x' = x^3 - x blows up at -ln(1 - 1 / x0^2) / 2.
    assert when == pytest.approx(-np.log(1 - 1 / 1.5**2) / 2, abs=0.02)
    assert np.isnan(run.series[1, 1:]).all()
    assert np.isfinite(run.series[[0, 2]]).all()


def test_step_rule_by_hand():
    scale = np.array([2.0, 1.0])
    # A linear model with additive noise is exact: one step fills the interval.
    linear = Polynomial(constant=np.zeros(2), linear=np.diag([-30.0, -1.0]))
    assert step_rule(DiffusionModel(name="m", drift=linear), scale, interval=5.0) == (
        5.0,
        1,
    )
    # Multiplicative noise of rate 4: a hundredth of its time.
    noise = np.zeros((3, 2, 3, 2))
    noise[1, 0, 1, 0] = 4.0
    model = DiffusionModel(
        name="m", drift=Polynomial(constant=np.zeros(2)), noise=noise
    )
    assert step_rule(model, scale, interval=1.0) == (pytest.approx(1 / 400), 400)
    # By which x2 changes x1, relative to its own size: (1 / 2)^2 of that.
    noise = np.zeros((3, 2, 3, 2))
    noise[2, 0, 2, 0] = 4.0
    model = DiffusionModel(
        name="m", drift=Polynomial(constant=np.zeros(2)), noise=noise
    )
    assert step_rule(model, scale, interval=1.0) == (pytest.approx(1 / 100), 100)
    # The cubic term's derivative, 3 x1^2 = 12: a tenth of its time.
    cubic = np.zeros((2, 2, 2, 2))
    cubic[0, 0, 0, 0] = -1.0
    model = DiffusionModel(
        name="m", drift=Polynomial(constant=np.zeros(2), cubic=cubic)
    )
    assert step_rule(model, scale, interval=1.0) == (pytest.approx(1 / 120), 120)


def test_a_step_costs_no_more_for_more_unresolved_modes():
    # What a step works on is set by the resolved modes alone.
    model = linear_model()
    scheme = make_scheme(model, 0.1)
    assert scheme.n_normals <= model.nx * (1 + model.nx)
    assert scheme.n_work == 10  # products of up to three of two coordinates
