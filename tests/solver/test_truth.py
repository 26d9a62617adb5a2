"""Truth runs: what is recorded, and that nothing can break the record."""

import h5py
import numpy as np
import pytest
from tiny_truth import assert_same_bits, config_of, contents

from eddyshed.solver.build import build_ocean
from eddyshed.solver.errors import Blowup, DataError, RunFolderError
from eddyshed.solver.record import open_record
from eddyshed.solver.segments import member_paths
from eddyshed.solver.truth import run_member


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    folder = tmp_path_factory.mktemp("whole")
    assert run_member(config_of(), 0, folder)
    return folder


def test_streams_have_their_own_cadence(whole):
    found = contents(whole)
    day = 86400.0
    # Both ends of the record are in it: 40 days at 1, 0.5 and 10 days.
    np.testing.assert_allclose(found["time"], day * np.arange(5, 45.5), rtol=1e-14)
    np.testing.assert_allclose(
        found["resolved_time"], day * np.arange(5, 45.2, 0.5), rtol=1e-14
    )
    assert len(found["fields_time"]) == 5
    assert found["vorticity"].shape == (5, 16, 16)
    # The fine stream holds the same numbers as the state, where both are.
    chosen = found["resolved_coordinate"]
    np.testing.assert_array_equal(found["resolved"][::2], found["state"][:, chosen])


def test_recorded_fields_and_budget_are_those_of_the_state(whole):
    found, ocean = contents(whole), build_ocean(config_of())
    fields = ocean.fields(found["state"][-1])
    np.testing.assert_array_equal(
        found["vorticity"][-1], fields["vorticity"].astype("float32")
    )
    np.testing.assert_allclose(
        found["energy"], (found["state"] ** 2).sum(axis=1) / 2, rtol=1e-13
    )


def test_energy_budget_closes():
    # Without stirring, dE/dt = work + dissipation at every instant: compared with
    # the tendency itself, which conserves nothing by construction.
    ocean = build_ocean(config_of())
    z = np.random.default_rng(2).standard_normal(ocean.size) * 1e-3
    budget = ocean.budget(0.0, z)
    rate = z @ ocean.tendency(0.0, z)
    # Round-off of the advection's work, relative to its terms.
    size = np.abs(z * ocean.bilinear(z, z)).sum()
    assert abs(rate - budget["work"] - budget["dissipation"]) < 1e-12 * size


def test_two_runs_are_the_same_bits(whole, tmp_path):
    run_member(config_of(), 0, tmp_path)
    assert_same_bits(contents(tmp_path), contents(whole))


def test_members_and_seeds_differ(whole, tmp_path):
    run_member(config_of("seed=4"), 0, tmp_path / "seed")
    run_member(config_of(), 1, tmp_path / "member")
    first = contents(whole)["state"]
    assert not np.array_equal(contents(tmp_path / "seed")["state"], first)
    with h5py.File(tmp_path / "member" / "member-001.h5") as file:
        assert not np.array_equal(file["state"][...], first)


@pytest.mark.parametrize("stops", [(7,), (1, 2, 333), (50, 50, 346)])
def test_resumed_run_is_the_uninterrupted_one(whole, tmp_path, stops):
    # Stopped in the spin-up, between records and one step before the end.
    for stop_at in stops:
        steps = iter(range(1, stop_at + 1))
        done = run_member(
            config_of(), 0, tmp_path, stop=lambda s=steps: next(s, None) is None
        )
        assert not done
    assert run_member(config_of(), 0, tmp_path)
    assert_same_bits(contents(tmp_path), contents(whole))


def test_a_longer_duration_goes_on(whole, tmp_path):
    run_member(config_of("time.duration=17 d"), 0, tmp_path)
    assert run_member(config_of(), 0, tmp_path)
    assert_same_bits(contents(tmp_path), contents(whole))


@pytest.mark.parametrize("engine", ["h5netcdf", "netcdf4"])
def test_xarray_opens_the_truth(whole, engine):
    xarray = pytest.importorskip("xarray")
    path = member_paths(whole, 0)[0]
    with xarray.open_dataset(path, engine=engine) as data:
        assert data["state"].dims == ("time", "coordinate")
        assert data["vorticity"].dims == ("fields_time", "y", "x")
        assert data["state"].attrs["units"] == "m s-1"
        first = (data["time"].values[1] - data["time"].values[0]).astype("m8[s]")
        assert first == np.timedelta64(86400, "s")
        with h5py.File(path) as file:
            np.testing.assert_array_equal(data["state"].values, file["state"][...])
            assert list(data["label"].values) == list(file["label"].asstr()[...])


def test_another_config_is_refused_with_its_keys(whole):
    with pytest.raises(RunFolderError, match=r"ocean\.drag: was .* now "):
        run_member(config_of("ocean.drag=0.02 1/d"), 0, whole)


def test_a_duration_already_passed_is_refused(whole):
    with pytest.raises(RunFolderError, match="longer duration"):
        run_member(config_of("time.duration=20 d"), 0, whole)


def test_a_damaged_segment_is_named(tmp_path):
    steps = iter(range(200))
    run_member(config_of(), 0, tmp_path, stop=lambda: next(steps, None) is None)
    last = sorted(tmp_path.glob("member-000/segment-*.h5"))[-1]
    last.write_bytes(last.read_bytes()[:1000])
    with pytest.raises(DataError, match=last.name):
        run_member(config_of(), 0, tmp_path)


def test_a_missing_segment_is_named(whole, tmp_path):
    run_member(config_of(), 0, tmp_path)
    part = sorted(tmp_path.glob("member-000/segment-*.h5"))[3]
    part.unlink()
    with pytest.raises(DataError, match=part.name):
        open_record(member_paths(tmp_path, 0)[0])
    # Running on would not fill the gap, so it must not hide it either.
    kept = member_paths(tmp_path, 0)[0].read_bytes()
    with pytest.raises(RunFolderError, match="no segment holds the records between"):
        run_member(config_of(), 0, tmp_path)
    assert member_paths(tmp_path, 0)[0].read_bytes() == kept


def test_foreign_files_are_refused(tmp_path):
    path = tmp_path / "member-000.h5"
    with pytest.raises(DataError, match="no such file"):
        open_record(path)
    path.write_text("not HDF5")
    with pytest.raises(DataError, match="not a whole HDF5 file"):
        open_record(path)
    with h5py.File(path, "w") as file:
        file["x"] = 1
    with pytest.raises(DataError, match="not one that eddyshed wrote"):
        open_record(path)


def test_a_blow_up_keeps_its_checkpoint(tmp_path):
    # A step of five days is far beyond what the stirred flow allows.
    config = config_of(
        "time.step=5 d",
        "time.spin_up=0 d",
        "time.duration=50000 d",
        "output.state_every=5 d",
        "output.resolved.every=5 d",
        "output.boxes_every=5 d",
        "output.fields_every=500 d",
        "output.checkpoint_every=5 d",
        "stirring.energy_rate=1e-6 m2/s3",
    )
    with pytest.raises(Blowup, match="blew up") as caught:
        run_member(config, 0, tmp_path)
    last = sorted(tmp_path.glob("member-000/segment-*.h5"))[-1]
    assert last.name in str(caught.value)
    with h5py.File(last) as file:
        # Good: the run could go on from it.
        state = file["checkpoint/state"][...]
        assert (state**2).sum() / 2 <= config.time.energy_bound


def test_an_unwritable_folder_is_named(tmp_path):
    folder = tmp_path / "file"
    folder.write_text("")
    with pytest.raises(RunFolderError, match="cannot be written"):
        run_member(config_of(), 0, folder)


def test_a_pattern_beyond_the_grid_is_named(tmp_path):
    with pytest.raises(DataError, match=r"\[forcing\.wind\].*beyond the modes"):
        build_ocean(config_of("forcing.wind.waves=[0, 7]"))
    with pytest.raises(DataError, match=r"\[stirring\].*no wave"):
        run_member(config_of("stirring.band=[40, 50]"), 0, tmp_path)
