"""Modes that hold averages over boxes: exact, least in energy, and told apart."""

import re

import numpy as np
import pytest

from eddyshed.reduce.bases.boxes import boxes_basis
from eddyshed.reduce.bases.eof import remainder_basis
from eddyshed.reduce.settings import BoxesSettings
from eddyshed.solver.boxes import BoxSettings, box_averages
from eddyshed.solver.errors import DataError
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.oceans.boussinesq import Boussinesq
from eddyshed.solver.oceans.boussinesq_waves import BoussinesqSettings
from eddyshed.solver.oceans.two_layer import TwoLayer, TwoLayerSettings
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic

# Sums of some hundred products of numbers of order one.
ROUND_OFF = 1e-12
LENGTHS = (8.0, 6.0)


def barotropic(space=Periodic, points=(12, 10)):
    return Barotropic(
        BarotropicSettings(deformation_radius=2.0), space(points, LENGTHS)
    )


def two_layer():
    settings = TwoLayerSettings(
        upper_depth=1.0, lower_depth=3.0, deformation_radius=0.7
    )
    return TwoLayer(settings, Channel((10, 8), LENGTHS))


def slice_():
    return Boussinesq(
        BoussinesqSettings(buoyancy_gradient=2.0), Channel((10, 8), LENGTHS)
    )


def box(field, x=None, **other):
    return BoxSettings(field=field, x=x, **other)


CASES = {
    "barotropic": (
        barotropic,
        {
            "west": box("streamfunction", (0.0, 3.0), y=(1.0, 2.0)),
            "current": box("eastward_velocity", y=(2.0, 4.0)),
            "around": box("streamfunction", (7.0, 1.0), y=(2.0, 5.0)),
        },
    ),
    "basin": (
        lambda: barotropic(Basin),
        {
            "gyre": box("streamfunction"),
            "spin": box("vorticity", (0.0, 2.0), y=(0.0, 3.0)),
        },
    ),
    "two layers": (
        two_layer,
        {
            "above": box("upper_northward_velocity", (0.0, 2.0)),
            "below": box("lower_potential_vorticity", (1.0, 5.0), y=(1.0, 3.0)),
        },
    ),
    "slice": (
        slice_,
        {
            "heat": box("buoyancy", (1.0, 3.0), z=(0.0, 2.0)),
            "flow": box("upward_velocity", (1.0, 3.0), z=(0.0, 2.0)),
        },
    ),
}


@pytest.fixture(params=CASES)
def case(request):
    make, boxes = CASES[request.param]
    return make(), boxes, boxes_basis(BoxesSettings(boxes=boxes), make())


def test_modes_are_orthonormal_and_hold_the_averages(case):
    model, boxes, basis = case
    vectors = basis.vectors
    products = model.inner(vectors.T[:, np.newaxis], vectors.T)
    np.testing.assert_allclose(products, np.eye(len(boxes)), atol=ROUND_OFF)
    assert basis.labels == tuple(boxes)
    assert basis.measured.labels == tuple(boxes)
    # The average of any state is that of its resolved part.
    rng = np.random.default_rng(1)
    z = rng.standard_normal((20, model.size))
    x = model.inner(vectors.T, z[:, np.newaxis])
    held = x @ basis.measured.matrix.T
    rows = box_averages(model, boxes).rows
    scale = np.abs(rows).sum(axis=1)
    np.testing.assert_allclose(held / scale, z @ rows.T / scale, atol=ROUND_OFF)
    np.testing.assert_allclose(
        (x @ vectors.T) @ rows.T / scale, z @ rows.T / scale, atol=ROUND_OFF
    )


def test_resolved_states_have_the_least_energy(case):
    """Riesz: of all states with given averages, that in their span is the smallest."""
    model, boxes, basis = case
    wanted = np.random.default_rng(2).standard_normal(len(boxes))
    x = np.linalg.solve(basis.measured.matrix, wanted)
    found = basis.vectors @ x
    # By the calculus of variations, with the inner product as a matrix: minimise
    # z.W z / 2 - lambda.(R z - a).
    rows, n = box_averages(model, boxes).rows, model.size
    weights = model.inner(np.eye(n)[:, np.newaxis], np.eye(n))
    scale = np.abs(rows).max(axis=1, keepdims=True)
    rows, wanted = rows / scale, wanted / scale[:, 0]
    k = len(rows)
    system = np.block([[weights, rows.T], [rows, np.zeros((k, k))]])
    expected = np.linalg.solve(system, np.append(np.zeros(n), wanted))[:n]
    # The system's condition is some thousands.
    np.testing.assert_allclose(found, expected, atol=1e-9 * np.abs(expected).max())


@pytest.mark.parametrize(
    ("m", "mean"),
    # sin(pi m / 8) / (pi m / 8).
    [
        (1, 0.974495358404),
        (2, 0.900316316157),
        (3, 0.784213303577),
        (4, 0.636619772368),
    ],
)
def test_a_box_dampens_waves_as_its_transfer_function_says(m, mean):
    """Average of cos over an eighth of its box: the cardinal sine (any textbook)."""
    model = barotropic(points=(16, 4))
    one = {"eighth": box("streamfunction", (0.0, 1.0))}
    basis = boxes_basis(BoxesSettings(boxes=one), model)
    x, _ = model.space.grid_axes
    # A crest in the middle of the box, and no mean over y but that of one.
    field = np.cos(2 * np.pi * m * (x - 0.5) / 8) * np.ones((4, 1))
    z = model.coordinates(model.space.to_modes(field))
    found = basis.measured.matrix @ model.inner(basis.vectors.T, z)
    np.testing.assert_allclose(found, mean, atol=1e-12)
    assert basis.measured.units == ("m2 s-1",)


def test_overlapping_boxes_are_named():
    boxes = {
        "one": box("streamfunction", (0.0, 3.0), y=(1.0, 3.0)),
        "two": box("streamfunction", (7.0, 1.0), y=(2.0, 5.0)),
        "three": box("vorticity", (0.0, 3.0), y=(1.0, 3.0)),
    }
    words = "[resolved.boxes.one] and [resolved.boxes.two] overlap"
    with pytest.raises(DataError, match=re.escape(words)):
        boxes_basis(BoxesSettings(boxes=boxes), barotropic())
    # Of another field, or with an edge in common: allowed.
    boxes["two"] = box("streamfunction", (3.0, 8.0), y=(2.0, 5.0))
    assert boxes_basis(BoxesSettings(boxes=boxes), barotropic()).n_modes == 3


def test_dependent_boxes_are_named():
    quarters = {
        f"q{k}": box("streamfunction", (2.0 * k, 2.0 * k + 2), y=(1.0, 2.0))
        for k in range(4)
    }
    zonal = {"all round": box("eastward_velocity", y=(0.0, 3.0))}
    other = {"the rest": box("eastward_velocity", y=(3.0, 6.0))}
    both = zonal | other
    # No net transport through the whole width: one is minus the other.
    words = "[resolved.boxes.the rest] is a combination of [resolved.boxes.all round]"
    with pytest.raises(DataError, match=re.escape(words)):
        boxes_basis(BoxesSettings(boxes=both), barotropic())
    assert boxes_basis(BoxesSettings(boxes=quarters), barotropic()).n_modes == 4
    # Twelve points keep three waves along x: seven independent averages at most.
    strips = {
        f"s{k}": box("streamfunction", (k, k + 0.5), y=(0.5, 3.5)) for k in range(8)
    }
    with pytest.raises(DataError, match=r"\[resolved.boxes.s7\] is a combination of"):
        boxes_basis(BoxesSettings(boxes=strips), barotropic(points=(10, 4)))


def test_an_average_that_is_always_zero_is_refused():
    nothing = {
        "some": box("streamfunction", (0.0, 1.0)),
        "all": box("vorticity"),
    }
    words = "[resolved.boxes.all]: the average is zero whatever the flow does"
    with pytest.raises(DataError, match=re.escape(words)):
        boxes_basis(BoxesSettings(boxes=nothing), barotropic())


class Record:
    """A truth in memory."""

    def __init__(self, states):
        self.states = states
        self.times = np.arange(len(states))
        self.size = states.shape[1]

    def read(self, start, stop):
        return self.states[start:stop].copy()


@pytest.mark.parametrize("count", [300, 30])
def test_the_remainder_completes_the_modes(case, count):
    model, boxes, basis = case
    rng = np.random.default_rng(3)
    deviations = np.geomspace(1, 0.1, model.size)
    states = rng.standard_normal((count, model.size)) * deviations + 1
    mean = states.mean(axis=0)
    how = {"share": 1.0, "memory": 4e9}
    rest = remainder_basis(basis.vectors, model, [Record(states)], mean, **how)
    vectors = np.hstack([basis.vectors, rest.vectors])
    products = model.inner(vectors.T[:, np.newaxis], vectors.T)
    np.testing.assert_allclose(products, np.eye(len(products)), atol=ROUND_OFF)
    assert rest.n_modes == min(model.size - len(boxes), count - 1)
    # Together they hold every state.
    anomalies = states - mean
    series = model.inner(vectors.T, anomalies[:, np.newaxis])
    np.testing.assert_allclose(series @ vectors.T, anomalies, atol=1e-11)
    y = series[:, len(boxes) :]
    # Uncorrelated among themselves, and as strong as they are said to be.
    covariance = y.T @ y / count
    np.testing.assert_allclose(covariance, np.diag(rest.variance), atol=ROUND_OFF)
    some = remainder_basis(
        basis.vectors, model, [Record(states)], mean, share=0.5, memory=4e9
    )
    held = rest.variance.cumsum() / rest.variance.sum()
    assert some.n_modes == np.searchsorted(held, 0.5) + 1
