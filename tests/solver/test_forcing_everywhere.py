"""Forcing in time and starts from files, in every ocean and space."""

import h5py
import numpy as np
import pytest

from eddyshed.reduce.contract import check_model
from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.diagnostics import budget_of
from eddyshed.solver.initial import FieldSettings, starting_state
from eddyshed.solver.record import open_record
from eddyshed.solver.settings import TruthConfig
from eddyshed.solver.spectra import spectral_flux
from eddyshed.solver.truth import run_member

ALL = """
name = "all"
[grid]
space = "{space}"
points = [16, 16]
lengths = ["1000 km", "1000 km"]
[ocean]
{ocean}
[forcing.wind]
kind = "wave"
amplitude = "2e-11 s-2"
waves = [1, 2]
[forcing.wind.time]
kind = "seasonal"
period = "10 d"
amplitude = 0.5
[forcing.storms]
kind = "gusts"
acceleration = "5e-8 m/s2"
band = [2, 3]
decorrelation = "1 d"
[stirring]
energy_rate = "1e-9 m2/s3"
band = [2, 3]
[initial]
kind = "noise"
energy = "0.01 m2/s2"
band = [1, 3]
[time]
step = "0.05 d"
spin_up = "0 d"
duration = "10 d"
[output]
state_every = "0.1 d"
checkpoint_every = "5 d"
"""
BAROTROPIC = 'kind = "barotropic"\nbeta = "2e-11 m-1 s-1"\ndrag = "0.02 1/d"\n'
VISCOUS = BAROTROPIC + 'viscosity = "200 m2/s"'
LAYERS = (
    'kind = "two_layer"\nbeta = "2e-11 m-1 s-1"\ndrag = "0.02 1/d"\n'
    'deformation_radius = "60 km"\nupper_current = "0.1 m/s"\n'
    'upper_depth = "800 m"\nlower_depth = "3200 m"\nviscosity = "200 m2/s"'
)
# The same box as a slice: a thousand kilometres across and deep, in slow motion.
SLICE = (
    'kind = "boussinesq"\nbuoyancy_gradient = "1e-12 s-2"\n'
    'viscosity = "500 m2/s"\ndiffusivity = "500 m2/s"'
)
OCEANS = [
    (space, ocean)
    for ocean, spaces in (
        (VISCOUS, ("periodic", "channel", "basin")),
        (LAYERS, ("periodic", "channel")),
        (SLICE, ("periodic", "channel")),
    )
    for space in spaces
]
everywhere = pytest.mark.parametrize(
    ("space", "ocean"),
    OCEANS,
    ids=lambda text: text.split('"')[1] if '"' in text else text,
)


def config_of(space, ocean):
    text = ALL.format(space=space, ocean=ocean)
    return parse_config(text, TruthConfig, "all.toml").config


@everywhere
def test_model_with_varying_forcing_keeps_its_promises(space, ocean):
    model = build_ocean(config_of(space, ocean))
    check_model(model)
    season = 10 * 86400.0
    # Half a season apart the factors are 1.5 and 0.5.
    ratio = model.forcing(0.0) @ model.forcing(season / 2) / 3
    assert ratio == pytest.approx(model.forcing(season / 2) @ model.forcing(season / 2))


def test_heating_through_the_surface_may_have_a_season():
    # The season of a buoyancy source works on the buoyancy alone.
    text = ALL.replace(
        'kind = "wave"\namplitude = "2e-11 s-2"\nwaves = [1, 2]',
        'kind = "surface_buoyancy"\nflux = "1e-9 m2/s3"\nwaves = 1\ndepth = "200 km"',
    ).format(space="channel", ocean=SLICE)
    config = parse_config(text, TruthConfig, "all.toml").config
    model = build_ocean(config)
    check_model(model)
    start, half = model.forcing(0.0), model.forcing(5 * 86400.0)
    np.testing.assert_allclose(start, 3 * half, rtol=1e-12)
    assert half.any()
    z = np.random.default_rng(3).standard_normal(model.size)
    assert model.budget(0.0, z)["work"] == pytest.approx(start @ z, rel=1e-12)


@everywhere
def test_energy_budget_closes_and_a_resumed_run_is_the_same(space, ocean, tmp_path):
    config = config_of(space, ocean)
    assert run_member(config, 0, tmp_path / "whole")
    steps = iter(range(1, 124))
    parts = tmp_path / "parts"
    assert not run_member(config, 0, parts, stop=lambda: next(steps, None) is None)
    assert run_member(config, 0, parts)
    with (
        h5py.File(parts / "member-000.h5") as one,
        h5py.File(tmp_path / "whole" / "member-000.h5") as other,
    ):
        for name in other:
            np.testing.assert_array_equal(one[name][...], other[name][...])
    record = open_record(tmp_path / "whole" / "member-000.h5")
    found = budget_of(record.times, record.read_budget(), record.budget_units())
    assert {"work", "stirring", "gusts"} <= set(found.terms)
    turnover = sum(abs(term.value) for term in found.terms.values())
    # Trapezoids over two steps of 0.05 d in a flow that changes within a day:
    # (0.1 / 1)^2 / 12 of the terms, and as much again for the gusts of one day.
    assert abs(found.residual.value) < 2e-3 * turnover


@everywhere
def test_advection_carries_no_energy_out_of_the_last_shell(space, ocean):
    model = build_ocean(config_of(space, ocean))
    z = np.random.default_rng(1).standard_normal(model.size)
    flux = spectral_flux(model, z)
    # Round-off of a sum over all coordinates.
    assert abs(flux[-1]) < 1e-13 * np.abs(z * model.bilinear(z, z)).sum()
    assert np.abs(flux).max() > 1e-4 * np.abs(z * model.bilinear(z, z)).sum()


@everywhere
def test_a_start_from_the_fields_of_a_state_is_that_state(space, ocean, tmp_path):
    config = config_of(space, ocean)
    model = build_ocean(config)
    z = starting_state(config.initial, model, seed=1, member=0)
    path = tmp_path / "fields.h5"
    with h5py.File(path, "w") as file:
        for name, values in model.fields(z).items():
            file[name] = values
    again = starting_state(FieldSettings(path=str(path)), model, seed=1, member=0)
    # Round-off of one transform there and one back.
    np.testing.assert_allclose(again, z, atol=1e-12 * np.linalg.norm(z))
