"""The white-noise limit: exact identities that hold every term to account."""

import time
from dataclasses import replace
from itertools import permutations

import numpy as np
import pytest
from scipy import integrate, linalg
from slow_fast import gibbs_model, random_rate, random_slow_fast

from eddyshed.reduce.homogenised import DRIFT_TERMS, NOISE_TERMS, TERMS, white_limit
from eddyshed.reduce.reduced import ReducedModel
from eddyshed.solver.errors import DataError


def symmetric(tensor):
    """Mean over all permutations of the axes: the coefficients of a form."""
    turned = [tensor.transpose(order) for order in permutations(range(tensor.ndim))]
    return sum(turned) / len(turned)


def stationarity(model, variance):
    """Residual and size of the Fokker-Planck equation for N(0, variance I).

    ``-div(b p) + (1/2) sum_ij d_i d_j (a_ij p)``, divided by p, is a polynomial
    of degree four in x; these are its coefficients, degree by degree, from
    those of b and a. No derivative is taken numerically.
    """
    b, c = model.drift, variance
    a0 = model.noise[0, :, 0]
    a1 = model.noise[0][:, 1:] + model.noise[1:, :, 0].transpose(1, 0, 2)
    a1 = a1.transpose(0, 2, 1)  # [i, j, k] of x_k
    a2 = model.noise[1:, :, 1:].transpose(1, 3, 0, 2)  # [i, j, k, l] of x_k x_l
    a2 = (a2 + a2.transpose(0, 1, 3, 2)) / 2
    terms = [
        [
            -np.trace(b.linear),
            np.einsum("ijij->", a2),
            -np.trace(a0) / (2 * c),
        ],
        [
            -2 * np.einsum("iik->k", b.quadratic),
            b.constant / c,
            -np.einsum("iki->k", a1) / c,
            -np.einsum("iik->k", a1) / (2 * c),
        ],
        [
            -3 * np.einsum("iikl->kl", b.cubic),
            b.linear / c,
            -2 * np.einsum("ikil->kl", a2) / c,
            a0 / (2 * c**2),
            -np.einsum("iikl->kl", a2) / (2 * c),
        ],
        [b.quadratic / c, a1 / (2 * c**2)],
        [b.cubic / c, a2 / (2 * c**2)],
    ]
    residual = size = 0.0
    for degree in terms:
        parts = [symmetric(np.asarray(part)) for part in degree]
        residual = max(residual, np.abs(sum(parts)).max())
        size = max(size, *(np.abs(part).max() for part in parts))
    return residual, size


SIZES = [(2, 3), (3, 6), (4, 9), (2, 20), (6, 24)]
GIBBS = [(nx, ny, seed) for nx, ny in SIZES for seed in range(5)]


@pytest.mark.parametrize(("nx", "ny", "seed"), GIBBS)
def test_equilibrium_is_stationary(nx, ny, seed):
    # The two-scale system has the Gibbs measure N(0, c I) at every eps, so its limit
    # must have it too; this takes every term (Pavliotis & Stuart, Multiscale Methods,
    # ch. 11, for the limit; Gardiner, Handbook of Stochastic Methods, sec. 5.3, for
    # the Fokker-Planck equation).
    rng = np.random.default_rng([11, nx, ny, seed])
    variance = rng.uniform(0.3, 2.0)
    limit = white_limit(gibbs_model(rng, nx, ny, variance=variance))
    residual, size = stationarity(limit.equation(), variance)
    # Round-off of sums of thousands of products.
    assert residual < 1e-9 * size
    assert residual < 1e-9
    for term in TERMS:
        # A term that could be forgotten unseen would not be tested.
        without, _ = stationarity(limit.equation(leave_out=[term]), variance)
        assert without > 1e-3 * size, term
    slow = limit.drifts["slow"]
    slow = replace(slow, quadratic=-slow.quadratic, linear=-slow.linear)
    other = replace(limit, drifts=limit.drifts | {"slow": slow})
    assert stationarity(other.equation(), variance)[0] > 1e-3 * size


@pytest.mark.parametrize("term", DRIFT_TERMS)
def test_equilibrium_tells_every_sign(term):
    rng = np.random.default_rng(12)
    limit = white_limit(gibbs_model(rng, 3, 6, variance=0.7))
    part = limit.drifts[term]
    names = ("constant", "linear", "quadratic", "cubic")
    turned = replace(part, **{name: -getattr(part, name) for name in names})
    other = replace(limit, drifts=limit.drifts | {term: turned})
    residual, size = stationarity(other.equation(), 0.7)
    assert residual > 1e-3 * size


def by_definition(model, x):
    """Terms at one state from integrals over the lag, without any matrix equation.

    ``Gamma^-1 = int exp(-Gamma s) ds`` and ``Q_i = int exp(-Gamma^T s) M_i
    exp(-Gamma s) ds``, by quadrature.
    """
    ny = model.ny
    gamma, c = model.rate, model.covariance
    slowest = linalg.eigvals(gamma).real.min()

    def integral(function):
        found, _ = integrate.quad_vec(
            function, 0, 40 / slowest, epsabs=1e-12, epsrel=1e-12, limit=2000
        )
        return found

    def moved(s):
        return linalg.expm(-gamma * s)

    inverse = integral(moved)
    q = integral(lambda s: moved(s).T @ model.x_from_yy @ moved(s))
    n = 2 * model.x_from_xy
    h = model.x_from_y + np.einsum("ijm,j->im", n, x)
    k = 2 * np.einsum("mjn,j->mn", model.y_from_xy, x)
    g = model.y_forcing + model.y_from_x @ x
    g = g + np.einsum("mjk,j,k->m", model.y_from_xx, x, x)
    p = inverse @ c
    drifts = {
        "slow": model.x_forcing
        + model.x_from_x @ x
        + np.einsum("ijk,j,k->i", model.x_from_xx, x, x),
        "quadratic_mean": np.array([np.trace(m @ c) for m in model.x_from_yy]),
        "linear_feedback": h @ inverse @ g,
        "stratonovich_drift": np.einsum("ijm,mn,jn->i", n, (p + p.T) / 2, h),
        "levy_area_drift": np.einsum("ijm,mn,jn->i", n, (p - p.T) / 2, h),
        "quadratic_feedback": np.array([2 * np.trace(qi @ k @ c) for qi in q]),
    }
    pairs = np.array(
        [[2 * np.trace(qi @ c @ m @ c) for m in model.x_from_yy] for qi in q]
    )
    noises = {"linear_noise": h @ (p + p.T) @ h.T, "quadratic_noise": pairs + pairs.T}
    assert q.shape == (model.nx, ny, ny)
    return drifts, noises


def spiral(rng, ny):
    """Rate of pairs that turn, and a single coordinate: in shuffled order."""
    blocks = [np.array([[g, -w], [w, g]]) for g, w in rng.uniform(0.5, 3, (ny // 2, 2))]
    rate = linalg.block_diag(*blocks, *([[1.3]] * (ny % 2)))
    order = rng.permutation(ny)
    return rate[np.ix_(order, order)], order


def defective(ny):
    """A rate with one eigenvector only, which no diagonalisation survives."""
    return 2 * np.eye(ny) + np.diag(np.ones(ny - 1), 1)


@pytest.mark.parametrize("kind", ["full", "pairs", "defective"])
def test_terms_are_their_definitions(kind):
    rng = np.random.default_rng(13)
    model = random_slow_fast(rng, 3, 5)
    if kind == "pairs":
        rate, order = spiral(rng, 5)
        variances = np.array([0.4, 0.4, 1.1, 1.1, 0.7])[order]
        model = replace(model, rate=rate, covariance=np.diag(variances))
    elif kind == "defective":
        model = replace(model, rate=defective(5), covariance=np.eye(5))
    limit = white_limit(model)
    for x in rng.standard_normal((2, 3)):
        drifts, noises = by_definition(model, x)
        for name, expected in drifts.items():
            # The quadrature is good to 1e-12 of integrals of order one.
            np.testing.assert_allclose(
                limit.drifts[name](x), expected, rtol=0, atol=1e-9, err_msg=name
            )
        for name in NOISE_TERMS:
            others = [term for term in NOISE_TERMS if term != name]
            found = limit.equation(leave_out=others).diffusion(x)
            np.testing.assert_allclose(
                found, noises[name], rtol=0, atol=1e-9, err_msg=name
            )


def transformed(model, change):
    """The same system in fast coordinates ``change y``."""
    back = np.linalg.inv(change)
    covariance = change @ model.covariance @ change.T
    return replace(
        model,
        x_from_y=model.x_from_y @ back,
        x_from_xy=model.x_from_xy @ back,
        x_from_yy=np.einsum("imn,ma,nb->iab", model.x_from_yy, back, back),
        y_forcing=change @ model.y_forcing,
        y_from_x=change @ model.y_from_x,
        y_from_xx=np.einsum("am,mjk->ajk", change, model.y_from_xx),
        y_from_xy=np.einsum("am,mjn,nb->ajb", change, model.y_from_xy, back),
        rate=change @ model.rate @ back,
        covariance=(covariance + covariance.T) / 2,
    )


@pytest.mark.parametrize(("nx", "ny"), [(2, 3), (3, 6), (5, 17)])
def test_fast_coordinates_do_not_matter(nx, ny):
    # The limit is a statement about x: each term is a tensor in y, contracted.
    rng = np.random.default_rng([14, nx])
    model = random_slow_fast(rng, nx, ny)
    change = rng.standard_normal((ny, ny)) + 2 * np.eye(ny)
    one, other = white_limit(model), white_limit(transformed(model, change))
    # Round-off, magnified by the condition of the change and of the matrix equation.
    allowed = 1e-13 * np.linalg.cond(change) ** 2
    for name, part in one.drifts.items():
        for degree in ("constant", "linear", "quadratic", "cubic"):
            np.testing.assert_allclose(
                getattr(other.drifts[name], degree),
                getattr(part, degree),
                rtol=0,
                atol=allowed,
                err_msg=name,
            )
    for name, part in one.noises.items():
        np.testing.assert_allclose(
            other.noises[name], part, rtol=0, atol=allowed, err_msg=name
        )


def test_the_cubic_term_takes_energy_as_the_rate_does():
    # With energy conserved, 2 x.B112(x, .) = -B211(x, x) =: -q, so that
    # x.cubic(x, x, x) = -q.Gamma^-1 q: negative wherever the symmetric part of the
    # rate is positive.
    rng = np.random.default_rng(15)
    model = gibbs_model(rng, 4, 9, variance=1.0)
    cubic = white_limit(model).equation().drift.cubic
    for x in rng.standard_normal((20, 4)):
        q = np.einsum("mjk,j,k->m", model.y_from_xx, x, x)
        work = np.einsum("ijkl,i,j,k,l->", cubic, x, x, x, x)
        expected = -q @ np.linalg.solve(model.rate, q)
        assert work == pytest.approx(expected, rel=1e-11)
        assert work < 0
    # And not where it is not. This rate decays, for in the plane of q and of some p its
    # trace and its determinant are positive; but the inverse along q is -0.5 / 2.5.
    along = q / np.linalg.norm(q)
    plane = np.linalg.qr(np.column_stack([along, rng.standard_normal(9)]))[0]
    block = np.array([[3.0, 2.0], [-2.0, -0.5]])
    rate = np.eye(9) + plane @ (block - np.eye(2)) @ plane.T
    assert linalg.eigvals(rate).real.min() > 0
    limit = white_limit(replace(model, rate=rate))
    cubic = limit.drifts["linear_feedback"].cubic
    work = np.einsum("ijkl,i,j,k,l->", cubic, x, x, x, x)
    assert work == pytest.approx(0.2 * q @ q, rel=1e-11)


def test_open_loop_has_no_feedback_and_the_same_noise():
    rng = np.random.default_rng(16)
    model = random_slow_fast(rng, 3, 6)
    cut = replace(
        model,
        y_forcing=None,
        y_from_x=None,
        y_from_xx=None,
        y_from_xy=None,
    )
    closed, opened = white_limit(model), white_limit(cut)
    for term in ("linear_feedback", "quadratic_feedback"):
        for degree in ("constant", "linear", "quadratic", "cubic"):
            assert not np.any(getattr(opened.drifts[term], degree))
        assert np.any(closed.drifts[term].linear)
    for term in ("slow", "quadratic_mean", "stratonovich_drift", "levy_area_drift"):
        x = rng.standard_normal(3)
        np.testing.assert_array_equal(opened.drifts[term](x), closed.drifts[term](x))
    np.testing.assert_array_equal(opened.equation().noise, closed.equation().noise)


def test_the_mean_takes_the_covariance_that_is_given():
    rng = np.random.default_rng(17)
    model = random_slow_fast(rng, 3, 6)
    one, other = white_limit(model), white_limit(model, 2 * model.covariance)
    expected = 2 * one.drifts["quadratic_mean"].constant
    np.testing.assert_allclose(
        other.drifts["quadratic_mean"].constant, expected, rtol=1e-14
    )
    np.testing.assert_array_equal(other.equation().noise, one.equation().noise)


def test_without_fast_modes_only_the_slow_terms_are_left():
    model = ReducedModel(
        name="alone", x_forcing=[1.0, 2.0], x_from_x=-np.eye(2), x_from_xx=None
    )
    equation = white_limit(model).equation()
    np.testing.assert_array_equal(equation.drift([3.0, 4.0]), [-2.0, -2.0])
    assert not equation.noise.any()


def test_noise_that_does_not_decay_has_no_limit():
    rng = np.random.default_rng(18)
    model = random_slow_fast(rng, 2, 3)
    model = replace(model, rate=np.diag([1.0, 0.0, 2.0]))
    with pytest.raises(DataError, match="does not decay"):
        white_limit(model)


def test_terms_that_do_not_exist_are_refused():
    limit = white_limit(random_slow_fast(np.random.default_rng(19), 2, 3))
    with pytest.raises(DataError, match=r"'memory'.*choose from quadratic_mean, lin"):
        limit.equation(leave_out=["memory"])


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["pairs", "full"])
def test_setting_up_a_large_model_is_quick(kind):
    # A guard against a cost of the sixth power, not a measurement.
    rng = np.random.default_rng(20)
    nx, ny = 6, 182
    model = random_slow_fast(rng, nx, ny)
    if kind == "pairs":
        rate, _ = spiral(rng, ny)
        model = replace(model, rate=rate, covariance=np.eye(ny))
    else:
        model = replace(model, rate=random_rate(rng, ny), covariance=np.eye(ny))
    before = time.process_time()
    white_limit(model)
    assert time.process_time() - before < 10
