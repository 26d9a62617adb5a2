"""A flow measured along its record: whatever the record, the members and the file."""

import dataclasses
from dataclasses import dataclass, field

import h5py
import numpy as np
import pytest
import xarray

from eddyshed.reduce.flow import measure as measured
from eddyshed.reduce.flow.measure import budget_of_records, measure_flow, power_law
from eddyshed.reduce.flow.parts import SEVERAL, SINGLE, read_flow, write_flow
from eddyshed.reduce.show import describe
from eddyshed.solver.diagnostics import budget_of, gyres
from eddyshed.solver.errors import DataError
from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.oceans.two_layer import TwoLayer, TwoLayerSettings
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.spectra import isotropic_spectrum, spectral_flux

STEP = 10.0


@dataclass
class Record:
    """A truth record in memory, read in stretches of seven."""

    ocean: object
    states: np.ndarray
    stretch: int = 7
    step: float = STEP
    extra: dict = field(default_factory=dict)

    @property
    def times(self):
        return 100.0 + self.step * np.arange(len(self.states))

    @property
    def size(self):
        return self.states.shape[1]

    def chunks(self):
        for start in range(0, len(self.states), self.stretch):
            where = slice(start, min(start + self.stretch, len(self.states)))
            yield where, self.states[where]

    def read_budget(self):
        rows = [self.ocean.budget(0.0, z) for z in self.states]
        found = {name: np.array([row[name] for row in rows]) for name in rows[0]}
        return found | {name: value for name, (_, value) in self.extra.items()}

    def budget_units(self):
        units = {name: unit for name, (unit, _) in self.ocean.budget_units.items()}
        return units | {name: unit for name, (unit, _) in self.extra.items()}


def ocean_in(kind):
    space = kind((8, 10), (6.0, 4.0))
    return Barotropic(BarotropicSettings(beta=1.0, drag=0.1), space)


def layers():
    settings = TwoLayerSettings(
        upper_depth=1.0,
        lower_depth=4.0,
        deformation_radius=0.4,
        upper_current=1.0,
        beta=1.0,
    )
    return TwoLayer(settings, Channel((8, 10), (6.0, 4.0)))


def states_of(ocean, count, seed=0):
    """Smooth in time: sums of three neighbours of white noise, about a mean."""
    rng = np.random.default_rng(seed)
    noise = rng.standard_normal((count + 2, ocean.size))
    return noise[:-2] + noise[1:-1] + noise[2:] + np.linspace(-1, 1, ocean.size)


def arrays(value):
    """All numbers of a part, by name."""
    return {
        item.name: np.asarray(getattr(value, item.name), dtype=float)
        for item in dataclasses.fields(value)
        if not isinstance(getattr(value, item.name), str | tuple)
    }


def assert_equal_flows(one, other, **tolerance):
    for name in (*SINGLE, *SEVERAL):
        parts = (getattr(one, name), getattr(other, name))
        if name in SINGLE:
            parts = ({"": part} if part is not None else {} for part in parts)
        first, second = parts
        assert first.keys() == second.keys()
        for key in first:
            pair = arrays(first[key]), arrays(second[key])
            for part, value in pair[0].items():
                np.testing.assert_allclose(
                    value, pair[1][part], err_msg=f"{name} {key} {part}", **tolerance
                )


@pytest.mark.parametrize("kind", [Periodic, Channel, Basin])
def test_numbers_are_those_of_the_states(kind):
    ocean = ocean_in(kind)
    states = states_of(ocean, 101)
    found = measure_flow(ocean, [Record(ocean, states)])
    assert (found.sampling.recorded, found.sampling.sampled) == (101, 101)
    spectrum = isotropic_spectrum(ocean, states)
    np.testing.assert_allclose(found.spectrum.energy, spectrum.mean(axis=0), rtol=1e-12)
    assert found.spectrum.energy.sum() == pytest.approx(
        (states**2).sum() / 2 / 101, rel=1e-12
    )
    for quantity, flux in found.flux.items():
        expected = spectral_flux(ocean, states, quantity).mean(axis=0)
        size = np.abs(expected).max()
        np.testing.assert_allclose(flux.flux, expected, atol=1e-12 * size)
        assert abs(flux.flux[-1]) < 1e-12 * size
    # The mean of a field is the field of the mean: as the ocean gives it, where the
    # finer grid has points of the coarse one (nodes where it repeats).
    psi = found.field["streamfunction"]
    assert psi.mean.shape == (len(psi.y), len(psi.x))
    assert psi.units == "m2 s-1"
    if kind is Periodic:
        every = len(psi.x) // 8
        coarse = ocean.fields(states.mean(axis=0))["streamfunction"]
        np.testing.assert_allclose(
            psi.mean[::every, ::every], coarse, atol=1e-12 * np.abs(coarse).max()
        )
        last = ocean.fields(states[-1])["streamfunction"]
        np.testing.assert_allclose(
            psi.snapshot[::every, ::every], last, atol=1e-12 * np.abs(last).max()
        )
    assert (found.zonal is None) == (kind is Basin) == bool(found.gyre)
    assert (found.profile is None) == (kind is Basin)


def test_gyres_are_those_of_each_state():
    ocean = ocean_in(Basin)
    states = states_of(ocean, 30)
    found = measure_flow(ocean, [Record(ocean, states)]).gyre
    each = [
        gyres(*ocean.space.grid_axes, ocean.fields(z)["streamfunction"]) for z in states
    ]
    strength = np.array([gyre.greatest for gyre in each])
    assert found["clockwise_gyre"].mean == pytest.approx(strength.mean(), rel=1e-12)
    np.testing.assert_allclose(found["clockwise_gyre"].block[0], strength, rtol=1e-12)
    assert found["anticlockwise_gyre"].greatest < 0
    width = found["anticlockwise_boundary_current"]
    assert width.mean == pytest.approx(np.mean([gyre.least_at[0] for gyre in each]))
    assert width.units == "m"


def test_does_not_depend_on_how_the_file_is_read():
    ocean = ocean_in(Channel)
    states = states_of(ocean, 101)
    one = measure_flow(ocean, [Record(ocean, states)])
    other = measure_flow(ocean, [Record(ocean, states, stretch=40)])
    # Round-off of sums in another order.
    assert_equal_flows(one, other, rtol=1e-9, atol=1e-11)


@pytest.mark.parametrize("stretch", [7, 1000])
def test_a_subset_is_evenly_spaced_and_its_errors_are_wider(monkeypatch, stretch):
    ocean = ocean_in(Periodic)
    states = states_of(ocean, 1001)
    whole = measure_flow(ocean, [Record(ocean, states, stretch)])
    monkeypatch.setattr(measured, "SAMPLES", 51)
    part = measure_flow(ocean, [Record(ocean, states, stretch)])
    assert (part.sampling.sampled, part.sampling.interval) == (51, 20 * STEP)
    expected = isotropic_spectrum(ocean, states[::20]).mean(axis=0)
    np.testing.assert_allclose(part.spectrum.energy, expected, rtol=1e-12)
    # 1001 states, each like its neighbours, tell as much as a half to a third of
    # them; 51 that are strangers to each other as much as 51. In the mean over the
    # rings: between sqrt(1001 / 51 / 4) and sqrt(1001 / 51).
    pair = part.spectrum.energy_error[1:], whole.spectrum.energy_error[1:]
    ratio = np.mean(pair[0] / pair[1])
    assert 2.2 < ratio < 4.4
    # Fields and budgets use every state.
    for quantity, budget in whole.budget.items():
        np.testing.assert_array_equal(part.budget[quantity].term, budget.term)
    for name, shown in whole.field.items():
        np.testing.assert_array_equal(part.field[name].mean, shown.mean)


def test_members_are_one_sample():
    ocean = ocean_in(Periodic)
    states = [states_of(ocean, 200, seed) for seed in range(3)]
    found = measure_flow(ocean, [Record(ocean, z) for z in states])
    single = measure_flow(ocean, [Record(ocean, states[0])])
    every = np.concatenate(states)
    np.testing.assert_allclose(
        found.spectrum.energy, isotropic_spectrum(ocean, every).mean(axis=0), rtol=1e-12
    )
    assert found.sampling.members == 3
    assert found.budget["energy"].rate_block.shape[0] == 3
    assert found.budget["energy"].level == pytest.approx(
        np.mean([budget_level(ocean, z) for z in states]), rel=1e-12
    )
    # Three times the record: errors smaller by sqrt(3), each known to a tenth.
    pair = single.spectrum.energy_error[1:], found.spectrum.energy_error[1:]
    ratio = np.mean(pair[0] / pair[1])
    assert ratio == pytest.approx(np.sqrt(3), rel=0.2)


def budget_level(ocean, states):
    record = Record(ocean, states)
    return budget_of(
        record.times, record.read_budget(), record.budget_units()
    ).level.value


@pytest.mark.parametrize("quantity", ["energy", "enstrophy"])
def test_budgets_are_those_of_the_series_whatever_they_are_called(quantity):
    # Means and residual agree with the other way to close a budget; a term nobody
    # has heard of counts by its unit, and what random forcing fed by its name.
    ocean = ocean_in(Channel)
    states = states_of(ocean, 60)
    level, rate = {"energy": ("m2 s-2", "m2 s-3"), "enstrophy": ("s-2", "s-3")}[
        quantity
    ]
    rng = np.random.default_rng(5)
    extra = {
        "whirlpools": (rate, rng.uniform(1, 2, 60)),
        f"{quantity}_fed_by_whales": (level, np.cumsum(rng.uniform(0, 1, 60))),
    }
    record = Record(ocean, states, extra=extra)
    found = measure_flow(ocean, [record]).budget[quantity]
    other = budget_of(
        record.times, record.read_budget(), record.budget_units(), quantity
    )
    assert set(found.names) == set(other.terms) >= {"whirlpools", "whales"}
    for name, value in zip(found.names, found.term, strict=True):
        assert value == pytest.approx(other.terms[name].value, rel=1e-12)
    assert found.residual == pytest.approx(other.residual.value, rel=1e-12)
    assert found.change == pytest.approx(other.change.value, rel=1e-12)
    meanings = dict(zip(found.names, found.meanings, strict=True))
    assert meanings["whales"] == f"{quantity} fed by whales"
    assert found.units == level
    assert found.rate_units == rate


def test_a_budget_that_closes_closes():
    # dz/dt = push - rate z: the change is known in closed form, and the trapezoidal
    # rule is off by step^2 / 12 of the change of slope, 3e-6 of the work.
    times = np.linspace(0, 10, 2001)
    z = 2 / 0.3 * (1 - np.exp(-0.3 * times))
    series = {"energy": z**2 / 2, "work": 2 * z, "drag": -0.3 * z**2}
    units = {"energy": "m2 s-2", "work": "m2 s-3", "drag": "m2 s-3"}
    found = budget_of_records(times, [series], units, {}, "energy")
    work = found.term[found.names.index("work")]
    assert abs(found.residual) < 1e-5 * work
    assert found.change == pytest.approx(z[-1] ** 2 / 20, rel=1e-13)
    # A sign turned round is seen.
    series["drag"] = -series["drag"]
    wrong = budget_of_records(times, [series], units, {}, "energy")
    assert abs(wrong.residual) > 0.1 * work


def test_kinetic_energy_is_what_is_not_potential():
    ocean = layers()
    record = Record(ocean, states_of(ocean, 40))
    found = measure_flow(ocean, [record]).measure
    series = record.read_budget()
    assert found["kinetic_energy"].mean == pytest.approx(
        np.mean(series["energy"] - series["potential_energy"]), rel=1e-12
    )
    assert {"potential_energy", "upper_enstrophy", "lower_enstrophy"} <= set(found)


class TestPowerLaw:
    def test_is_found_where_there_is_one(self):
        k = np.arange(41.0)
        energy = np.zeros(41)
        energy[1:] = np.where(k[1:] < 4, k[1:], 4 * (k[1:] / 4) ** -3.0)
        energy[31:] *= np.exp(-np.arange(10))
        slope, error, start, stop = power_law(k, energy, 41)
        assert slope == pytest.approx(-3, abs=0.03)
        assert error < 0.02
        assert start <= 6
        assert 28 <= stop <= 32

    def test_is_not_drawn_through_a_curve_nor_through_cut_rings(self):
        k = np.arange(41.0)
        assert np.isnan(power_law(k, np.exp(-k / 3), 41)[0])
        energy = np.append(0.0, k[1:] ** -3.0)
        assert np.isnan(power_law(k, energy, 8)[0])
        assert power_law(k, energy, 9)[2:] == (1, 8)
        assert np.isnan(power_law(k, np.zeros(41), 41)[0])


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    path = tmp_path_factory.mktemp("flow") / "flow.h5"
    ocean = layers()
    flow = measure_flow(ocean, [Record(ocean, states_of(ocean, 60))])
    write_flow(path, "abc", "a flow", flow)
    return path, flow


class TestFile:
    def test_reads_back_equal_to_the_bit(self, written):
        path, flow = written
        assert_equal_flows(read_flow(path), flow, rtol=0, atol=0)
        assert read_flow(path).budget["energy"].names == flow.budget["energy"].names

    def test_opens_in_general_readers_with_units_and_coordinates(self, written):
        path, _ = written
        groups = []
        with h5py.File(path) as file:
            file.visititems(
                lambda name, item: (
                    groups.append(name)
                    if isinstance(item, h5py.Group)
                    and any(isinstance(part, h5py.Dataset) for part in item.values())
                    else None
                )
            )
        assert len(groups) >= 12
        for group in groups:
            with xarray.open_dataset(path, group=group, engine="h5netcdf") as data:
                assert data.data_vars, group
                for variable in data.data_vars.values():
                    assert variable.attrs["units"] != "1", (group, variable.name)
        with xarray.open_dataset(path, group="spectrum", engine="h5netcdf") as data:
            assert data.energy.dims == ("wavenumber",)
            assert data.wavenumber.attrs["units"] == "m-1"
        name = "field/upper_vorticity"
        with xarray.open_dataset(path, group=name, engine="h5netcdf") as data:
            assert data["mean"].dims == ("y", "x")
            assert data["mean"].attrs["units"] == "s-1"
            assert data.x.attrs["units"] == "m"

    def test_is_described_in_words(self, written):
        facts = describe(written[0])
        assert facts["kind"] == "flow"
        assert {"spectrum", "flux", "budget"} <= set(facts["parts"].split(", "))
        assert facts["means over"].startswith("60 states of each of 1 member(s)")

    def test_a_part_that_is_missed_is_named(self, written, tmp_path):
        path = tmp_path / "flow.h5"
        path.write_bytes(written[0].read_bytes())
        with h5py.File(path, "r+") as file:
            del file["spectrum"]
        with pytest.raises(DataError, match="'spectrum'"):
            read_flow(path)
