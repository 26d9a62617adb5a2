"""Shapes of the bottom: what they are in each space, and what does not fit."""

import h5py
import numpy as np
import pytest

from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.errors import ConfigError, DataError
from eddyshed.solver.settings import TruthConfig
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.topography import Bump, HeightFile, Ridge, Waves, heights

BOX = (1000e3, 800e3)
SPACES = {"periodic": Periodic, "channel": Channel, "basin": Basin}


def field_of(space, **shapes):
    return space.to_grid(heights(space, shapes))


@pytest.mark.parametrize("name", SPACES)
def test_a_bump_is_a_gaussian(name):
    space = SPACES[name]((48, 48), BOX)
    bump = Bump(height=300.0, radius=60e3, centre=(450e3, 410e3))
    x, y = np.meshgrid(*space.grid_axes)
    expected = 300.0 * np.exp(-((x - 450e3) ** 2 + (y - 410e3) ** 2) / (2 * 60e3**2))
    found = field_of(space, hill=bump)
    if name == "periodic":
        # Only departures from the mean depth are felt: that of a Gaussian is its
        # volume, 2 pi radius^2 height, over the area.
        expected -= 2 * np.pi * 60e3**2 * 300.0 / (BOX[0] * BOX[1])
    # Beyond the cutoff a Gaussian of this radius has exp(-(k r)^2 / 2), under 1e-3
    # of its height for 15 waves; at walls five radii away, 1e-5.
    np.testing.assert_allclose(found, expected, atol=0.3)


def test_a_bump_near_the_edge_of_a_periodic_box_continues_beyond():
    space = Periodic((48, 48), BOX)
    x, y = space.grid_axes
    shapes = [
        Bump(height=300.0, radius=60e3, centre=(place, y[24])) for place in (0.0, x[24])
    ]
    edge, middle = (field_of(space, hill=shape) for shape in shapes)
    np.testing.assert_allclose(np.roll(edge, 24, axis=1), middle, atol=1e-9)


def test_a_ridge_runs_to_the_walls_and_is_tapered():
    ridge = Ridge(height=500.0, width=80e3, position=600e3)
    periodic, channel = Periodic((32, 32), BOX), Channel((32, 32), BOX)
    flat = field_of(periodic, ridge=ridge)
    np.testing.assert_allclose(flat, flat[:1].repeat(32, axis=0), atol=1e-9)
    tapered = field_of(channel, ridge=ridge)
    x, y = channel.grid_axes
    profile = 500.0 * np.exp(-((x - 600e3) ** 2) / (2 * 80e3**2))
    expected = np.sin(np.pi * y / BOX[1])[:, np.newaxis] * profile
    # Ten waves kept: exp(-(k r)^2 / 2) of a Gaussian is 3e-6 there.
    np.testing.assert_allclose(tapered, expected, atol=0.5)


def test_a_ridge_along_x():
    space = Channel((16, 64), BOX)
    ridge = Ridge(height=-200.0, width=40e3, position=400e3, along="x")
    y = space.grid_axes[1]
    expected = -200.0 * np.exp(-((y - 400e3) ** 2) / (2 * 40e3**2))
    found = field_of(space, trench=ridge)
    np.testing.assert_allclose(found, expected[:, np.newaxis].repeat(16, 1), atol=0.1)


def test_shapes_add_up_and_waves_are_waves():
    space = Channel((16, 16), BOX)
    shapes = {
        "a": Waves(height=100.0, waves=(2, 1), phase=0.3),
        "b": Waves(height=-50.0, waves=(0, 3)),
    }
    found = heights(space, shapes)
    expected = 100.0 * space.wave((2, 1), 0.3) - 50.0 * space.wave((0, 3))
    np.testing.assert_array_equal(found, expected)


@pytest.mark.parametrize("suffix", [".npy", ".h5"])
def test_heights_from_a_file(tmp_path, suffix):
    space = Basin((32, 24), BOX)
    x, y = np.meshgrid(*space.grid_axes)
    field = 80 * np.sin(np.pi * x / BOX[0]) * np.sin(2 * np.pi * y / BOX[1])
    path = tmp_path / f"bottom{suffix}"
    if suffix == ".npy":
        np.save(path, field)
    else:
        with h5py.File(path, "w") as file:
            file["height"] = field
    found = heights(space, {"real": HeightFile(path=str(path))})
    np.testing.assert_allclose(found, 80 * space.wave((1, 2)), atol=1e-11)


@pytest.mark.parametrize(
    ("name", "shape", "text"),
    [
        (
            "basin",
            Bump(height=100.0, radius=100e3, centre=(50e3, 400e3)),
            "rms height is lost .* zero at the walls",
        ),
        (
            "periodic",
            Bump(height=100.0, radius=5e3, centre=(50e3, 400e3)),
            "make it smoother or take more points$",
        ),
        (
            "periodic",
            Bump(height=100.0, radius=50e3, centre=(50e3, 900e3)),
            "y = 900000 m, outside the box",
        ),
        ("periodic", Waves(height=1.0, waves=(0, 30)), "beyond the modes"),
        ("basin", Ridge(height=1.0, width=100e3, position=0.0), "a ridge of width"),
    ],
)
def test_what_does_not_fit_is_refused(name, shape, text):
    space = SPACES[name]((32, 32), BOX)
    with pytest.raises(DataError, match=text) as caught:
        heights(space, {"thing": shape})
    assert str(caught.value).startswith("[ocean.topography.thing] ")


def test_a_file_that_cannot_be_used_is_refused(tmp_path):
    space = Periodic((16, 16), BOX)

    def refused(path, text):
        with pytest.raises(DataError, match=text):
            heights(space, {"real": HeightFile(path=str(path))})

    refused(tmp_path / "absent.npy", "cannot be read as a NumPy array")
    np.save(tmp_path / "small.npy", np.zeros((8, 16)))
    refused(tmp_path / "small.npy", r"shape \(16, 16\) \(y, x\) are needed")
    np.save(tmp_path / "gap.npy", np.full((16, 16), np.nan))
    refused(tmp_path / "gap.npy", "not finite")
    with h5py.File(tmp_path / "other.h5", "w") as file:
        file["depth"] = np.zeros((16, 16))
    refused(tmp_path / "other.h5", 'no variable "height"; found: depth')
    rough = np.random.default_rng(0).standard_normal((16, 16))
    np.save(tmp_path / "rough.npy", rough)
    refused(tmp_path / "rough.npy", "make it smoother")


CONFIG = """
name = "ridge"
[grid]
space = "channel"
points = [32, 16]
lengths = ["2000 km", "1000 km"]
[ocean]
kind = "barotropic"
beta = "2e-11 m-1 s-1"
drag = "0.01 1/d"
hyperviscosity_time = "6 h"
mean_current = "0.1 m/s"
coriolis = "1e-4 s-1"
depth = "4 km"
[ocean.topography.ridge]
kind = "ridge"
height = "400 m"
width = "150 km"
position = "1000 km"
[time]
step = "2 h"
spin_up = "0 d"
duration = "10 d"
[output]
state_every = "1 d"
"""


def test_a_config_with_topography():
    model = build_ocean(parse_config(CONFIG, TruthConfig, "ridge.toml").config)
    # h = f height / depth: 1e-4 * 400 / 4000, at most.
    top = model.space.to_grid(model.topography).max()
    assert top == pytest.approx(1e-5, rel=0.02)  # between the points of the grid
    assert model.budget(0.0, np.zeros(model.size))["form_drag"] == 0.0


def test_topography_without_a_depth_is_refused():
    text = CONFIG.replace('depth = "4 km"\n', "").replace("coriolis", "# coriolis")
    with pytest.raises(ConfigError) as caught:
        parse_config(text, TruthConfig, "ridge.toml")
    assert "coriolis is missing: with topography" in str(caught.value)
    assert "depth is missing: with topography" in str(caught.value)
