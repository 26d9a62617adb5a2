"""The two-layer ocean as a config asks for it."""

import numpy as np
import pytest

from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.errors import ConfigError, DataError
from eddyshed.solver.resolution import unresolved_lengths
from eddyshed.solver.settings import TruthConfig

CONFIG = """
name = "layers"
[grid]
space = "periodic"
points = [16, 16]
lengths = ["900 km", "600 km"]
[ocean]
kind = "two_layer"
upper_depth = "800 m"
lower_depth = "3200 m"
deformation_radius = "60 km"
upper_current = "0.2 m/s"
drag = "0.05 1/d"
[forcing.wind]
kind = "wave"
amplitude = "1e-13 s-2"
waves = [0, 1]
[time]
step = "0.1 d"
spin_up = "1 d"
duration = "2 d"
[output]
state_every = "1 d"
"""


def built(*overrides):
    return build_ocean(parse_config(CONFIG, TruthConfig, "test", overrides).config)


@pytest.mark.parametrize("space", ["periodic", "channel"])
def test_config_to_ocean(space):
    ocean = built(f"grid.space={space}")
    assert ocean.size == 2 * ocean.space.n_real == len(ocean.labels) == len(ocean.waves)
    assert ocean.labels[0] == f"barotropic {ocean.space.labels[0]}"
    assert ocean.labels[-1] == f"baroclinic {ocean.space.labels[-1]}"
    half = ocean.space.n_real
    upper = ocean.partners[:half], ocean.partners[half:]
    np.testing.assert_array_equal(upper[0], ocean.space.partners)
    paired = upper[0] >= 0
    np.testing.assert_array_equal(upper[1][paired], upper[0][paired] + half)
    assert np.all(upper[1][~paired] == -1)


def test_a_basin_is_refused():
    with pytest.raises(DataError, match=r"two_layer.*periodic.*channel"):
        built("grid.space=basin", "forcing.wind.waves=[1, 1]")


def test_bad_settings_are_all_told():
    overrides = (
        "ocean.upper_depth=0 m",
        "ocean.deformation_radius=inf",
        "ocean.drag=-1 1/d",
        "ocean.hyperviscosity_order=7",
        "ocean.lower_current=3 m",
    )
    with pytest.raises(ConfigError) as caught:
        built(*overrides)
    keys = [override.split("=")[0].split(".")[1] for override in overrides]
    problems = caught.value.args[1]
    assert len(problems) == len(keys)
    for key, problem in zip(sorted(keys), sorted(problems), strict=True):
        assert key in problem


def test_scales():
    scales = {name: value for name, value, _ in built().scales()}
    # F1 = h2 / Ld^2 and F2 = h1 / Ld^2 with h = (1/5, 4/5), as sqrt(g' H_i) / f0.
    radius = 60e3
    assert scales["baroclinic deformation radius"] == radius
    upper = scales["deformation radius of the upper layer"]
    assert upper == pytest.approx(radius / np.sqrt(0.8), rel=1e-14)
    lower = scales["deformation radius of the lower layer"]
    assert lower == pytest.approx(radius / np.sqrt(0.2), rel=1e-14)
    # The waves of a box are some of all waves: none of them grows faster.
    fastest = scales["e-folding time of the most unstable wave"]
    assert scales["e-folding time of the fastest growing wave kept"] >= fastest
    # Growth ends below K^4 = 4 F1 F2 without beta (Pedlosky 1987, chapter 7); drag
    # only shifts it, so the most unstable wave is longer than that.
    shortest = 2 * np.pi * radius / (4 * 0.8 * 0.2) ** 0.25
    assert scales["most unstable wavelength"] > shortest


def test_no_growth_without_shear():
    names = [name for name, *_ in built("ocean.upper_current=0 m/s").scales()]
    assert not [name for name in names if "unstable" in name or "growing" in name]


def test_a_coarse_grid_is_told():
    fine = built("grid.points=[32, 32]")
    assert not list(unresolved_lengths(fine.scales()))
    coarse = built("ocean.deformation_radius=10 km")
    warned = " ".join(unresolved_lengths(coarse.scales()))
    assert "baroclinic deformation radius" in warned
    assert "most unstable wavelength" in warned


def test_scales_and_speed_of_a_flow():
    ocean = built()
    x, y = ocean.space.grid_axes
    k = 2 * np.pi / 900e3
    wave = np.sin(k * x)[None, :] + 0 * y[:, None]
    upper, lower = (ocean.space.to_modes(a * wave) for a in (3e4, 1e4))
    z = ocean.coordinates(upper, lower)
    scales = {name: value for name, value, _ in ocean.scales(z)}
    # v = k psi cos(kx), whose mean square is half the square of its largest value.
    speed = 3e4 * k
    found = scales["rms eddy speed in the upper layer"]
    assert found == pytest.approx(speed / np.sqrt(2), rel=1e-12)
    assert ocean.largest_speed(z) == pytest.approx(speed * 16 / 600e3, rel=1e-12)
    fields = ocean.fields(z)
    assert set(fields) == set(ocean.field_units)
    np.testing.assert_allclose(fields["lower_streamfunction"], 1e4 * wave, atol=1e-8)
    np.testing.assert_allclose(
        fields["upper_vorticity"], -(k**2) * 3e4 * wave, atol=1e-16
    )
