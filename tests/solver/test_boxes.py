"""Box averages against quadrature of the fields, written out as functions."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import dblquad
from slices import Functions, functions

from eddyshed.solver.boxes import BoxSettings, box_averages
from eddyshed.solver.errors import DataError
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.oceans.boussinesq import Boussinesq
from eddyshed.solver.oceans.boussinesq_waves import BoussinesqSettings
from eddyshed.solver.oceans.two_layer import TwoLayer, TwoLayerSettings
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic

POINTS, LENGTHS = (12, 10), (300e3, 170e3)
# Of the fields that are not drawn on the grid.
UNITS = {
    f"{layer}{name}": unit
    for layer in ("", "upper_", "lower_")
    for name, unit in (
        ("potential_vorticity", "s-1"),
        ("eastward_velocity", "m s-1"),
        ("northward_velocity", "m s-1"),
        ("upward_velocity", "m s-1"),
    )
}
SPACES = {"periodic": Periodic, "channel": Channel, "basin": Basin}


def ocean_of(kind, space_name):
    space = SPACES[space_name](POINTS, LENGTHS)
    if kind == "barotropic":
        settings_ = BarotropicSettings(beta=2e-11, deformation_radius=60e3)
        return Barotropic(settings_, space)
    if kind == "two_layer":
        return TwoLayer(
            TwoLayerSettings(
                upper_depth=500.0, lower_depth=1500.0, deformation_radius=40e3
            ),
            space,
        )
    coriolis = 1e-4 if kind == "rotating slice" else 0.0
    return Boussinesq(
        BoussinesqSettings(buoyancy_gradient=1e-5, coriolis=coriolis), space
    )


OCEANS = [
    *(("barotropic", space) for space in SPACES),
    *(("two_layer", space) for space in ("periodic", "channel")),
    *(("slice", space) for space in ("periodic", "channel")),
    ("rotating slice", "periodic"),
]


def written_out(space_name, space, x, y):
    """All functions of a space at points, by what a wave and a sine are."""
    if space_name != "basin":
        return functions(space, space_name == "channel", x, y, np.ones(len(x)))
    (cx, cy), (lx, ly) = space.cutoff, space.lengths
    k, m = (
        a.ravel()
        for a in np.meshgrid(
            np.pi / lx * np.arange(1, cx + 1), np.pi / ly * np.arange(1, cy + 1)
        )
    )
    x, y = x[:, np.newaxis], y[:, np.newaxis]
    return Functions(
        np.sin(k * x) * np.sin(m * y),
        k * np.cos(k * x) * np.sin(m * y),
        m * np.sin(k * x) * np.cos(m * y),
        np.ones(len(x)),
    )


class Pointwise:
    """Fields of a state anywhere, from what the ocean gives on its grid."""

    def __init__(self, ocean, space_name, z):
        self.space, self.space_name, self.ocean = ocean.space, space_name, ocean
        x, y = np.meshgrid(*ocean.space.grid_axes)
        at_grid = written_out(space_name, self.space, x.ravel(), y.ravel()).value
        self.amplitudes = {
            name: np.linalg.lstsq(at_grid, field.ravel(), rcond=None)[0]
            for name, field in ocean.fields(z).items()
        }

    def __call__(self, name, x, y):
        known = written_out(self.space_name, self.space, x, y)
        for layer in ("", "upper_", "lower_"):
            psi = f"{layer}streamfunction"
            if name == f"{layer}eastward_velocity":
                return -known.y @ self.amplitudes[psi]
            if name in (f"{layer}northward_velocity", f"{layer}upward_velocity"):
                return known.x @ self.amplitudes[psi]
            if name == f"{layer}potential_vorticity":
                return known.value @ self.potential_vorticity(layer)
        return known.value @ self.amplitudes[name]

    def potential_vorticity(self, layer):
        """Pedlosky (1987), sections 3.12 and 6.16, written out once more."""
        of = self.amplitudes
        if not layer:
            radius = self.ocean.settings.deformation_radius
            return of["vorticity"] - of["streamfunction"] / radius**2
        settings_ = self.ocean.settings
        own, other = settings_.upper_depth, settings_.lower_depth
        psi, facing = of["upper_streamfunction"], of["lower_streamfunction"]
        if layer == "lower_":
            own, other, psi, facing = other, own, facing, psi
        # f0^2 / g' from Ld^2 = g' H1 H2 / (H1 + H2) / f0^2, then over H_i.
        coupling = other / (own + other) / settings_.deformation_radius**2
        return of[f"{layer}vorticity"] + coupling * (facing - psi)


def by_quadrature(field, x, y):
    # 40 nodes for at most 2 * 7 half waves: exact to round-off (Gauss-Legendre).
    nodes, weights = np.polynomial.legendre.leggauss(40)
    at = [a + (b - a) * (nodes + 1) / 2 for a, b in (x, y)]
    xs, ys = (part.ravel() for part in np.meshgrid(*at))
    return field(xs, ys) @ np.outer(weights, weights).ravel() / 4


def box_of(ocean, field, x, y):
    second = "z" if hasattr(ocean, "directions") else "y"
    return BoxSettings(field=field, x=x, **{second: y})


RECTANGLES = [
    ((30e3, 170e3), (20e3, 90e3)),
    ((0.0, 300e3), (100e3, 170e3)),
    ((299e3, 300e3), (0.0, 170e3)),
]


@pytest.mark.parametrize(("kind", "space"), OCEANS)
def test_every_field_of_every_ocean_against_quadrature(kind, space):
    ocean = ocean_of(kind, space)
    z = np.random.default_rng(8).standard_normal(ocean.size)
    field = Pointwise(ocean, space, z)
    rectangles = list(RECTANGLES)
    if ocean.space.x_is_periodic:
        rectangles.append(((250e3, 40e3), (20e3, 90e3)))
    if ocean.space.y_is_periodic:
        rectangles.append(((250e3, 40e3), (160e3, 10e3)))
    for name in ocean.linear_fields:
        boxes = {
            f"box {i}": box_of(ocean, name, *sides)
            for i, sides in enumerate(rectangles)
        }
        averages = box_averages(ocean, boxes)
        expected = [
            by_quadrature(
                lambda a, b, n=name: field(n, a, b),
                *[
                    (a, b if b > a else b + length)
                    for (a, b), length in zip(sides, LENGTHS, strict=True)
                ],
            )
            for sides in rectangles
        ]
        # Round-off of the sum over the state; the thinnest rectangle, a 300th of
        # the box wide, costs the difference of two lines two digits more.
        x, y = (part.ravel() for part in np.meshgrid(*ocean.space.grid_axes))
        size = np.sqrt(np.mean(field(name, x, y) ** 2))
        np.testing.assert_allclose(
            averages.rows @ z, expected, rtol=0, atol=1e-12 * size, err_msg=name
        )
        assert set(averages.units) == {ocean.field_units.get(name, UNITS.get(name))}


def test_an_adaptive_quadrature_agrees():
    ocean = ocean_of("slice", "channel")
    z = np.random.default_rng(9).standard_normal(ocean.size)
    field = Pointwise(ocean, "channel", z)
    (x0, x1), (z0, z1) = (120e3, 180e3), (0.0, 80e3)
    box = BoxSettings(field="buoyancy", x=(x0, x1), z=(z0, z1))
    found = box_averages(ocean, {"deep": box})
    total, _ = dblquad(
        lambda up, along: field("buoyancy", np.array([along]), np.array([up]))[0],
        *(x0, x1, z0, z1),
        epsabs=0,
        epsrel=1e-11,
    )
    expected = total / (x1 - x0) / (z1 - z0)
    # What the quadrature was asked for, ten times over.
    np.testing.assert_allclose(found.rows @ z, [expected], rtol=1e-10)
    assert found.units == ("m s-2",)
    assert found.long_names == (
        "mean buoyancy over x 120 km to 180 km, z 0 m to 80 km",
    )


@pytest.mark.parametrize("kind", ["barotropic", "two_layer", "rotating slice"])
def test_the_whole_periodic_box_has_no_mean(kind):
    ocean = ocean_of(kind, "periodic")
    z = np.random.default_rng(4).standard_normal(ocean.size)
    boxes = {name: BoxSettings(field=name) for name in ocean.linear_fields}
    found = box_averages(ocean, boxes)
    part = {name: box_of(ocean, name, (0.0, 100e3), (0.0, 60e3)) for name in boxes}
    size = np.abs(box_averages(ocean, part).rows) @ np.abs(z)
    # Round-off of phases up to 2 pi times the cutoff, in both directions.
    assert np.all(np.abs(found.rows @ z) < 1e-14 * size)
    assert all("whole box" in text for text in found.long_names)


def test_a_sine_between_walls_has_the_mean_of_the_handbook():
    # The mean of sin(pi s) over 0 to 1 is 2 / pi; sin(pi x) sin(pi y) its square.
    ocean = ocean_of("barotropic", "basin")
    z = ocean.coordinates(ocean.space.wave((1, 1)))
    found = box_averages(ocean, {"all": BoxSettings(field="streamfunction")})
    np.testing.assert_allclose(found.rows @ z, [(2 / np.pi) ** 2], rtol=1e-14)


@settings(deadline=None, max_examples=25)
@given(
    start=st.floats(0, 0.99),
    width=st.floats(0.05, 1),
    cut=st.floats(0.1, 0.9),
    below=st.floats(0, 0.4),
)
def test_averages_of_two_parts_make_that_of_the_whole(start, width, cut, below):
    ocean = ocean_of("two_layer", "channel")
    z = np.random.default_rng(3).standard_normal(ocean.size)
    marks = [
        LENGTHS[0] * (at % 1) for at in (start, start + cut * width, start + width)
    ]
    y = (below * LENGTHS[1], 0.8 * LENGTHS[1])
    for name in ocean.linear_fields:
        boxes = {
            part: BoxSettings(field=name, x=(marks[i], marks[j]), y=y)
            for part, i, j in (("west", 0, 1), ("east", 1, 2), ("all", 0, 2))
        }
        if marks[0] == marks[2]:  # all the way around, to round-off
            boxes["all"] = BoxSettings(field=name, y=y)
        rows = box_averages(ocean, boxes).rows
        west, east, whole = rows @ z
        size = np.abs(rows).max(axis=0) @ np.abs(z)
        # Lines a two-hundredth of the box apart cost a difference two digits.
        assert abs(cut * west + (1 - cut) * east - whole) < 1e-12 * size


def test_every_problem_is_named_at_once():
    ocean = ocean_of("barotropic", "channel")
    boxes = {
        "typo": BoxSettings(field="vorticty"),
        "far": BoxSettings(field="vorticity", x=(10e3, 400e3)),
        "backwards": BoxSettings(field="vorticity", y=(50e3, 10e3)),
        "empty": BoxSettings(field="vorticity", x=(10e3, 10e3)),
        "edge": BoxSettings(field="vorticity", x=(300e3, 0.0)),
        "up": BoxSettings(field="vorticity", z=(0.0, 10e3)),
    }
    with pytest.raises(DataError) as caught:
        box_averages(ocean, boxes)
    lines = str(caught.value).splitlines()
    assert len(lines) == len(boxes)
    for line, name, words in zip(
        lines,
        boxes,
        (
            'did you mean "vorticity"',
            "beyond the box, 0 to 300 km",
            "runs backwards, and y does not repeat",
            "is empty",
            "the same edge",
            "directions of this ocean are x and y",
        ),
        strict=True,
    ):
        assert line.startswith(f"[output.boxes.{name}]")
        assert words in line
    assert "streamfunction, vorticity, eastward_velocity" in lines[0]


def test_a_slice_wants_z_and_has_buoyancy():
    ocean = ocean_of("slice", "channel")
    with pytest.raises(DataError, match="give z"):
        box_averages(ocean, {"a": BoxSettings(field="buoyancy", y=(0.0, 1e3))})
    with pytest.raises(DataError, match="not a field of this ocean"):
        box_averages(ocean, {"a": BoxSettings(field="cross_velocity")})


def test_no_boxes_are_no_rows():
    ocean = ocean_of("slice", "channel")
    assert box_averages(ocean, {}).rows.shape == (0, ocean.size)
