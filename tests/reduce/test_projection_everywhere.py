"""Every basis and every projection, in every ocean and space."""

import h5py
import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st

from eddyshed.reduce.bases.boxes import boxes_basis
from eddyshed.reduce.bases.eof import eof_basis, remainder_basis
from eddyshed.reduce.bases.file_vectors import file_basis
from eddyshed.reduce.bases.fourier import fourier_basis
from eddyshed.reduce.contract import project, tendency
from eddyshed.reduce.operators import galerkin
from eddyshed.reduce.settings import (
    BoxesSettings,
    EofSettings,
    FileSettings,
    FourierSettings,
)
from eddyshed.solver.boxes import BoxSettings
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.oceans.boussinesq import Boussinesq
from eddyshed.solver.oceans.boussinesq_waves import BoussinesqSettings
from eddyshed.solver.oceans.two_layer import TwoLayer, TwoLayerSettings
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic

POINTS, LENGTHS = (10, 8), (7.0, 5.0)
# Sums of some hundred products of numbers of order one.
ROUND_OFF = 1e-12


def barotropic(space):
    rng = np.random.default_rng(1)
    settings = BarotropicSettings(
        beta=2.0, drag=0.1, viscosity=1e-3, deformation_radius=0.8
    )
    return Barotropic(settings, space, rng.standard_normal(space.n_real))


def two_layer(space):
    settings = TwoLayerSettings(
        upper_depth=1.0,
        lower_depth=3.0,
        deformation_radius=0.6,
        upper_current=0.3,
        beta=1.0,
        viscosity=1e-3,
    )
    return TwoLayer(settings, space)


def slice_(space, coriolis=0.0):
    settings = BoussinesqSettings(
        buoyancy_gradient=2.0, viscosity=1e-3, diffusivity=2e-3, coriolis=coriolis
    )
    return Boussinesq(settings, space)


OCEANS = {
    "barotropic, periodic": lambda: barotropic(Periodic(POINTS, LENGTHS)),
    "barotropic, channel": lambda: barotropic(Channel(POINTS, LENGTHS)),
    "barotropic, basin": lambda: barotropic(Basin(POINTS, LENGTHS)),
    "two layers, periodic": lambda: two_layer(Periodic(POINTS, LENGTHS)),
    "two layers, channel": lambda: two_layer(Channel(POINTS, LENGTHS)),
    "slice, periodic": lambda: slice_(Periodic(POINTS, LENGTHS)),
    "slice, channel": lambda: slice_(Channel(POINTS, LENGTHS)),
    "rotating slice": lambda: slice_(Periodic(POINTS, LENGTHS), coriolis=0.5),
}


@pytest.fixture(params=OCEANS, scope="module")
def model(request):
    return OCEANS[request.param]()


class Record:
    """A truth in memory."""

    def __init__(self, states):
        self.states = states
        self.times = np.arange(len(states))
        self.size = states.shape[1]

    def read(self, start, stop):
        return self.states[start:stop].copy()


def fourier(model, states, _):
    settings = FourierSettings(up_to=2.0)
    return fourier_basis(settings, model, states.var(axis=0), share=0.8)


def eof(model, states, _):
    mean = states.mean(axis=0)
    how = {"share": 0.8, "memory": 4e9}
    return eof_basis(EofSettings(modes=4), model, [Record(states)], mean, **how)


def with_remainder(resolved, model, states):
    how = {"share": 0.8, "memory": 4e9}
    return resolved, remainder_basis(
        resolved.vectors, model, [Record(states)], states.mean(axis=0), **how
    )


def boxes(model, states, _):
    fields = list(model.linear_fields)[:2]
    found = {
        f"box {k}": BoxSettings(field=field, x=(1.0 + k, 3.0 + k))
        for k, field in enumerate(fields)
    }
    return with_remainder(boxes_basis(BoxesSettings(boxes=found), model), model, states)


def from_file(model, states, folder):
    path = folder / "vectors.h5"
    with h5py.File(path, "w") as file:
        file["vectors"] = np.random.default_rng(6).standard_normal((model.size, 3))
    basis = file_basis(FileSettings(path=str(path)), model)
    return with_remainder(basis, model, states)


@pytest.mark.parametrize("make", [fourier, eof, boxes, from_file])
def test_bases_are_orthonormal_and_give_back_what_they_lift(model, make, tmp_path):
    rng = np.random.default_rng(2)
    deviations = np.geomspace(1, 0.01, model.size)
    states = rng.standard_normal((150, model.size)) * deviations
    resolved, unresolved = make(model, states, tmp_path)
    vectors = np.hstack([resolved.vectors, unresolved.vectors])
    count = vectors.shape[1]
    products = model.inner(vectors.T[:, np.newaxis], vectors.T)
    np.testing.assert_allclose(products, np.eye(count), atol=ROUND_OFF)
    c = rng.standard_normal((5, count))
    np.testing.assert_allclose(project(model, vectors, c @ vectors.T), c, atol=1e-11)
    names = (*resolved.labels, *unresolved.labels)
    assert len(set(names)) == len(names) == count
    assert np.all(np.diff(unresolved.variance) <= 1e-9) or make is fourier


def projected(model, nx, ny, rng):
    """Operators in a random basis about a random state."""
    weights = model.inner(np.eye(model.size), np.eye(model.size))
    flat = rng.standard_normal((model.size, nx + ny))
    vectors = np.linalg.qr(flat)[0] / np.sqrt(weights)[:, np.newaxis]
    mean = rng.standard_normal(model.size)
    u, v = vectors[:, :nx], vectors[:, nx:]
    return u, v, mean, galerkin(model, u, v, mean)


@given(seed=st.integers(0, 2**32 - 1))
@hypothesis_settings(max_examples=3, deadline=None, derandomize=True)
def test_tensors_equal_direct_evaluation(model, seed):
    rng = np.random.default_rng(seed)
    u, v, mean, op = projected(model, 3, 6, rng)
    x, y = rng.standard_normal(3), rng.standard_normal(6)
    made = tendency(model, 0.0, mean + u @ x + v @ y)
    dx = op.F1 + op.A11 @ x + op.A12 @ y + np.einsum("ijk,j,k", op.B111, x, x)
    dx += 2 * np.einsum("ijm,j,m", op.B112, x, y)
    dx += np.einsum("imn,m,n", op.B122, y, y)
    itself = model.linear(v @ y) + model.bilinear(v @ y, v @ y)
    itself += 2 * model.bilinear(mean, v @ y)
    dy = op.F2 + op.A21 @ x + np.einsum("mjk,j,k", op.B211, x, x)
    dy += 2 * np.einsum("mjn,j,n", op.B212, x, y)
    # Transforms leave twelve digits of the largest term.
    scale = np.abs(made).max() + np.abs(itself).max()
    np.testing.assert_allclose(dx, project(model, u, made), atol=1e-12 * scale)
    np.testing.assert_allclose(dy, project(model, v, made - itself), atol=1e-12 * scale)
    # B conserves energy: sums over cyclic permutations vanish, restored to round-off.
    cyclic = op.B112 + op.B112.transpose(1, 0, 2) + op.B211.transpose(1, 2, 0)
    assert np.abs(cyclic).max() <= 1e-15 * np.abs(op.B122).max()
    assert op.cyclic_residual < 1e-11


def test_rotated_bases_give_rotated_tensors(model):
    rng = np.random.default_rng(4)
    u, v, mean, op = projected(model, 3, 6, rng)
    p, q = (np.linalg.qr(rng.standard_normal((n, n)))[0] for n in (3, 6))
    turned = galerkin(model, u @ p, v @ q, mean)
    turn = {"i": p, "j": p, "k": p, "m": q, "n": q}
    axes_of = {
        "F1": "i",
        "F2": "m",
        "A11": "ij",
        "A12": "im",
        "A21": "mi",
        "B111": "ijk",
        "B112": "ijm",
        "B122": "imn",
        "B211": "mij",
        "B212": "min",
    }
    for name, axes in axes_of.items():
        expected = getattr(op, name)
        for axis, letter in enumerate(axes):
            expected = np.moveaxis(
                np.tensordot(turn[letter].T, expected, axes=(1, axis)), 0, axis
            )
        # Transforms leave twelve digits of the largest coefficient.
        tolerance = 1e-11 * max(np.abs(expected).max(), np.abs(op.B122).max())
        np.testing.assert_allclose(
            getattr(turned, name), expected, rtol=0, atol=tolerance, err_msg=name
        )
