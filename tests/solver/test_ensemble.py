"""Ensembles: whatever runs the members, and whatever befalls them, the same numbers."""

import multiprocessing
import os
import re
import threading
from concurrent.futures import Future, ThreadPoolExecutor

import h5py
import numpy as np
import pytest
from ensembles import (
    CONFIG,
    LONG,
    assert_same_bits,
    at_work,
    config_of,
    contents,
    wait_for,
)

from eddyshed.reduce.settings import StudyConfig
from eddyshed.solver.build import build_ocean
from eddyshed.solver.config import parse_config
from eddyshed.solver.engine import WorkerProcesses, opened_executor, workers_of
from eddyshed.solver.ensemble import complete_members, run_ensemble, work
from eddyshed.solver.errors import (
    ConfigError,
    DataError,
    LostWorker,
    RunFolderError,
)
from eddyshed.solver.identity import truth_table
from eddyshed.solver.locks import Busy, holding, member_lock
from eddyshed.solver.record import open_records
from eddyshed.solver.segments import member_paths, reached_step
from eddyshed.solver.truth import initial_state, run_member

SIX = range(6)


def statuses(outcomes):
    return [outcome.status for outcome in outcomes]


@pytest.fixture(scope="module")
def serial(tmp_path_factory):
    """Six members, one after another in this process."""
    folder = tmp_path_factory.mktemp("serial")
    assert statuses(run_ensemble(config_of(), folder)) == ["done"] * 6
    return folder


def test_members_differ_and_the_first_is_a_truth_of_one(serial, tmp_path):
    states = [contents(member_paths(serial, m)[0])["state"] for m in SIX]
    for one in SIX:
        for other in range(one):
            assert not np.array_equal(states[one], states[other])
    alone = config_of("ensemble.members=1")
    assert run_member(alone, 0, tmp_path)
    assert_same_bits(tmp_path, serial, [0])
    # Nor does any other member depend on how many there are.
    assert run_member(config_of("ensemble.members=4"), 3, tmp_path)
    assert_same_bits(tmp_path, serial, [3])


def test_the_perturbation_has_its_energy_and_band_and_spares_the_first():
    config = config_of()
    ocean = build_ocean(config)
    assert not initial_state(config, ocean, 0).any()  # from rest
    total = np.hypot(*ocean.waves.T)
    for member in (1, 2):
        z = initial_state(config, ocean, member)
        # Energy is z.z/2 by construction of the coordinates; round-off of a sum.
        assert z @ z / 2 == pytest.approx(1e-4, rel=1e-12)
        assert set(np.flatnonzero(z)) <= set(np.flatnonzero(total <= 3))
    with pytest.raises(DataError, match=r"\[ensemble\.perturbation\].*no wave"):
        initial_state(config_of("ensemble.perturbation.band=[40, 50]"), ocean, 1)


def test_members_that_would_be_the_same_are_refused():
    text = CONFIG.read_text(encoding="utf-8")
    for table in ("stirring", "ensemble.perturbation"):
        text = re.sub(rf"\[{re.escape(table)}\]\n(.+\n)+", "", text)
    with pytest.raises(ConfigError, match="would all be the same"):
        parse_config(text, StudyConfig, "text")
    assert parse_config(text, StudyConfig, "text", ["ensemble.members=1"])
    with pytest.raises(ConfigError, match="no meaning with"):
        config_of("initial={kind='noise', energy='1e-3 m2/s2', band=[1, 2]}")


def test_processes_make_the_same_bits(serial, tmp_path):
    config = config_of()
    seen = []
    with opened_executor(config.engine, 6) as executor:
        outcomes = run_ensemble(
            config,
            tmp_path,
            executor=executor,
            progress=lambda *how_far: seen.append(how_far),
        )
    assert statuses(outcomes) == ["done"] * 6
    assert_same_bits(tmp_path, serial, SIX)
    assert not multiprocessing.active_children()
    assert seen[-1] == (6 * 450, 6)  # 45 days of a tenth of a day


def test_any_executor_will_do(serial, tmp_path):
    with ThreadPoolExecutor(1) as executor:
        run_ensemble(config_of(), tmp_path, range(2), executor=executor)
    assert_same_bits(tmp_path, serial, range(2))


def test_finished_members_are_skipped_and_more_can_be_added(serial, tmp_path):
    run_ensemble(config_of("ensemble.members=2"), tmp_path)
    before = [member_paths(tmp_path, m)[0].stat().st_mtime_ns for m in range(2)]
    outcomes = run_ensemble(config_of(), tmp_path)
    assert statuses(outcomes) == ["skipped"] * 2 + ["done"] * 4
    after = [member_paths(tmp_path, m)[0].stat().st_mtime_ns for m in range(2)]
    assert before == after
    assert_same_bits(tmp_path, serial, SIX)


def test_a_member_that_blows_up_stops_no_other(serial, tmp_path):
    # The bound lies between the largest energies of the two most energetic members,
    # at the steps at which a run is looked at: every fiftieth, which is every fifth
    # of the daily records after a spin-up of five days.
    energies = [contents(member_paths(serial, m)[0])["energy"][::5].max() for m in SIX]
    second, first = np.argsort(energies)[-2:]
    bound = (energies[first] + energies[second]) / 2
    config = config_of(
        f"time.energy_bound={bound:.17g} m2/s2", "output.checkpoint_every=5 d"
    )
    with opened_executor(config.engine, 6) as executor:
        outcomes = run_ensemble(config, tmp_path, executor=executor)
    failed = [outcome for outcome in outcomes if outcome.status == "failed"]
    assert [outcome.member for outcome in failed] == [first]
    assert "blew up" in failed[0].reason
    others = [member for member in SIX if member != first]
    assert complete_members(config, tmp_path) == others
    assert_same_bits(tmp_path, serial, others)
    with h5py.File(tmp_path / "ensemble.h5") as file:
        assert file["member"][...].tolist() == others
        assert file.attrs["members_asked"] == 6


@pytest.fixture(scope="module")
def killed(tmp_path_factory):
    """Three longer members, during which one of two processes was killed."""
    folder = tmp_path_factory.mktemp("killed")
    config = config_of("ensemble.members=3", *LONG)

    def kill_one():
        wait_for(lambda: len(at_work(folder, 500)) == 2)
        multiprocessing.active_children()[0].kill()

    killer = threading.Thread(target=kill_one)
    with opened_executor(config.engine, 3) as executor:
        killer.start()
        outcomes = run_ensemble(config, folder, executor=executor)
    killer.join()
    assert statuses(outcomes) == ["done"] * 3
    return folder


def test_a_killed_process_costs_no_member(killed, tmp_path):
    config = config_of("ensemble.members=3", *LONG)
    run_ensemble(config, tmp_path, [0, 1])
    assert_same_bits(killed, tmp_path, [0, 1])


def test_a_call_that_kills_its_process_is_given_up_alone():
    executor = WorkerProcesses(2)
    deadly = executor.submit(os._exit, 3)
    others = [executor.submit(pow, 2, n) for n in range(5)]
    with pytest.raises(LostWorker, match="died 3 times"):
        deadly.result(timeout=60)
    assert [other.result(timeout=60) for other in others] == [1, 2, 4, 8, 16]
    with pytest.raises(ZeroDivisionError):
        executor.submit(divmod, 1, 0).result(timeout=60)
    executor.shutdown()
    assert not multiprocessing.active_children()


def test_a_stop_reaches_the_workers_and_a_resumed_member_is_the_same(tmp_path):
    config, folder = config_of("time.duration=4000 d"), tmp_path / "truth"
    with opened_executor(config.engine, 6) as executor:
        outcomes = run_ensemble(
            config,
            folder,
            executor=executor,
            stop=lambda: len(at_work(folder)) == 2,
        )
    assert set(statuses(outcomes)) == {"stopped"}
    assert sum("checkpoint" in outcome.reason for outcome in outcomes) == 2
    assert sum(outcome.reason == "not begun" for outcome in outcomes) == 4
    assert not list(folder.glob(".stop-*"))
    # Forty steps more, and as many without a stop.
    more, reached = iter(range(40)), reached_step(folder, 0)
    run_member(config, 0, folder, stop=lambda: next(more, None) is None)
    straight = iter(range(reached + 40))
    again = tmp_path / "again"
    run_member(config, 0, again, stop=lambda: next(straight, None) is None)
    assert reached_step(again, 0) == reached_step(folder, 0) > reached
    assert_same_bits(folder, again, [0])


def test_workers_have_one_thread_and_the_parent_its_environment(monkeypatch):
    monkeypatch.delenv("OPENBLAS_NUM_THREADS", raising=False)
    monkeypatch.setenv("OMP_NUM_THREADS", "3")  # whoever sets it means it
    with opened_executor(config_of().engine, 1) as executor:
        names = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS")
        found = [executor.submit(os.getenv, name).result(60) for name in names]
    assert found == ["1", "3"]
    assert "OPENBLAS_NUM_THREADS" not in os.environ


def test_a_stop_file_stops_a_worker_before_it_begins(tmp_path):
    sign = tmp_path / "stop"
    sign.touch()
    found = work(config_of(), 0, str(tmp_path), str(sign))
    assert (found.status, found.reason) == ("stopped", "not begun")
    assert not list(tmp_path.glob("member-*"))


def test_a_worker_that_cannot_be_had_is_told(tmp_path):
    class Nobody(ThreadPoolExecutor):
        def submit(self, fn, /, *args, **kwargs):
            call = Future()
            call.set_exception(ConnectionError("no route"))
            return call

    with Nobody(1) as executor:
        outcomes = run_ensemble(config_of(), tmp_path, [2], executor=executor)
    assert statuses(outcomes) == ["failed"]
    assert "no route" in outcomes[0].reason


def test_one_member_has_one_process(tmp_path):
    with holding(member_lock(tmp_path, 1)):
        outcomes = run_ensemble(config_of(), tmp_path, [0, 1])
        assert statuses(outcomes) == ["done", "busy"]
        with pytest.raises(Busy, match="another process"):
            run_member(config_of(), 1, tmp_path)
    assert statuses(run_ensemble(config_of(), tmp_path, [0, 1])) == ["skipped", "done"]


def test_a_folder_that_was_moved_ends_the_run(tmp_path):
    here, there = tmp_path / "here", tmp_path / "there"
    steps = iter(range(1000))

    def stop():
        if next(steps) == 200:
            here.rename(there)
        return False

    with pytest.raises(RunFolderError, match="moved or removed"):
        run_member(config_of(), 0, here, stop=stop)
    assert not here.exists()
    # The checkpoints went along, and the run goes on from them.
    assert run_member(config_of(), 0, there)


def test_the_ensemble_shows_what_the_members_hold(serial):
    with h5py.File(serial / "ensemble.h5") as file:
        for name in ("state", "energy", "resolved", "vorticity"):
            shown = file[name]
            assert shown.dims[0][0].name == "/member"
            for member in SIX:
                held = contents(member_paths(serial, member)[0])[name]
                np.testing.assert_array_equal(shown[member], held)
    records = open_records(serial)
    assert [len(record.times) for record in records] == [41] * 6
    assert open_records(serial, [4])[0].path.name == "member-004.h5"


@pytest.mark.parametrize("engine", ["h5netcdf", "netcdf4"])
def test_xarray_opens_the_ensemble(serial, engine):
    xarray = pytest.importorskip("xarray")
    with xarray.open_dataset(serial / "ensemble.h5", engine=engine) as data:
        assert data["state"].dims == ("member", "time", "coordinate")
        assert data["vorticity"].dims == ("member", "fields_time", "y", "x")
        assert data["member"].values.tolist() == list(SIX)
        assert data["state"].attrs["units"] == "m s-1"
        held = contents(member_paths(serial, 2)[0])["state"]
        np.testing.assert_array_equal(data["state"].sel(member=2).values, held)


def test_the_engine_and_the_number_of_members_are_no_part_of_a_run():
    one = truth_table(config_of())
    for override in (
        "engine={kind='serial'}",
        "engine.workers=9",
        "ensemble.members=3",
    ):
        assert truth_table(config_of(override)) == one
    # The perturbation is: of all members but the first.
    other = config_of("ensemble.perturbation.energy=2e-4 m2/s2")
    assert truth_table(other) == one
    assert truth_table(other, 1) != truth_table(config_of(), 1)


def test_another_perturbation_is_refused_for_the_members_that_have_it(serial):
    other = config_of("ensemble.perturbation.energy=2e-4 m2/s2")
    outcomes = run_ensemble(other, serial, [0, 1])
    assert statuses(outcomes) == ["skipped", "failed"]
    assert "perturbation.energy: was 0.0001, now 0.0002" in outcomes[1].reason


def test_workers():
    assert workers_of(config_of().engine, 6) == 2
    assert workers_of(config_of().engine, 1) == 1
    assert workers_of(config_of("engine={kind='serial'}").engine, 6) == 1
    dask = "engine={kind='dask', address='tcp://127.0.0.1:1'}"
    assert workers_of(config_of(dask).engine, 6) is None


@pytest.mark.parametrize(
    ("kind", "override"),
    [
        ("bottom", "ocean.topography.hill={kind='file', path='PATH'}"),
        ("start", "initial={kind='field', path='PATH'}"),
    ],
)
def test_a_file_that_changed_is_noticed_and_named(tmp_path, kind, override):
    path = tmp_path / f"{kind}.npy"
    ridge = np.cos(2 * np.pi * np.arange(16) / 16) * np.ones((16, 1))
    np.save(path, 1e-6 * ridge)
    more = ("ocean.coriolis=1e-4 1/s", "ocean.depth=4000 m") if kind == "bottom" else ()
    config = config_of(override.replace("PATH", str(path)), *more)
    folder = tmp_path / "truth"
    assert run_member(config, 0, folder)
    assert complete_members(config, folder, [0]) == [0]
    np.save(path, 2e-6 * ridge)
    assert complete_members(config, folder, [0]) == []
    with pytest.raises(RunFolderError, match=rf"{path.name} has other contents"):
        run_member(config, 0, folder)
    path.unlink()
    with pytest.raises(DataError, match=path.name):
        complete_members(config, folder, [0])
