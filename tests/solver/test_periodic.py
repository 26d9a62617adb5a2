"""The doubly periodic box: transforms against numpy's own."""

import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from eddyshed.solver.spaces.periodic import Periodic

EVEN = st.integers(4, 24).map(lambda half: 2 * half)
LENGTHS = st.floats(1e-3, 1e7)
SPACES = st.builds(Periodic, st.tuples(EVEN, EVEN), st.tuples(LENGTHS, LENGTHS))
ENTROPY = st.integers(0, 2**32 - 1)
# Transforms of up to 48^2 points: sixteen digits less a few bits for each of the
# dozen stages, relative to the largest number.
ROUND_OFF = 1e-14
# Plans are made for every new size, which takes longer than a deadline allows.
relaxed = settings(deadline=None, max_examples=40)


def random_modes(space, entropy=0):
    rng = np.random.default_rng(entropy)
    return rng.standard_normal(space.n_real)


def close(found, expected):
    return np.abs(found - expected).max() <= ROUND_OFF * np.abs(expected).max()


def grid_by_numpy(space, modes):
    """``f_k`` and ``conj f_k`` at -k put into the whole plane and transformed."""
    nx, ny = space.points
    plane = np.zeros((ny, nx), dtype=complex)
    waves, coefficients = space.waves[::2], modes.view(complex)
    plane[waves[:, 1], waves[:, 0]] = coefficients
    plane[-waves[:, 1], -waves[:, 0]] = coefficients.conj()
    field = np.fft.ifft2(plane, norm="forward")
    assert np.abs(field.imag).max() <= ROUND_OFF * np.abs(field).max()
    return field.real


@relaxed
@given(SPACES, ENTROPY)
def test_there_and_back(space, entropy):
    modes = random_modes(space, entropy)
    assert close(space.to_modes(space.to_grid(modes)), modes)


@relaxed
@given(SPACES, ENTROPY)
def test_fields_are_those_of_numpy(space, entropy):
    modes = random_modes(space, entropy)
    assert close(space.to_grid(modes), grid_by_numpy(space, modes))


@relaxed
@given(SPACES, ENTROPY)
def test_coefficients_are_those_of_numpy(space, entropy):
    # Any field: its mean and what lies beyond the cutoff are lost, no more.
    nx, ny = space.points
    field = np.random.default_rng(entropy).standard_normal((ny, nx)) + 3.0
    plane = np.fft.fft2(field, norm="forward")
    modes = space.to_modes(field)
    waves = space.waves[::2]
    assert close(modes.view(complex), plane[waves[:, 1], waves[:, 0]])
    # The field that is kept is the projection: what is lost is orthogonal to it.
    kept = space.to_grid(modes)
    product = np.vdot(field - kept, kept)
    assert abs(product) <= 10 * ROUND_OFF * np.linalg.norm(field) ** 2


@relaxed
@given(SPACES)
def test_every_wave_is_held_once(space):
    nx, ny = space.points
    cx, cy = space.cutoff
    assert (cx, cy) == ((nx - 1) // 3, (ny - 1) // 3)
    # A wave and its opposite are one real wave: half of all but the mean.
    both = {*map(tuple, space.waves.tolist()), *map(tuple, (-space.waves).tolist())}
    everything = {(k, m) for k in range(-cx, cx + 1) for m in range(-cy, cy + 1)}
    assert both == everything - {(0, 0)}
    assert space.n_real == len(both)
    expected = 2 * np.pi * space.waves / space.lengths
    found = np.stack([space.wavenumber_x, space.wavenumber_y], axis=1)
    np.testing.assert_allclose(found, expected)
    np.testing.assert_allclose(space.k_squared, (expected**2).sum(axis=1))


def test_x_runs_along_the_second_axis():
    # A wave along x has its crests in columns, whatever the shape of the box.
    space = Periodic((16, 10), (4.0, 3.0))
    x, y = space.grid_axes
    assert (x.shape, y.shape) == ((16,), (10,))
    field = np.cos(2 * (2 * np.pi / 4.0) * x - 0.3)[None, :] + 0 * y[:, None]
    coefficients = space.to_modes(field).view(complex)
    (where,) = np.flatnonzero(np.abs(coefficients) > ROUND_OFF)
    assert space.waves[2 * where].tolist() == [2, 0]
    # cos(a - b) = exp(i a) exp(-i b) / 2 + conjugate
    assert coefficients[where] == pytest.approx(np.exp(-0.3j) / 2, abs=ROUND_OFF)
    assert close(space.to_grid(coefficients.view(float)), field)


def test_a_pickled_copy_gives_the_same_bits():
    space = Periodic((16, 24), (4.0, 3.0))
    modes, other = random_modes(space, 1), random_modes(space, 2)
    copy = pickle.loads(pickle.dumps(space))
    assert (copy.points, copy.lengths) == (space.points, space.lengths)
    for name, arguments in (
        ("to_grid", (modes,)),
        ("to_modes", (space.to_grid(modes),)),
        ("advection", (modes,)),
        ("advection", (modes, other)),
    ):
        before = getattr(space, name)(*arguments)
        np.testing.assert_array_equal(getattr(copy, name)(*arguments), before)


def test_results_are_memory_of_their_own():
    space = Periodic((16, 24), (4.0, 3.0))
    one, other = random_modes(space, 1), random_modes(space, 2)
    field = space.to_grid(other)
    calls = {
        "to_grid": ((one,), (other,)),
        "to_modes": ((space.to_grid(one),), (field,)),
        "advection": ((one,), (one, other)),
    }
    for name, (first, second) in calls.items():
        given = [argument.copy() for argument in first]
        result = getattr(space, name)(*first)
        kept = result.copy()
        again = getattr(space, name)(*second)
        np.testing.assert_array_equal(result, kept, err_msg=name)
        assert not np.shares_memory(result, again)
        for argument, before in zip(first, given, strict=True):
            np.testing.assert_array_equal(argument, before, err_msg=name)
            assert not np.shares_memory(result, argument)
        # Changing a result changes nothing that comes later.
        result[...] = np.nan
        np.testing.assert_array_equal(getattr(space, name)(*first), kept, err_msg=name)


def test_two_boxes_do_not_meet():
    # Each owns its plans and buffers, also where the sizes are equal.
    one, other = (Periodic((16, 16), (1.0, 1.0)) for _ in range(2))
    modes = random_modes(one)
    field = one.to_grid(modes)
    other.to_grid(random_modes(other, 5))
    np.testing.assert_array_equal(one.to_grid(modes), field)
