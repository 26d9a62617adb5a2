"""White-noise limits that are published, term by term and against two-scale runs."""

import numpy as np
import pytest
from scipy import integrate, linalg
from slow_fast import faster, random_slow_fast

from eddyshed.reduce.diffusion import DiffusionModel
from eddyshed.reduce.diffusion_schemes import StratonovichScheme
from eddyshed.reduce.homogenised import white_limit
from eddyshed.reduce.noise.fit import fit_ornstein_uhlenbeck
from eddyshed.reduce.polynomial import Polynomial
from eddyshed.reduce.reduced import ReducedModel
from eddyshed.reduce.simulation import make_scheme, simulate, step_rule
from eddyshed.solver.randomness import stream


def streams(entropy, members):
    return [stream(entropy, member, "test") for member in range(members)]


def mean_and_error(values):
    """Mean over members and its standard error."""
    return values.mean(axis=0), values.std(axis=0, ddof=1) / np.sqrt(len(values))


# --- Additive triad ---------------------------------------------------------


def additive_triad(b, g, s):
    """x' = b1 y1 y2, and each y driven by x times the other."""
    tensor = np.zeros((2, 1, 2))
    tensor[0, 0, 1], tensor[1, 0, 0] = b[1] / 2, b[2] / 2
    return ReducedModel(
        name="triad",
        x_forcing=np.zeros(1),
        x_from_x=np.zeros((1, 1)),
        x_from_xx=np.zeros((1, 1, 1)),
        x_from_yy=[[[0, b[0] / 2], [b[0] / 2, 0]]],
        y_from_xy=tensor,
        rate=np.diag(g),
        covariance=np.diag(np.square(s) / (2 * np.array(g))),
    )


@pytest.mark.parametrize(
    ("b", "g", "s", "damping", "noise", "variance"),
    [
        ((0.9, -0.5, -0.4), (1, 1), (1.2, 0.8), 0.2016, 0.186624, 0.462857142857),
        ((0.9, -0.5, -0.4), (1, 3), (1, 1), 0.06375, 0.03375, 0.264705882353),
        ((1, -0.6, -0.4), (1, 2), (1, np.sqrt(2)), 1 / 6, 1 / 6, 0.5),
    ],
)
def test_additive_triad(b, g, s, damping, noise, variance):
    # A. J. Majda, I. Timofeyev & E. Vanden-Eijnden (2001), Comm. Pure Appl. Math.
    # 54:891; Physica D 170 (2002) 206: dx = -G x dt + S dW.
    found = white_limit(additive_triad(b, g, s)).equation()
    assert found.drift.linear[0, 0] == pytest.approx(-damping, rel=1e-12)
    assert found.noise[0, 0, 0, 0] == pytest.approx(noise, rel=1e-12)
    assert found.is_additive
    assert noise / (2 * damping) == pytest.approx(variance, abs=1e-12)


def test_additive_triad_is_sampled_exactly():
    # From x = 2, after t = 8, of the second case above: mean 2 exp(-G t), variance
    # (S^2 / 2 G)(1 - exp(-2 G t)), whatever the step.
    model = white_limit(additive_triad((0.9, -0.5, -0.4), (1, 3), (1, 1))).equation()
    assert step_rule(model, np.ones(1), interval=8.0) == (8.0, 1)
    run = simulate(
        model, np.full((4096, 1), 2.0), step=8.0, n_steps=1, every=1,
        streams=streams(81, 4096),
    )  # fmt: skip
    mean, error = mean_and_error(run.series[:, 1, 0])
    assert abs(mean - 1.20099) < 4 * error
    square, error = mean_and_error((run.series[:, 1, 0] - 1.20099) ** 2)
    assert abs(square - 0.16925) < 4 * error


# --- Multiplicative triad ---------------------------------------------------


def multiplicative_triad(b, g, s):
    """x1' = b1 x2 y, x2' = b2 x1 y, and y driven by b3 x1 x2."""
    mixed = np.zeros((2, 2, 1))
    mixed[0, 1], mixed[1, 0] = b[0] / 2, b[1] / 2
    return ReducedModel(
        name="triad",
        x_forcing=np.zeros(2),
        x_from_x=np.zeros((2, 2)),
        x_from_xx=np.zeros((2, 2, 2)),
        x_from_xy=mixed,
        y_from_xx=[[[0, b[2] / 2], [b[2] / 2, 0]]],
        rate=[[g]],
        covariance=[[s**2 / (2 * g)]],
    )


def test_multiplicative_triad():
    # Stratonovich: dx1 = (b1 b3 / g) x1 x2^2 dt + (s / g) b1 x2 o dW, and dx2 likewise
    # (Majda, Timofeyev & Vanden-Eijnden 2001, loc. cit.). Ito adds
    # (s^2 / 2 g^2) b1 b2 x to both.
    b, g, s = np.array([1.0, -0.4, -0.6]), 1.3, 0.8
    found = white_limit(multiplicative_triad(b, g, s)).equation()
    rng = np.random.default_rng(82)
    for x in rng.standard_normal((5, 2)):
        turned = found.stratonovich_drift(x)
        expected = (b[2] / g) * np.array(
            [b[0] * x[0] * x[1] ** 2, b[1] * x[0] ** 2 * x[1]]
        )
        np.testing.assert_allclose(turned, expected, rtol=1e-12, atol=1e-14)
        extra = s**2 / (2 * g**2) * b[0] * b[1] * x
        np.testing.assert_allclose(found.drift(x) - turned, extra, rtol=1e-12)
        factor = s / g * np.array([b[0] * x[1], b[1] * x[0]])
        np.testing.assert_allclose(
            found.diffusion(x), np.outer(factor, factor), rtol=1e-12, atol=1e-14
        )
        # b2 x1^2 - b1 x2^2 is conserved: no noise along its gradient, and no drift.
        weights = np.array([b[1], -b[0]])
        gradient = 2 * weights * x
        assert np.abs(gradient @ found.diffusion(x) @ gradient) < 1e-14
        drift = gradient @ found.drift(x) + weights @ np.diag(found.diffusion(x))
        assert abs(drift) < 1e-13


ROTATION = multiplicative_triad((1, -1, 0), 1, 1)  # y turns (x1, x2), unaffected


@pytest.mark.parametrize("scheme", [make_scheme, StratonovichScheme])
def test_random_rotation_decays_in_the_mean(scheme):
    # From (1, 0): <x1> = exp(-t / 2), <x1^2> = (1 + exp(-2 t)) / 2. A reading in the
    # sense of Ito without its drift would leave the mean at 1.
    model = white_limit(ROTATION).equation()
    step, every = step_rule(model, np.ones(2), interval=1.0)
    run = simulate(
        model, np.tile([1.0, 0.0], (8192, 1)), step=step, n_steps=every, every=every,
        streams=streams(83, 8192), scheme=scheme,
    )  # fmt: skip
    x = run.series[:, -1, 0]
    for values, exact in ((x, 0.606530659713), (x**2, 0.567667641618)):
        mean, error = mean_and_error(values)
        # Four standard errors; the steps' bias is below one.
        assert abs(mean - exact) < 4 * error


def coloured_run(model, start, *, eps, time, entropy, members, share=0.05):
    """Members of a two-scale system after a time, with steps of share eps^2."""
    n = int(np.ceil(time / (share * eps**2)))
    run = simulate(
        faster(model, eps),
        np.tile(start, (members, 1)),
        step=time / n,
        n_steps=n,
        every=n,
        streams=streams(entropy, members),
    )
    return run.series[:, -1]


@pytest.mark.parametrize(
    ("eps", "mean", "square"),
    [(0.5, 0.685717560886, 0.610548051206), (0.25, 0.625784007404, 0.576677482344)],
)
def test_random_rotation_by_coloured_noise_is_known_at_every_eps(eps, mean, square):
    # As above with t replaced by t - eps^2 (1 - exp(-t / eps^2)), y being stationary:
    # the angle is a Gaussian process (Gardiner, Handbook of Stochastic Methods, 6.6).
    x = coloured_run(ROTATION, [1.0, 0.0], eps=eps, time=1.0, entropy=84, members=4096)
    for values, exact in ((x[:, 0], mean), (x[:, 0] ** 2, square)):
        found, error = mean_and_error(values)
        # Four standard errors; the splitting's bias is below a tenth of one.
        assert abs(found - exact) < 4 * error


# --- Wong and Zakai ---------------------------------------------------------


def scalar(a, rate, s):
    """x' = a x + x y with red noise y."""
    return ReducedModel(
        name="scalar",
        x_forcing=np.zeros(1),
        x_from_x=[[a]],
        x_from_xx=np.zeros((1, 1, 1)),
        x_from_xy=[[[0.5]]],
        rate=[[rate]],
        covariance=[[s**2 / (2 * rate)]],
    )


@pytest.mark.parametrize(
    ("a", "rate", "s", "t", "mean", "square"),
    [
        (-0.5, 1, 1, 1, 1.0, np.e),
        (-1.5, 2, 3, 0.8, 0.740818220682, 3.320116922737),
    ],
)
def test_smooth_noise_tends_to_stratonovich(a, rate, s, t, mean, square):
    # dx = a x dt + (s / rate) x o dW (E. Wong & M. Zakai 1965, Ann. Math. Stat.
    # 36:1560): E x^p = exp(p a t + p^2 v / 2), v = (s / rate)^2 t.
    found = white_limit(scalar(a, rate, s)).equation()
    assert found.stratonovich_drift.linear[0, 0] == pytest.approx(a, rel=1e-13)
    ito, noise = found.drift.linear[0, 0], found.noise[1, 0, 1, 0]
    assert np.exp(ito * t) == pytest.approx(mean, rel=1e-11)
    assert np.exp((2 * ito + noise) * t) == pytest.approx(square, rel=1e-11)


@pytest.mark.parametrize(
    ("case", "t", "eps", "mean"),
    [
        ((-0.5, 1, 1), 1.0, 0.5, 0.884519654024),
        ((-0.5, 1, 1), 1.0, 0.2, 0.980198673307),
        ((-1.5, 2, 3), 0.8, 0.3, 0.704247797947),
    ],
)
def test_smooth_noise_is_known_at_every_eps(case, t, eps, mean):
    # As above with v = (s / rate)^2 [t - (eps^2 / rate)(1 - exp(-rate t / eps^2))].
    x = coloured_run(scalar(*case), [1.0], eps=eps, time=t, entropy=85, members=4096)
    found, error = mean_and_error(x[:, 0])
    assert abs(found - mean) < 4 * error


# --- Levy area --------------------------------------------------------------


@pytest.mark.parametrize("alpha", [0.5, 1.0, 2.0, -1.0])
def test_rotating_noise_leaves_a_drift(alpha):
    # Pavliotis & Stuart, Multiscale Methods, ch. 11: x1' = y1, x2' = y2,
    # x3' = x1 y2 - x2 y1 with dy = -[[1, a], [-a, 1]] y dt + dW. The drift of x3 is
    # a / (1 + a^2), which the reading as Stratonovich alone would miss.
    mixed = np.zeros((3, 3, 2))
    mixed[2, 0, 1], mixed[2, 1, 0] = 0.5, -0.5
    model = ReducedModel(
        name="area",
        x_forcing=np.zeros(3),
        x_from_x=np.zeros((3, 3)),
        x_from_xx=np.zeros((3, 3, 3)),
        x_from_y=np.eye(3)[:, :2],
        x_from_xy=mixed,
        rate=[[1, alpha], [-alpha, 1]],
        covariance=np.eye(2) / 2,
    )
    limit = white_limit(model)
    expected = [0, 0, alpha / (1 + alpha**2)]
    found = limit.drifts["levy_area_drift"]
    np.testing.assert_allclose(found.constant, expected, rtol=0, atol=1e-15)
    np.testing.assert_allclose(limit.equation().drift.constant, expected, atol=1e-15)
    stratonovich = limit.equation().stratonovich_drift.constant
    np.testing.assert_allclose(stratonovich, expected, atol=1e-15)
    assert not np.any(limit.drifts["stratonovich_drift"].constant)
    growth = limit.equation().diffusion(np.zeros(3))[0, 0]
    assert growth == pytest.approx(1 / (1 + alpha**2), rel=1e-14)


def rotating():
    """dx1 = -x1 + y1, dx2 = -x2 / 2 + x1 y2 with noise that turns."""
    mixed = np.zeros((2, 2, 2))
    mixed[1, 0, 1] = 0.5
    return ReducedModel(
        name="rotating",
        x_forcing=np.zeros(2),
        x_from_x=np.diag([-1.0, -0.5]),
        x_from_xx=np.zeros((2, 2, 2)),
        x_from_y=[[1, 0], [0, 0]],
        x_from_xy=mixed,
        rate=[[1, 2], [-2, 1]],
        covariance=np.eye(2),
    )


@pytest.mark.parametrize("scheme", [make_scheme, StratonovichScheme])
def test_rotating_noise_holds_up_a_mean(scheme):
    # The stationary mean of x2 is e2.(eps^2 + Gamma)^-1 C e1 / 0.5 at every eps, so
    # 0.8 in the limit, and zero without the Levy area.
    model = rotating()
    equation = white_limit(model).equation()
    mean = -np.linalg.solve(equation.drift.linear, equation.drift.constant)
    np.testing.assert_allclose(mean, [0, 0.8], atol=1e-14)
    assert np.linalg.solve(model.rate, model.covariance)[1, 0] / 0.5 == pytest.approx(
        0.8
    )
    without = white_limit(model).equation(leave_out=["levy_area_drift"])
    np.testing.assert_allclose(without.drift.constant, 0, atol=1e-15)
    scale = np.array([0.5, 0.8])
    step, every = step_rule(equation, scale, interval=2.0)
    run = simulate(
        equation, np.tile([0.0, 0.8], (512, 1)), step=step, n_steps=20 * every,
        every=every, streams=streams(86, 512), scheme=scheme,
    )  # fmt: skip
    found, error = mean_and_error(run.series[:, 5:, 1].mean(axis=1))
    assert abs(found - 0.8) < 4 * error
    assert error < 0.02


# --- Random sweeping --------------------------------------------------------


def test_a_wave_in_a_random_current():
    # R. Kubo (1963), J. Math. Phys. 4:174: a wave of number k in a uniform current of
    # rms U and memory tau keeps exp(-k^2 U^2 tau^2 [t / tau - 1 + exp(-t / tau)]) of
    # its mean, in the limit exp(-k^2 U^2 tau t); without the noise-induced drift, all.
    u, tau, k, t = 1.0, 0.1, 3.0, 1.0
    mixed = np.zeros((2, 2, 1))
    mixed[0, 1], mixed[1, 0] = k / 2, -k / 2
    model = ReducedModel(
        name="wave",
        x_forcing=np.zeros(2),
        x_from_x=np.zeros((2, 2)),
        x_from_xx=np.zeros((2, 2, 2)),
        x_from_xy=mixed,
        rate=[[1 / tau]],
        covariance=[[u**2]],
    )
    limit = white_limit(model)
    kept = linalg.expm(limit.equation().drift.linear * t)
    np.testing.assert_allclose(kept, 0.406569659741 * np.eye(2), atol=1e-12)
    without = limit.equation(leave_out=["stratonovich_drift"])
    np.testing.assert_allclose(without.drift.linear, 0, atol=1e-15)
    x = coloured_run(
        model, [1.0, 0.0], eps=1.0, time=t, entropy=87, members=4096, share=0.01
    )
    found, error = mean_and_error(x[:, 0])
    assert abs(found - 0.444856248539) < 4 * error


# --- Out of equilibrium -----------------------------------------------------


@pytest.mark.slow
def test_two_scale_runs_approach_the_limit():
    # A random system with forcing and damping, three slow and six fast coordinates:
    # means and squares after one time unit. With quadratic forms of y, whose third
    # moments do not vanish, the first correction is of order eps.
    model = random_slow_fast(np.random.default_rng(88), 3, 6)
    start, members = np.array([0.5, -0.5, 0.3]), 4096

    def features(x):
        return np.concatenate([x, x**2], axis=1)

    equation = white_limit(model).equation()
    step, every = step_rule(equation, np.ones(3), interval=1.0)
    run = simulate(
        equation,
        np.tile(start, (members, 1)),
        step=step,
        n_steps=every,
        every=every,
        streams=streams(89, members),
    )
    limit, limit_error = mean_and_error(features(run.series[:, -1]))
    differences = {}
    for eps in (0.5, 0.25):
        x = coloured_run(
            model, start, eps=eps, time=1.0, entropy=90, members=members, share=0.06
        )
        mean, error = mean_and_error(features(x))
        error = np.hypot(error, limit_error)
        differences[eps] = mean - limit, error
    coarse, error = differences[0.5]
    # Far from the limit at first: there is something to fall.
    assert np.max(np.abs(coarse) / error) > 10
    fine, error = differences[0.25]
    # At least by half, but for the noise of the three runs.
    assert np.all(np.abs(fine) < 0.5 * np.abs(coarse) + 4 * error)


# --- Deterministic chaos as noise -------------------------------------------


def lorenz_series(members, time, step, every):
    """The second coordinate of the Lorenz attractor, shape (member, time)."""
    rng = np.random.default_rng(91)
    z = rng.standard_normal((3, members)) + np.array([[0.0], [0.0], [25.0]])

    def tendency(z):
        x, y, w = z
        return np.array([10 * (y - x), x * (28 - w) - y, x * y - 8 / 3 * w])

    n = int(time / step)
    spin_up = int(20 / step)
    series = np.empty((members, n // every))
    for k in range(-spin_up, n):
        if k >= 0 and k % every == 0 and k // every < series.shape[1]:
            series[:, k // every] = z[1]
        one = tendency(z)
        two = tendency(z + step / 2 * one)
        three = tendency(z + step / 2 * two)
        z = z + step / 6 * (one + 2 * two + 2 * three + tendency(z + step * three))
    return series


@pytest.mark.slow
def test_chaos_stands_in_for_noise():
    # x' = x - x^3 + (4 / (90 eps)) y2 with (y1, y2, y3) of Lorenz (1963) at time
    # t / eps^2 tends to dx = (x - x^3) dt + s dW. Published: s^2 = 0.113 +- 0.003 (D.
    # Givon, R. Kupferman & A. Stuart 2004, Nonlinearity 17:R55), 0.126 (L. Mitchell &
    # G. Gottwald 2012, J. Atmos. Sci. 69:1359), both from memory; 0.1192 +- 0.0015
    # from the growth of the variance of the integral of y1, which differs from that of
    # y2 by a bounded amount.
    series = lorenz_series(members=400, time=200.0, step=0.01, every=4)
    series -= series.mean()
    fit = fit_ornstein_uhlenbeck(series[..., np.newaxis], 0.04, window=24.0)
    coupled = ReducedModel(
        name="lorenz",
        x_forcing=np.zeros(1),
        x_from_x=[[1.0]],
        x_from_xx=np.zeros((1, 1, 1)),
        x_from_y=[[4 / 90]],
        rate=fit.process.rate,
        covariance=fit.process.covariance,
    )
    noise = white_limit(coupled).equation().noise
    found = noise[0, 0, 0, 0]
    # The error of the fit is two in a hundred, and its window cuts off as much.
    assert fit.rate_error[0, 0] / fit.process.rate[0, 0] < 0.025
    assert found == pytest.approx(0.1192, rel=0.05)
    # The integrals themselves over stretches of twenty, an independent way: 4000 of
    # them, so that the error is one in forty-five.
    spread = series.reshape(-1, 500).sum(axis=1) * 0.04
    direct = (4 / 90) ** 2 * np.mean(spread**2) / 20
    assert direct == pytest.approx(found, rel=0.09)
    # With it the slow variable has the density exp((x^2 - x^4 / 2) / s^2).
    total, square = (
        integrate.quad(lambda x, k=k: x**k * np.exp((x**2 - x**4 / 2) / found), -3, 3)[
            0
        ]
        for k in (0, 2)
    )
    drift = Polynomial(constant=[0.0], linear=[[1.0]], cubic=-np.ones((1, 1, 1, 1)))
    model = DiffusionModel(name="chaos", drift=drift, noise=noise)
    step, every = step_rule(model, np.ones(1), interval=2.0)
    run = simulate(
        model, np.ones((128, 1)), step=step, n_steps=100 * every, every=every,
        streams=streams(92, 128),
    )  # fmt: skip
    mean, error = mean_and_error(np.mean(run.series[:, 10:, 0] ** 2, axis=1))
    assert abs(mean - square / total) < 4 * error
