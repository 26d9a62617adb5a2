"""A run with gusts and stirring is the same bits however often it is stopped."""

import re

import h5py
import numpy as np
import pytest

from eddyshed.solver.config import parse_config
from eddyshed.solver.diagnostics import budget_of
from eddyshed.solver.errors import ConfigError, DataError
from eddyshed.solver.record import open_record
from eddyshed.solver.settings import TruthConfig
from eddyshed.solver.truth import run_member

GUSTY = """
name = "gusty"
seed = 3
[grid]
points = [16, 16]
lengths = ["1000 km", "1000 km"]
[ocean]
kind = "barotropic"
beta = "2e-11 m-1 s-1"
drag = "0.02 1/d"
hyperviscosity_time = "6 d"
[forcing.wind]
kind = "wave"
amplitude = "5e-12 s-2"
waves = [0, 2]
[forcing.wind.time]
kind = "seasonal"
period = "30 d"
amplitude = 0.5
[forcing."west/ward gusts"]
kind = "wave"
amplitude = "5e-12 s-2"
waves = [1, 1]
[forcing."west/ward gusts".time]
kind = "gusts"
decorrelation = "3 d"
[forcing.storms]
kind = "gusts"
acceleration = "2e-8 m/s2"
band = [2, 3]
decorrelation = "1 d"
[stirring]
energy_rate = "1e-9 m2/s3"
band = [2, 3]
[time]
step = "0.1 d"
spin_up = "5 d"
duration = "40 d"
[output]
state_every = "0.5 d"
checkpoint_every = "6 d"
"""


def config_of(*overrides):
    return parse_config(GUSTY, TruthConfig, "gusty.toml", overrides).config


def contents(folder, member=0):
    with h5py.File(folder / f"member-{member:03d}.h5") as file:
        return {name: file[name][...] for name in file if file[name].dtype.kind == "f"}


def assert_same_bits(one, other):
    assert one.keys() == other.keys()
    for name in one:
        np.testing.assert_array_equal(one[name], other[name], err_msg=name)


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    folder = tmp_path_factory.mktemp("whole")
    assert run_member(config_of(), 0, folder)
    return folder


def test_a_second_run_is_the_same_bits_and_another_member_is_not(whole, tmp_path):
    run_member(config_of(), 0, tmp_path)
    run_member(config_of(), 1, tmp_path)
    assert_same_bits(contents(tmp_path), contents(whole))
    other = contents(tmp_path, 1)
    assert not np.array_equal(other["state"], contents(whole)["state"])


@pytest.mark.parametrize("scheme", ["integrating factor", "exponential differencing"])
def test_a_resumed_run_is_the_uninterrupted_one(tmp_path, scheme):
    config = config_of(f"time.scheme={scheme}")
    run_member(config, 0, tmp_path / "whole")
    for stop_at in (7, 1, 200):
        steps = iter(range(1, stop_at + 1))
        done = run_member(
            config, 0, tmp_path / "parts", stop=lambda s=steps: next(s, None) is None
        )
        assert not done
    assert run_member(config, 0, tmp_path / "parts")
    assert_same_bits(contents(tmp_path / "parts"), contents(tmp_path / "whole"))


def test_a_forcing_keeps_its_stream_when_another_is_removed(whole, tmp_path):
    # Its first push depends on its own name alone.
    text = GUSTY.replace(
        '[forcing.storms]\nkind = "gusts"', '[forcing.x]\nkind="gusts"'
    )
    other = parse_config(text, TruthConfig, "x").config
    from eddyshed.solver.build import build_ocean
    from eddyshed.solver.truth import random_forcing_of

    one = random_forcing_of(config_of(), build_ocean(config_of()), 0).gusts
    two = random_forcing_of(other, build_ocean(other), 0).gusts
    name = "west/ward gusts"
    assert one[name].value == two[name].value
    assert not np.array_equal(one["storms"].value, two["x"].value)


def test_budget_with_all_kinds_of_forcing_closes(whole):
    record = open_record(whole / "member-000.h5")
    series, units = record.read_budget(), record.budget_units()
    assert units["energy_fed_by_gusts"] == units["energy"] == "m2 s-2"
    assert units["enstrophy_fed_by_gusts"] == units["enstrophy"] == "s-2"
    found = budget_of(record.times, series, units)
    assert {"work", "gusts", "stirring"} <= set(found.terms)
    # All of them matter, and what is left is small: the record's interval of half a
    # day samples the work and the friction by the trapezoidal rule.
    turnover = sum(abs(term.value) for term in found.terms.values())
    for name in ("work", "gusts", "stirring"):
        assert abs(found.terms[name].value) > 0.01 * turnover
    assert abs(found.residual.value) < 0.01 * turnover
    found = budget_of(record.times, series, units, "enstrophy")
    assert {"enstrophy_work", "gusts", "stirring"} <= set(found.terms)
    turnover = sum(abs(term.value) for term in found.terms.values())
    for name in ("enstrophy_work", "gusts", "stirring"):
        assert abs(found.terms[name].value) > 0.01 * turnover
    assert abs(found.residual.value) < 0.01 * turnover


def problems_of(*overrides):
    with pytest.raises(ConfigError) as caught:
        config_of(*overrides)
    return caught.value.args[1]


@pytest.mark.parametrize(
    ("override", "match"),
    [
        ("forcing.wind.time.kind=seasnal", r'did you mean "seasonal"'),
        ("forcing.wind.time.period=-3 d", r"must be above 0"),
        ("forcing.wind.time.period=3", r"has no unit"),
        ("forcing.wind.time.amplitude=-0.5", r"must be at least 0"),
        ("forcing.storms.decorrelation=0 d", r"must be above 0"),
        ("forcing.storms.band=[3, 2]", r"runs downwards"),
        ("forcing.storms.acceleration=1e-7 m/s", r"an acceleration"),
        ("time.scheme=euler", r'one of "integrating factor"'),
    ],
)
def test_bad_values_are_one_clear_error_each(override, match):
    problems = problems_of(override)
    assert len(problems) == 1
    assert re.search(match, problems[0])


def test_a_jump_inside_a_step_is_refused_with_the_nearest_that_is_not():
    kind = 'forcing.wind.time={kind="step", at="2.23 d"}'
    (problem,) = problems_of(kind)
    assert problem.startswith("[forcing.wind.time] at = 192672 s must be a whole")
    assert "try 190080 s" in problem
    ramp = 'forcing.wind.time={kind="ramp", start="2.01 d", end="3.03 d"}'
    assert len(problems_of(ramp)) == 2


def test_a_gust_band_that_holds_no_wave_is_named(tmp_path):
    with pytest.raises(DataError, match=r"\[forcing\.storms\] band = .* no wave"):
        run_member(config_of("forcing.storms.band=[40, 50]"), 0, tmp_path)


def test_a_gusty_pattern_beyond_the_grid_is_named(tmp_path):
    name = 'forcing."west/ward gusts".waves=[0, 9]'
    with pytest.raises(DataError, match=r"west/ward gusts\] .*beyond the modes"):
        run_member(config_of(name), 0, tmp_path)
