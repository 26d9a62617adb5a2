"""Bases: orthonormal in the model's product, complete, and in a known order."""

import re
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import pytest
from scipy import linalg, optimize
from toys import Quadratic, random_weights

from eddyshed.reduce.bases.basis import Basis
from eddyshed.reduce.bases.eof import eof_basis
from eddyshed.reduce.bases.fourier import fourier_basis, kept_coordinates
from eddyshed.reduce.contract import metric
from eddyshed.reduce.settings import EofSettings, FourierSettings
from eddyshed.solver.errors import DataError
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic

# Sums of some hundred products of numbers of order one.
ROUND_OFF = 1e-12
PLENTY = 4e9  # bytes


@dataclass(frozen=True)
class Record:
    """A truth in memory, with the members that a basis is made from."""

    states: np.ndarray

    @property
    def times(self):
        return np.arange(len(self.states))

    @property
    def size(self):
        return self.states.shape[1]

    def read(self, start, stop):
        return self.states[start:stop].copy()


@dataclass(frozen=True)
class Waves:
    """A model's waves in another unit: its inner product has weights."""

    ocean: Barotropic
    weights: np.ndarray

    def __getattr__(self, name):
        return getattr(self.ocean, name)

    def inner(self, u, w):
        return np.sum(u * self.weights * w, axis=-1)


def ocean(points=(16, 10)):
    return Barotropic(BarotropicSettings(), Periodic(points, (1.0, 1.0)))


def plain(size, weights=None):
    """A model of which only the inner product matters."""
    zeros = np.zeros((size, size))
    return Quadratic(
        constant=np.zeros(size),
        matrix=zeros,
        tensor=np.zeros((size, size, size)),
        weights=np.eye(size) if weights is None else weights,
    )


def record_with(covariance, rotation=None):
    """A record whose covariance is the given one to round-off, and its mean zero.

    With the root L L^T the states are the columns of plus and minus sqrt(n) L.
    """
    root = linalg.cholesky(covariance, lower=True)
    states = np.sqrt(len(root)) * np.concatenate([root.T, -root.T])
    return Record(states if rotation is None else states @ rotation.T)


def both(found):
    """All vectors of resolved and remainder, and all variances."""
    resolved, remainder = found
    return (
        np.hstack([resolved.vectors, remainder.vectors]),
        np.concatenate([resolved.variance, remainder.variance]),
    )


def eofs(record, modes, weights=None):
    model = plain(record.size, weights)
    mean = record.states.mean(axis=0)
    settings = EofSettings(modes=modes)
    return eof_basis(settings, model, [record], mean, share=1.0, memory=PLENTY)


# --- Fourier ----------------------------------------------------------------

FAMILIES = {
    "isotropic": FourierSettings(family="isotropic", up_to=2.5),
    "zonal": FourierSettings(family="zonal", up_to=2),
    "listed": FourierSettings(family="listed", waves=((0, 1), (-3, 1), (2, 0))),
}
EXPECTED = {
    # By hand: half of the integer points of 0 < k^2 + m^2 <= 6.25.
    "isotropic": {(0, 1), (0, 2), (1, 0), (2, 0), (1, 1), (1, -1), (2, 1), (2, -1)}
    | {(1, 2), (1, -2)},
    "zonal": {(0, 1), (0, 2)},
    "listed": {(0, 1), (3, -1), (2, 0)},
}


def variance_of(model):
    return np.random.default_rng(5).uniform(1, 2, model.size)


def waves_of(model, basis):
    """Which wave each vector of a Fourier basis is."""
    assert np.all((basis.vectors != 0).sum(axis=0) == 1)
    return model.waves[(basis.vectors != 0).argmax(axis=0)]


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("weighted", [False, True])
def test_fourier_bases_are_orthonormal_and_complete(family, weighted):
    model = ocean()
    if weighted:
        weights = np.random.default_rng(2).uniform(0.1, 10, model.size)
        model = Waves(model, weights)
    variance = variance_of(model)
    resolved, remainder = fourier_basis(FAMILIES[family], model, variance, share=1.0)
    vectors, found = both((resolved, remainder))
    # Orthonormal, and as many as there are coordinates: they span everything.
    products = model.inner(vectors.T[:, np.newaxis], vectors.T)
    np.testing.assert_allclose(products, np.eye(model.size), atol=ROUND_OFF)
    # Variance of inner(u, z), with z of independent coordinates.
    weights = metric(model)
    expected = ((weights[:, np.newaxis] * vectors) ** 2).T @ variance
    np.testing.assert_allclose(found, expected, rtol=ROUND_OFF)
    kept = {tuple(wave) for wave in waves_of(model, resolved).tolist()}
    assert kept == EXPECTED[family]
    assert resolved.n_modes == 2 * len(kept)


def test_both_parts_of_a_wave_are_kept_side_by_side():
    model = ocean()
    # One part of each wave carries hardly anything, and waves have equal variances.
    variance = np.tile([2.0, 1e-9, 1.0, 1.0 + 1e-9], model.size // 4)
    resolved, remainder = fourier_basis(
        FAMILIES["isotropic"], model, variance, share=1.0
    )
    for basis in (resolved, remainder):
        waves = waves_of(model, basis)
        np.testing.assert_array_equal(waves[::2], waves[1::2])
        parts = [label.split()[0] for label in basis.labels]
        assert parts == ["cos", "sin"] * (basis.n_modes // 2)
        own = np.arange(basis.n_modes)
        # What varies along y only is no rotating pair: the flow need not be
        # homogeneous in that direction.
        expected = np.where(waves[:, 0] == 0, -1, own ^ 1)
        np.testing.assert_array_equal(basis.partners, expected)
        names = [f"{part} {k},{m}" for part, (k, m) in zip(parts, waves, strict=True)]
        assert list(basis.labels) == names


def test_remainder_is_ordered_by_the_variance_of_waves():
    model = ocean()
    _, remainder = fourier_basis(
        FAMILIES["zonal"], model, variance_of(model), share=1.0
    )
    pairs = remainder.variance.reshape(-1, 2).sum(axis=1)
    assert np.all(np.diff(pairs) <= 0)
    assert np.ptp(pairs) > 0.5


def test_half_a_pair_is_no_pair():
    basis = Basis(
        vectors=np.eye(4),
        labels=("a", "b", "c", "d"),
        partners=np.array([1, 0, 3, 2]),
        variance=np.arange(4.0),
    )
    some = basis.take(np.array([3, 1, 2]))
    assert some.labels == ("d", "b", "c")
    assert some.partners.tolist() == [2, -1, 0]
    assert some.variance.tolist() == [3, 1, 2]
    assert some.n_modes == 3
    np.testing.assert_array_equal(some.vectors, np.eye(4)[:, [3, 1, 2]])


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        (
            {"family": "listed", "waves": ((1, 0), (6, 1))},
            "[resolved] waves: [6, 1] is not on this grid, which keeps waves up to "
            "[5, 3]",
        ),
        (
            {"up_to": 6.0},
            "[resolved] up_to = 6 lies beyond the grid, whose largest wavenumber is "
            "5.831 waves per box",
        ),
        ({"up_to": 0.5}, "keeps no wave of the 38 on this grid (up to [5, 3] in x"),
        ({"up_to": np.sqrt(34)}, "keeps every wave of the 38"),
    ],
)
def test_families_that_do_not_fit_the_grid_are_refused(settings, words):
    with pytest.raises(DataError, match=re.escape(words)):
        kept_coordinates(FourierSettings(**settings), ocean().waves)


def test_waves_that_are_not_orthogonal_are_refused():
    @dataclass(frozen=True)
    class Skewed(Waves):
        def inner(self, u, w):
            return np.sum(u * (w @ self.weights), axis=-1)

    model = ocean((8, 8))
    weights = random_weights(np.random.default_rng(1), model.size)
    with pytest.raises(DataError, match="not orthogonal in its inner product"):
        fourier_basis(
            FAMILIES["zonal"],
            Skewed(model, weights),
            variance_of(model),
            share=1.0,
        )


# Between walls: half waves there, and sines only.


def walled(space):
    return Barotropic(BarotropicSettings(), space((12, 8), (1.0, 1.0)))


@pytest.mark.parametrize(
    ("space", "settings", "names"),
    [
        (
            Channel,
            FourierSettings(family="zonal", up_to=2),
            ["sin 1y", "sin 2y"],
        ),
        (
            Channel,
            FourierSettings(family="isotropic", up_to=1.5),
            ["sin 1y", "cos 1x sin 1y", "sin 1x sin 1y"],
        ),
        (
            Channel,
            FourierSettings(family="listed", waves=((2, 3),)),
            ["cos 2x sin 3y", "sin 2x sin 3y"],
        ),
        (
            Basin,
            FourierSettings(family="isotropic", up_to=2.5),
            ["sin 1x sin 1y", "sin 2x sin 1y", "sin 1x sin 2y"],
        ),
        (
            Basin,
            FourierSettings(family="listed", waves=((1, 2), (3, 1))),
            ["sin 3x sin 1y", "sin 1x sin 2y"],
        ),
    ],
)
def test_families_between_walls_are_of_sines(space, settings, names):
    model = walled(space)
    resolved, rest = fourier_basis(settings, model, variance_of(model), share=1.0)
    assert list(resolved.labels) == names
    vectors, _ = both((resolved, rest))
    products = model.inner(vectors.T[:, np.newaxis], vectors.T)
    np.testing.assert_allclose(products, np.eye(model.size), atol=ROUND_OFF)
    # A wave turns in x where that repeats; nothing turns between four walls.
    turning = [k for k, name in enumerate(names) if space is Channel and "x" in name]
    np.testing.assert_array_equal(np.flatnonzero(resolved.partners >= 0), turning)
    # As functions: the first mode is the sine it is named after, of energy 1 / 2.
    x, y = (axis * np.pi for axis in model.space.grid_axes)
    field = model.space.to_grid(model.streamfunction(resolved.vectors[:, 0]))
    k, m = (re.findall(rf"(\d+){axis}", names[0]) for axis in "xy")
    kind = np.cos if names[0].startswith("cos") else np.sin
    along = kind((2 if space is Channel else 1) * int(k[0]) * x) if k else 1 + 0 * x
    shape = np.sin(int(m[0]) * y)[:, np.newaxis] * along
    size = np.sum(field * shape) / np.sum(shape**2)
    np.testing.assert_allclose(field, size * shape, atol=1e-13)


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"family": "zonal", "up_to": 3.0}, "between walls in x every mode varies in"),
        (
            {"family": "listed", "waves": ((0, 1),)},
            "[0, 1] is not on this grid, which keeps waves from [1, 1] up to [7, 5]",
        ),
    ],
)
def test_families_that_a_basin_lacks_are_refused(settings, words):
    with pytest.raises(DataError, match=re.escape(words)):
        kept_coordinates(FourierSettings(**settings), walled(Basin).waves)


# --- Empirical orthogonal functions -----------------------------------------

# More states than coordinates, and fewer: the two ways to the same functions.
SHAPES = {"covariance": (60, 25), "snapshots": (25, 60)}


def steep_record(shape, slope, seed=3):
    """A record whose standard deviations fall by ten to the slope, and its mean."""
    n_time, size = shape
    rng = np.random.default_rng(seed)
    rank = min(shape)
    directions = linalg.qr(rng.standard_normal((size, rank)), mode="economic")[0]
    deviations = 10.0 ** (-slope * np.arange(rank) / rank)
    series = rng.standard_normal((n_time, rank)) * deviations
    return Record(series @ directions.T + rng.standard_normal(size))


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("product", ["plain", "weighted", "dense"])
# Variances over up to ten decades, as in flows with hyperviscosity.
@pytest.mark.parametrize("slope", [1, 5])
def test_eofs_are_orthonormal_and_complete(shape, product, slope):
    record = steep_record(SHAPES[shape], slope)
    rng = np.random.default_rng(8)
    weights = {
        "plain": None,
        "weighted": np.diag(rng.uniform(0.5, 5, record.size)),
        "dense": random_weights(rng, record.size) / record.size,
    }[product]
    resolved, remainder = eofs(record, 5, weights)
    vectors, variance = both((resolved, remainder))
    weights = np.eye(record.size) if weights is None else weights
    dual = weights @ vectors
    np.testing.assert_allclose(vectors.T @ dual, np.eye(len(variance)), atol=ROUND_OFF)
    anomalies = record.states - record.states.mean(axis=0)
    series = anomalies @ dual
    # They hold all of the truth.
    lost = np.abs(series @ vectors.T - anomalies).max()
    assert lost < ROUND_OFF * np.abs(anomalies).max()
    # Coordinates are uncorrelated, their variances as said and falling: to the
    # round-off of the largest, which is all that eigenvalues have.
    covariance = series.T @ series / len(series)
    np.testing.assert_allclose(
        covariance, np.diag(variance), atol=ROUND_OFF * variance[0]
    )
    assert np.all(np.diff(variance) <= 0)
    assert resolved.n_modes == 5
    assert resolved.labels == ("EOF 1", "EOF 2", "EOF 3", "EOF 4", "EOF 5")
    assert remainder.labels[0] == "EOF 6"
    assert np.all(resolved.partners == -1)
    # The sign rule.
    largest = np.abs(vectors).argmax(axis=0)
    assert np.all(vectors[largest, np.arange(len(variance))] > 0)


@pytest.mark.parametrize("shape", SHAPES)
def test_eofs_are_the_singular_vectors(shape):
    record = steep_record(SHAPES[shape], 1)
    vectors, variance = both(eofs(record, 5))
    anomalies = record.states - record.states.mean(axis=0)
    _, singular, expected = np.linalg.svd(anomalies, full_matrices=False)
    rank = min(record.size, len(record.times) - 1)
    assert len(variance) == rank
    expected, singular = expected[:rank].T, singular[:rank]
    # Eigenvalues are squares: half of the digits of the smallest, a tenth of
    # the largest in amplitude, remain beyond doubt.
    np.testing.assert_allclose(
        variance, singular**2 / len(record.times), atol=ROUND_OFF * variance[0]
    )
    signs = np.sign(np.sum(vectors * expected, axis=0))
    # Vectors err by round-off over the gap to the next eigenvalue, 1 % here.
    np.testing.assert_allclose(vectors, expected * signs, atol=1e-9)


def test_both_ways_give_the_same_functions():
    # The same states in a space of more dimensions than there are states.
    rng = np.random.default_rng(4)
    short = steep_record((60, 25), 1)
    rotation = linalg.qr(rng.standard_normal((80, 25)), mode="economic")[0]
    long = Record(short.states @ rotation.T)
    vectors, variance = both(eofs(short, 5))
    other, other_variance = both(eofs(long, 5))
    # Round-off of the largest eigenvalue; vectors as above.
    np.testing.assert_allclose(other_variance, variance, atol=ROUND_OFF * variance[0])
    expected = rotation @ vectors
    signs = np.sign(np.sum(expected * other, axis=0))
    np.testing.assert_allclose(other, expected * signs, atol=1e-9)


def lifted(size, embed):
    """Turn into so many more dimensions that there are fewer states; or not."""
    if not embed:
        return None
    rng = np.random.default_rng(6)
    return linalg.qr(rng.standard_normal((2 * size + 20, size)), mode="economic")[0]


@pytest.mark.parametrize("embed", [False, True])
def test_spectrum_of_a_random_walk(embed):
    # Covariance min(i, j), eigenvalues 1 / (4 sin^2(pi (2k - 1) / (2 (2n + 1)))):
    # the discrete Wiener path (its inverse is the second difference with one free
    # end; Strang (1999), SIAM Rev. 41, 135, tables its eigenvectors). With n = 200
    # the first three are 16292.63098446, 1810.36640795, 651.78524576, and their
    # shares near 8 / (pi (2k - 1))^2 of the continuous path (Karhunen-Loeve).
    n = 200
    index = np.arange(1, n + 1)
    covariance = np.minimum.outer(index, index).astype(float)
    _, variance = both(eofs(record_with(covariance, lifted(n, embed)), 10))
    angles = np.pi * (2 * index - 1) / (2 * (2 * n + 1))
    # Round-off of the largest eigenvalue.
    np.testing.assert_allclose(
        variance, 1 / (4 * np.sin(angles) ** 2), atol=1e-12 * variance[0]
    )
    # Eight decimals are printed.
    printed = [16292.63098446, 1810.36640795, 651.78524576]
    np.testing.assert_allclose(variance[:3], printed, rtol=0, atol=5e-9)
    share = variance[:3] / variance.sum()
    continuous = 8 / (np.pi * np.array([1, 3, 5])) ** 2
    # The discrete path differs at the order of 1 / n.
    np.testing.assert_allclose(share, continuous, rtol=1 / n)


@pytest.mark.parametrize("embed", [False, True])
def test_spectrum_of_red_noise(embed):
    # Kac, Murdock & Szego (1953), J. Ration. Mech. Anal. 2, 767: the covariance
    # r^|i - j| has the eigenvalues (1 - r^2) / (1 - 2 r cos t + r^2) at the n roots
    # of sin((n + 1) t) - 2 r sin(n t) + r^2 sin((n - 1) t) = 0 in (0, pi), one in
    # each ((k - 1) pi / (n + 1), k pi / (n + 1)].
    n, r = 100, 0.9
    covariance = r ** np.abs(np.subtract.outer(np.arange(n), np.arange(n)))
    _, variance = both(eofs(record_with(covariance, lifted(n, embed)), 10))

    def condition(t):
        parts = np.sin((n + 1) * t), np.sin(n * t), np.sin((n - 1) * t)
        return parts[0] - 2 * r * parts[1] + r**2 * parts[2]

    edges = np.arange(n + 1) * np.pi / (n + 1)
    edges[0] = 1e-6  # zero is a root as well, and not meant
    roots = [
        optimize.brentq(condition, low, high, xtol=1e-15)
        for low, high in pairwise(edges)
    ]
    expected = (1 - r**2) / (1 - 2 * r * np.cos(roots) + r**2)
    # The roots err by 1e-15, which near zero is 1e-13 of the eigenvalue.
    np.testing.assert_allclose(variance, expected, rtol=1e-11)
    printed = [17.87174539, 15.11634331, 11.93619389]
    np.testing.assert_allclose(variance[:3], printed, rtol=0, atol=5e-9)


def test_a_travelling_wave_is_two_functions_of_equal_variance():
    # cos(k x - w t) = cos k x cos w t + sin k x sin w t (common knowledge; von
    # Storch & Zwiers, Statistical Analysis in Climate Research, ch. 15).
    x = np.arange(32) * 2 * np.pi / 32
    t = np.arange(50) * 2 * np.pi / 50
    noise = 1e-5 * np.random.default_rng(1).standard_normal((50, 32))
    record = Record(np.cos(3 * x - t[:, np.newaxis]) + noise)
    resolved, remainder = eofs(record, 2)
    total = resolved.variance.sum() + remainder.variance.sum()
    # Noise of 1e-5 moves shares by about its square over the root of the times.
    np.testing.assert_allclose(resolved.variance / total, 0.5, atol=1e-5)


def test_noise_spreads_as_random_matrices_say():
    # Marchenko & Pastur (1967): eigenvalues of the covariance of n vectors of p
    # independent numbers lie between (1 +- sqrt(p / n))^2: .4675 and 1.7325 here.
    n, p = 1000, 100
    record = Record(np.random.default_rng(9).standard_normal((n, p)))
    _, variance = both(eofs(record, 5))
    edges = (1 + np.sqrt(p / n) * np.array([1, -1])) ** 2
    # The extreme eigenvalues lie about them as Tracy and Widom say (mean -1.2065 and
    # deviation 1.268 of a scale s; Johnstone 2001, Ann. Stat. 29, 295). Four
    # deviations; the streams are fixed.
    root_n, root_p = np.sqrt(n), np.sqrt(p)
    sides = np.array([1, -1])
    scale = (root_n + sides * root_p) * np.cbrt(1 / root_p + sides / root_n) / n
    middle = edges - 1.2065 * sides * scale
    assert np.all(np.abs(variance[[0, -1]] - middle) < 4 * 1.268 * scale)


def refused(record, modes, words):
    with pytest.raises(DataError, match=words):
        eofs(record, modes)


@pytest.mark.parametrize("shape", SHAPES)
def test_more_functions_than_there_are_is_refused(shape):
    record = steep_record(SHAPES[shape], 1)
    n_time, size = SHAPES[shape]
    rank = min(size, n_time - 1)
    words = rf"modes = {rank}, but {n_time} states of {size} coordinates have {rank} "
    refused(record, rank, words)
    resolved, remainder = eofs(record, rank - 1)
    assert (resolved.n_modes, remainder.n_modes) == (rank - 1, 1)


@pytest.mark.parametrize("shape", SHAPES)
def test_more_functions_than_directions_is_refused(shape):
    n_time, size = SHAPES[shape]
    rng = np.random.default_rng(7)
    flat = rng.standard_normal((n_time, 4)) @ rng.standard_normal((4, size))
    refused(Record(flat), 4, "modes = 4, but the truth varies in 4 directions only")
    resolved, remainder = eofs(Record(flat), 3)
    assert (resolved.n_modes, remainder.n_modes) == (3, 1)
