"""The stream of box averages: its cadence, its values, and what readers see."""

import numpy as np
import pytest
import xarray
from tiny_truth import TEXT, config_of

from eddyshed.solver.boxes import box_averages
from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.errors import ConfigError, DataError
from eddyshed.solver.record import open_record
from eddyshed.solver.segments import member_paths
from eddyshed.solver.settings import TruthConfig
from eddyshed.solver.truth import run_member

SLICE = """
name = "slice"
[grid]
space = "channel"
points = [16, 16]
lengths = ["200 km", "200 m"]
[ocean]
kind = "boussinesq"
buoyancy_gradient = "1e-5 s-2"
viscosity = "0.01 m2/s"
diffusivity = "0.01 m2/s"
[initial]
kind = "noise"
energy = "1e-5 m2/s2"
band = [1, 3]
[time]
step = "60 s"
spin_up = "0 s"
duration = "1 h"
[output]
state_every = "10 min"
[output.boxes.deep]
field = "buoyancy"
x = ["120 km", "180 km"]
z = ["0 m", "80 m"]
"""


def without_boxes():
    head, _, _ = TEXT.partition("[output.boxes")
    return head.replace('boxes_every = "0.5 d"\n', "")


def parsed(text, *overrides):
    return parse_config(text, TruthConfig, "tiny.toml", overrides).config


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    folder = tmp_path_factory.mktemp("boxes")
    assert run_member(config_of(), 0, folder)
    return member_paths(folder, 0)[0]


def test_the_averages_are_those_of_the_states(run):
    record, config = open_record(run), config_of()
    found = record.read_boxes()
    assert list(found) == ["gyre", "jet"]
    # 40 days from day 5 on, both ends included, whatever the segments.
    np.testing.assert_allclose(
        record.boxes_times, 86400 * np.arange(5, 45.2, 0.5), rtol=1e-14
    )
    rows = box_averages(build_ocean(config), config.output.boxes).rows
    states = record.read(0, len(record.times))
    # Round-off of sums over the state in another order.
    size = np.abs(rows) @ np.abs(states).max(axis=0)
    for series, row, scale in zip(found.values(), rows, size, strict=True):
        np.testing.assert_allclose(
            series[::2], states @ row, rtol=0, atol=1e-14 * scale
        )
    assert record.box_units() == {"gyre": "s-1", "jet": "m s-1"}


@pytest.mark.parametrize("engine", ["h5netcdf", "netcdf4"])
def test_readers_see_where_and_what(run, engine):
    record = open_record(run)
    with xarray.open_dataset(run, engine=engine) as data:
        gyre = data["box_gyre"]
        assert gyre.dims == ("boxes_time",)
        assert gyre.dtype == "float64"
        assert gyre.attrs["units"] == "s-1"
        assert gyre.attrs["cell_methods"] == (
            "boxes_time: point x_of_box_gyre: y_of_box_gyre: mean"
        )
        np.testing.assert_array_equal(gyre.values, record.read_boxes()["gyre"])
        # It wraps around: from 800 km to 1100 km of a box 1000 km long.
        assert float(gyre.coords["x_of_box_gyre"]) == 950e3
        assert data["x_of_box_gyre"].attrs["units"] == "m"
        sides = data[data["x_of_box_gyre"].attrs["bounds"]]
        assert sides.dims == ("side",)
        np.testing.assert_allclose(sides.values, [800e3, 1100e3], rtol=1e-15)
        steps = np.diff(data["boxes_time"].values).astype("m8[s]").astype(int)
        assert set(steps) == {43200}


def test_without_an_interval_of_its_own_the_stream_has_that_of_the_state(tmp_path):
    assert run_member(parsed(SLICE), 0, tmp_path)
    path = member_paths(tmp_path, 0)[0]
    record = open_record(path)
    np.testing.assert_array_equal(record.boxes_times, record.times)
    with xarray.open_dataset(path, engine="netcdf4") as data:
        deep = data["box_deep"]
        assert deep.attrs["units"] == "m s-2"
        assert set(deep.coords) == {"boxes_time", "x_of_box_deep", "z_of_box_deep"}
        assert float(deep.coords["z_of_box_deep"]) == 40.0


def test_a_box_may_be_named_like_the_place_of_another(tmp_path):
    names = 'output.boxes={gyre={field="vorticity"}, gyre_x={field="vorticity"}}'
    run_member(config_of(names, "time.duration=2 d"), 0, tmp_path)
    found = open_record(member_paths(tmp_path, 0)[0]).read_boxes()
    assert list(found) == ["gyre", "gyre_x"]


def test_a_run_without_boxes_has_none(tmp_path):
    run_member(parsed(without_boxes(), "time.duration=2 d"), 0, tmp_path)
    record = open_record(member_paths(tmp_path, 0)[0])
    assert record.read_boxes() == {}
    assert len(record.boxes_times) == 0


@pytest.mark.parametrize(
    ("text", "override", "words"),
    [
        (without_boxes(), "output.boxes_every=1 d", "there is no [output.boxes.NAME]"),
        (TEXT, "output.boxes_every=0.33 d", "whole number of steps"),
        (
            TEXT + '[output.boxes."a b"]\nfield = "vorticity"\n',
            "seed=1",
            "letters, digits and underscore",
        ),
        (TEXT, 'output.boxes.jet.y=["1 s", "2 s"]', "a length"),
        (TEXT, 'output.boxes.jet.y=["1 km"]', "list of 2"),
    ],
)
def test_bad_settings_are_refused(text, override, words):
    with pytest.raises(ConfigError) as caught:
        parsed(text, override)
    assert words in str(caught.value)


def test_a_box_that_does_not_fit_is_refused_before_anything_is_written(tmp_path):
    config = config_of("output.boxes.jet.field=northward")
    with pytest.raises(DataError, match=r"\[output.boxes.jet\] field"):
        run_member(config, 0, tmp_path)
    assert list(tmp_path.iterdir()) == []
