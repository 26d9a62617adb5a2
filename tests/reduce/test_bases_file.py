"""Vectors from a file: orthonormal in their order, and refused with reasons."""

import re

import h5py
import numpy as np
import pytest
from toys import Quadratic, random_weights
from xarray import DataArray

from eddyshed.reduce.bases.file_vectors import file_basis
from eddyshed.reduce.settings import FileSettings
from eddyshed.solver.errors import DataError

SIZE = 12


def model(weights):
    return Quadratic(
        constant=np.zeros(SIZE),
        matrix=np.zeros((SIZE, SIZE)),
        tensor=np.zeros((SIZE, SIZE, SIZE)),
        weights=weights,
    )


@pytest.fixture
def rng():
    return np.random.default_rng(4)


def write(path, values, name="vectors"):
    with h5py.File(path, "w") as file:
        file[name] = values
    return path


def basis_of(path, weights=None, **settings):
    weights = np.eye(SIZE) if weights is None else weights
    return file_basis(FileSettings(path=str(path), **settings), model(weights))


@pytest.mark.parametrize("product", ["plain", "weighted", "dense"])
def test_vectors_are_orthonormal_and_span_the_same(tmp_path, product, rng):
    weights = {
        "plain": np.eye(SIZE),
        "weighted": np.diag(rng.uniform(0.1, 10, SIZE)),
        "dense": random_weights(rng, SIZE),
    }[product]
    # Of any lengths, and two of them a degree apart.
    given = rng.standard_normal((SIZE, 4)) * [1e-3, 1, 1e4, 1]
    given[:, 3] = given[:, 1] + 0.02 * given[:, 3]
    path = write(tmp_path / "patterns.h5", given)
    basis = basis_of(path, weights)
    found = basis.vectors
    # Round-off over the smallest angle.
    np.testing.assert_allclose(found.T @ weights @ found, np.eye(4), atol=1e-12)
    for k in range(1, 5):
        fit, *_ = np.linalg.lstsq(found[:, :k], given[:, :k], rcond=None)
        left = given[:, :k] - found[:, :k] @ fit
        assert np.abs(left).max() < 1e-12 * np.abs(given[:, :k]).max()
        # Each points the way of its vector.
        assert found[:, k - 1] @ weights @ given[:, k - 1] > 0
    assert basis.labels == ("vector 1", "vector 2", "vector 3", "vector 4")
    # Those that are orthonormal come out as they are.
    again = basis_of(write(tmp_path / "again.h5", found), weights)
    np.testing.assert_allclose(again.vectors, found, atol=1e-12)
    assert basis_of(path, weights, modes=2).n_modes == 2


def test_netcdf_from_xarray_is_read(tmp_path, rng):
    given = np.linalg.qr(rng.standard_normal((SIZE, 3)))[0]
    path = tmp_path / "patterns.nc"
    array = DataArray(given, dims=("coordinate", "mode"), name="patterns")
    array.to_netcdf(path, engine="h5netcdf")
    found = basis_of(path, variable="patterns").vectors
    signs = np.sign(np.sum(found * given, axis=0))
    np.testing.assert_allclose(found * signs, given, atol=1e-13)
    np.testing.assert_array_equal(signs, 1)


@pytest.mark.parametrize(
    ("values", "settings", "words"),
    [
        (
            np.eye(SIZE)[:, :3],
            {"variable": "eofs"},
            'no variable "eofs"; found: vectors',
        ),
        (np.eye(SIZE)[:, :3], {"modes": 4}, "[resolved] modes = 4, but "),
        (np.eye(SIZE)[:3], {}, "of shape (12, any number); swap its axes"),
        (np.eye(5), {}, "has the shape (5, 5) and type real; columns of real numbers"),
        (1j * np.eye(SIZE), {}, "type complex; columns of real numbers in the 12"),
        (np.ones(SIZE), {}, "has the shape (12,)"),
        (np.eye(SIZE), {}, "12 vectors of 12 coordinates; at least one"),
        (np.full((SIZE, 2), np.nan), {}, "vectors is not finite everywhere"),
        (
            np.eye(SIZE)[:, [0, 1, 2]] @ [[1, 0, 1.0], [0, 1, 0], [0, 0, 0]],
            {},
            "vector 3 of vectors is a combination of 1, to one part",
        ),
        (np.eye(SIZE, 3) * [1, 0, 1], {}, "vector 2 of vectors is zero; leave it out"),
    ],
)
def test_what_is_no_basis_is_refused(tmp_path, values, settings, words):
    path = write(tmp_path / "patterns.h5", values)
    with pytest.raises(DataError, match=re.escape(words)):
        basis_of(path, **settings)


def test_what_is_no_file_is_refused(tmp_path):
    for path in (tmp_path / "none.h5", tmp_path / "text.h5"):
        if path.name == "text.h5":
            path.write_text("no numbers")
        with pytest.raises(DataError, match=r"h5: cannot be read as HDF5 or netCDF-4"):
            basis_of(path)
