"""The divided truth: coordinates, tendencies and shares, against direct evaluation."""

import re
from dataclasses import dataclass
from types import SimpleNamespace

import h5py
import numpy as np
import pytest
from toys import Quadratic, random_model, random_weights

from eddyshed.reduce import memory
from eddyshed.reduce.contract import tendency
from eddyshed.reduce.operators import memory_bytes
from eddyshed.reduce.settings import (
    EofSettings,
    FileSettings,
    FourierSettings,
    LimitsSettings,
    UnresolvedSettings,
)
from eddyshed.reduce.split import SERIES, split_truth, unresolved_series
from eddyshed.solver.errors import DataError
from eddyshed.solver.files import add_scale, add_time, add_variable, new_file
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.record import TruthRecord
from eddyshed.solver.spaces.periodic import Periodic

# Sums of some hundred products of numbers of order one.
ROUND_OFF = 1e-12
STEP, FINE = 2.0, 0.5


@dataclass(frozen=True)
class Driven(Quadratic):
    """A model whose forcing changes in time."""

    def forcing(self, t):
        return self.constant * np.cos(t)


def ocean():
    rng = np.random.default_rng(2)
    space = Periodic((12, 8), (6.0, 4.0))
    source = rng.standard_normal(space.n_real)
    settings = BarotropicSettings(beta=2.0, deformation_radius=0.7, drag=0.3)
    return Barotropic(settings, space, source)


def states_of(size, count=40, seed=1):
    """States of a mean, with variances that fall by a factor of fifty."""
    rng = np.random.default_rng(seed)
    deviations = np.geomspace(1, 0.14, size)
    return rng.standard_normal((count, size)) * deviations + rng.standard_normal(size)


def write(path, states, fine=None, held=()):
    """A record of given states, and of some coordinates at the fine interval."""
    times = 10.0 + STEP * np.arange(len(states))
    with new_file(path, kind="truth", title="Test", attributes={}) as file:
        add_time(file, "time", times)
        add_scale(file, "coordinate", np.arange(states.shape[1]), long_name="index")
        add_variable(file, "state", ("time", "coordinate"), states, long_name="z")
        if fine is not None:
            add_time(file, "resolved_time", 10.0 + FINE * np.arange(len(fine)))
            add_scale(file, "resolved_coordinate", held, long_name="index")
            axes = ("resolved_time", "resolved_coordinate")
            add_variable(file, "resolved", axes, fine, long_name="z")
    return TruthRecord(
        path=path,
        times=times,
        step=STEP,
        size=states.shape[1],
        complete=True,
        steps_done=1,
        steps_total=1,
        config={},
        resolved_times=10.0 + FINE * np.arange(0 if fine is None else len(fine)),
        resolved_coordinates=np.array(held, dtype=int),
    )


def config(resolved, share=1.0):
    return SimpleNamespace(
        resolved=resolved,
        unresolved=UnresolvedSettings(variance=share),
        limits=LimitsSettings(),
    )


LOW = FourierSettings(up_to=1.5)
MODELS = {
    "plain": lambda rng: random_model(rng, 12),
    "weighted": lambda rng: random_model(
        rng, 12, weights=np.diag(rng.uniform(0.3, 3, 12))
    ),
    "dense": lambda rng: random_model(rng, 12, weights=random_weights(rng, 12)),
    "driven": lambda rng: Driven(
        **{
            name: getattr(random_model(rng, 12), name)
            for name in ("constant", "matrix", "tensor", "weights")
        }
    ),
    "ocean": lambda rng: ocean(),
}


@pytest.fixture(params=MODELS)
def case(request, tmp_path):
    """A model, a record, and how it may be divided."""
    model = MODELS[request.param](np.random.default_rng(3))
    record = write(tmp_path / "truth.h5", states_of(model.size))
    return model, record, LOW if request.param == "ocean" else EofSettings(modes=4)


def test_coordinates_are_inner_products(case):
    model, record, resolved = case
    split = split_truth(config(resolved), model, [record])
    states = record.read(0, len(record.times))
    mean = states.mean(axis=0)
    np.testing.assert_allclose(split.mean, mean, atol=ROUND_OFF)
    for found, states_, vectors in (
        (split.x, states - mean, split.resolved.vectors),
        (split.resolved_mean, mean, split.resolved.vectors),
        (
            unresolved_series(split, model, [record]),
            states - mean,
            split.unresolved.vectors,
        ),
    ):
        expected = model.inner(vectors.T, states_[..., np.newaxis, :])
        if found.ndim == 3:  # of the one member
            (found,) = found  # noqa: PLW2901
        # Round-off of products with weights of up to 20.
        np.testing.assert_allclose(found, expected, atol=20 * ROUND_OFF)
    assert (split.step, split.fine_step) == (STEP, STEP)
    assert split.fine_x is split.x


def test_tendencies_are_those_of_the_model(case):
    model, record, resolved = case
    split = split_truth(config(resolved), model, [record])
    states = record.read(0, len(record.times))
    rates = np.array(
        [tendency(model, t, z) for t, z in zip(record.times, states, strict=True)]
    )
    expected = model.inner(split.resolved.vectors.T, rates[:, np.newaxis])
    # Round-off of sums of some hundred products.
    error = np.abs(split.tendency[0] - expected).max()
    assert error < ROUND_OFF * np.abs(expected).max()


@pytest.mark.parametrize("share", [1.0, 0.9, 0.5])
def test_shares_are_of_all_variance(case, share):
    model, record, resolved = case
    split = split_truth(config(resolved, share), model, [record])
    states = record.read(0, len(record.times))
    anomalies = states - states.mean(axis=0)
    y = unresolved_series(split, model, [record])[0]
    kept = split.x[0] @ split.resolved.vectors.T
    noise = y @ split.unresolved.vectors.T

    def variance(parts):
        return model.inner(parts, parts).mean()

    total = variance(anomalies)
    left = variance(anomalies - kept - noise)
    # Round-off of sums of some hundred terms, of the total.
    tolerance = {"rel": ROUND_OFF, "abs": ROUND_OFF * total}
    assert split.total_variance == pytest.approx(total, **tolerance)
    assert split.left_out_variance == pytest.approx(left, **tolerance)
    expected = np.array([variance(kept), variance(noise), left]) / total
    np.testing.assert_allclose(split.shares, expected, atol=ROUND_OFF)
    assert sum(split.shares) == pytest.approx(1.0, abs=ROUND_OFF)
    for series, basis in ((split.x[0], split.resolved), (y, split.unresolved)):
        found = np.mean(series**2, axis=0)
        np.testing.assert_allclose(found, basis.variance, atol=ROUND_OFF * total)
    # As many modes as hold the share, and no more.
    rest = total - variance(kept)
    held = split.unresolved.variance.cumsum() / rest
    assert held[-1] >= share - ROUND_OFF
    spare = 2 if split.unresolved.partners[-1] >= 0 else 1
    assert len(held) <= spare or held[-1 - spare] < share


def test_a_wave_is_not_cut_in_half(tmp_path):
    # At any share, both parts of a wave that turns are noise or neither is.
    model = ocean()
    record = write(tmp_path / "truth.h5", states_of(model.size))
    sizes = set()
    for share in np.linspace(0.02, 1, 80):
        basis = split_truth(config(LOW, share), model, [record]).unresolved
        paired = np.flatnonzero(basis.partners >= 0)
        np.testing.assert_array_equal(basis.partners[basis.partners[paired]], paired)
        waves = model.waves[(basis.vectors != 0).argmax(axis=0)]
        is_turning = waves[:, 0] != 0
        np.testing.assert_array_equal(np.flatnonzero(is_turning), paired)
        sizes.add(basis.n_modes)
    assert len(sizes) > 10


# --- The fine stream --------------------------------------------------------


def fine_record(tmp_path, model, up_to):
    """A record whose fine stream holds the waves up to a wavenumber."""
    states = states_of(model.size)
    held = np.flatnonzero(np.hypot(*model.waves.T) <= up_to)
    fine = states_of(model.size, count=4 * len(states), seed=7)
    fine[::4] = states
    return write(tmp_path / "truth.h5", states, fine[:, held], held), fine


@pytest.mark.parametrize("up_to", [1.5, 2.3])
def test_the_fine_stream_is_used_where_it_holds_the_waves(tmp_path, up_to):
    model = ocean()
    record, fine = fine_record(tmp_path, model, up_to)
    split = split_truth(config(LOW), model, [record])
    assert split.fine_step == FINE
    expected = model.inner(split.resolved.vectors.T, (fine - split.mean)[:, np.newaxis])
    np.testing.assert_allclose(split.fine_x[0], expected, atol=ROUND_OFF)
    # Centred as x is: the two agree where their times do.
    np.testing.assert_allclose(split.fine_x[:, ::4], split.x, atol=ROUND_OFF)
    assert split.step == STEP


def test_the_fine_stream_is_not_used_where_it_lacks_a_wave(tmp_path):
    model = ocean()
    record, _ = fine_record(tmp_path, model, 1.1)
    split = split_truth(config(LOW), model, [record])
    assert split.fine_x is split.x
    assert split.fine_step == STEP


def test_the_fine_stream_serves_no_mixture_of_all_coordinates(tmp_path):
    model = ocean()
    record, _ = fine_record(tmp_path, model, 2.3)
    split = split_truth(config(EofSettings(modes=3)), model, [record])
    assert split.fine_x is split.x
    record, _ = fine_record(tmp_path, model, 100)
    split = split_truth(config(EofSettings(modes=3)), model, [record])
    assert split.fine_step == FINE
    np.testing.assert_allclose(split.fine_x[:, ::4], split.x, atol=ROUND_OFF)


def test_a_single_fine_record_has_no_interval(tmp_path):
    model = ocean()
    states = states_of(model.size)
    held = np.arange(model.size)
    record = write(tmp_path / "truth.h5", states, states[:1], held)
    assert split_truth(config(LOW), model, [record]).fine_step == STEP


# --- Vectors of someone else's ---


@pytest.mark.parametrize("product", ["weighted", "dense", "ocean"])
def test_prescribed_vectors_are_completed_by_the_remainder(tmp_path, product):
    model = MODELS[product](np.random.default_rng(3))
    record = write(tmp_path / "truth.h5", states_of(model.size))
    given = np.random.default_rng(8).standard_normal((model.size, 3))
    with h5py.File(tmp_path / "vectors.h5", "w") as file:
        file["vectors"] = given
    resolved = FileSettings(path=str(tmp_path / "vectors.h5"))
    split = split_truth(config(resolved, 0.6), model, [record])
    states = record.read(0, len(record.times))
    anomalies = states - states.mean(axis=0)
    vectors = split.resolved.vectors
    x = model.inner(vectors.T, anomalies[:, np.newaxis])
    np.testing.assert_allclose(split.x[0], x, atol=20 * ROUND_OFF)
    variance = np.square(x).mean(axis=0)
    np.testing.assert_allclose(split.resolved.variance, variance, rtol=1e-10)
    total = model.inner(anomalies, anomalies).mean()
    assert split.total_variance == pytest.approx(total, rel=1e-12)
    assert sum(split.shares) == pytest.approx(1.0, abs=ROUND_OFF)
    # Six tenths of what the vectors leave, and the mode before would not do.
    rest = total - variance.sum()
    held = split.unresolved.variance.cumsum() / rest
    assert held[-1] >= 0.6 > held[-2]
    both = np.hstack([vectors, split.unresolved.vectors])
    products = model.inner(both.T[:, np.newaxis], both.T)
    np.testing.assert_allclose(products, np.eye(len(products)), atol=ROUND_OFF)


# --- Memory ---


def test_series_that_do_not_fit_are_refused(tmp_path, monkeypatch):
    model = ocean()
    record = write(tmp_path / "truth.h5", states_of(model.size))
    whole = split_truth(config(LOW), model, [record])
    monkeypatch.setattr(memory, "OWN_BYTES", 0)
    # What operators and series of half as many modes take.
    ny = whole.unresolved.n_modes // 2
    limit = 8 * 40 * (2 * whole.resolved.n_modes + SERIES * ny) + memory_bytes(
        model.size, whole.resolved.n_modes, ny, 1
    )
    settings = config(LOW)
    settings.limits = SimpleNamespace(memory=float(limit))
    with pytest.raises(DataError, match="keep less of the variance") as caught:
        split_truth(settings, model, [record])
    (said,) = re.findall(r"variance = ([0-9.]+) would do", str(caught.value))
    settings.unresolved = UnresolvedSettings(variance=float(said))
    some = split_truth(settings, model, [record])
    assert 0 < some.unresolved.n_modes < whole.unresolved.n_modes
    settings.limits = SimpleNamespace(memory=1e3)
    with pytest.raises(DataError, match="record fewer states"):
        split_truth(settings, model, [record])


# --- Long records -----------------------------------------------------------


def test_stretches_do_not_matter(case, monkeypatch):
    # A long truth is read in stretches; here of one, and of seven states.
    model, record, resolved = case
    whole = split_truth(config(resolved, 0.9), model, [record])
    y = unresolved_series(whole, model, [record])
    for states in (1, 7):
        monkeypatch.setattr(memory, "STRETCH_BYTES", states * 8 * model.size)
        parts = split_truth(config(resolved, 0.9), model, [record])
        for name in ("mean", "x", "tendency", "resolved_mean"):
            one, other = getattr(whole, name), getattr(parts, name)
            # Sums of another order, and functions that err as they did.
            np.testing.assert_allclose(other, one, atol=1e-10 * np.abs(one).max())
        found = unresolved_series(parts, model, [record])
        np.testing.assert_allclose(found, y, atol=1e-10)


# --- Members ----------------------------------------------------------------


def test_members_are_divided_as_one_truth(case, tmp_path):
    # Two halves as members: the same mean, modes and coordinates as the whole.
    model, record, resolved = case
    states = record.read(0, len(record.times))
    half = len(states) // 2
    members = [
        write(tmp_path / f"{k}.h5", states[k * half : (k + 1) * half]) for k in range(2)
    ]
    whole = write(tmp_path / "whole.h5", states[: 2 * half])
    one = split_truth(config(resolved, 0.9), model, [whole])
    two = split_truth(config(resolved, 0.9), model, members)
    assert two.x.shape == (2, half, one.resolved.n_modes)
    assert two.length == one.length == 2 * half * STEP
    for name in ("mean", "resolved_mean", "total_variance"):
        expected = getattr(one, name)
        # Sums of another order, and functions that err as they did.
        np.testing.assert_allclose(getattr(two, name), expected, atol=1e-10)
    y = unresolved_series(two, model, members)
    for found, expected in (
        (two.x, one.x),
        (two.fine_x, one.fine_x),
        (y, unresolved_series(one, model, [whole])),
    ):
        np.testing.assert_allclose(
            np.concatenate(found), expected[0], atol=1e-10 * np.abs(expected).max()
        )
