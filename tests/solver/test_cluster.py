"""Members on the workers of a real Dask scheduler, on this machine's loopback."""

import subprocess
import sys

import pytest
from ensembles import CONFIG, LONG, assert_same_bits, at_work, config_of, wait_for

from eddyshed.reduce.cli import main
from eddyshed.solver.engine import opened_executor
from eddyshed.solver.ensemble import run_ensemble
from eddyshed.solver.errors import EngineError

pytestmark = pytest.mark.slow  # the scheduler and its workers take seconds to start


@pytest.fixture(scope="module")
def cluster(tmp_path_factory):
    """A scheduler and two workers; gives its file and the workers' processes."""
    pytest.importorskip("distributed")
    folder = tmp_path_factory.mktemp("cluster")
    where = folder / "scheduler.json"
    common = ["--scheduler-file", str(where), "--no-dashboard"]
    loopback = ["--host", "127.0.0.1"]

    def start(what, *options):
        command = [sys.executable, "-m", "dask", what, *common, *loopback, *options]
        with (folder / f"{what}.log").open("a") as log:
            return subprocess.Popen(command, stdout=log, stderr=log, cwd=folder)

    scheduler = start("scheduler", "--port", "0")
    wait_for(where.exists)
    # No nanny: a worker that is killed stays dead.
    workers = [start("worker", "--nthreads", "1", "--no-nanny") for _ in range(2)]
    yield where, workers
    for process in (*workers, scheduler):
        process.kill()
        process.wait()


def engine(where):
    return f"engine={{kind='dask', scheduler_file='{where}'}}"


@pytest.fixture
def serial(tmp_path):
    """Six members, one after another in this process."""
    folder = tmp_path / "serial"
    run_ensemble(config_of(), folder)
    return folder


def test_a_cluster_makes_the_same_bits(cluster, serial, tmp_path):
    where, _ = cluster
    command = ["truth", str(CONFIG), "--set", engine(where), "--runs", str(tmp_path)]
    assert main([*command, "--quiet"]) == 0
    assert_same_bits(tmp_path / "ensemble/truth", serial, range(6))


def test_a_lost_worker_costs_no_member(cluster, tmp_path):
    where, workers = cluster
    config = config_of(engine(where), "ensemble.members=3", *LONG)
    folder = tmp_path / "truth"
    killed = []

    def kill_one(steps, complete):
        if not killed and len(at_work(folder, 100)) == 2:
            workers[0].kill()
            killed.append(steps)

    with opened_executor(config.engine, 3) as executor:
        outcomes = run_ensemble(config, folder, executor=executor, progress=kill_one)
    assert killed
    assert [outcome.status for outcome in outcomes] == ["done"] * 3
    other = tmp_path / "other"
    run_ensemble(config, other, [0, 1])
    assert_same_bits(folder, other, [0, 1])


def test_no_scheduler_is_one_clear_error(monkeypatch):
    pytest.importorskip("distributed")
    monkeypatch.setattr("eddyshed.solver.engine.PATIENCE", 1)
    config = config_of("engine={kind='dask', address='tcp://127.0.0.1:9'}")
    with (
        pytest.raises(EngineError, match=r"no Dask scheduler answers at tcp://127"),
        opened_executor(config.engine, 1),
    ):
        pass


def test_no_dask_is_one_clear_error(monkeypatch):
    monkeypatch.setitem(sys.modules, "dask.distributed", None)
    config = config_of("engine={kind='dask', address='tcp://127.0.0.1:9'}")
    with (
        pytest.raises(EngineError, match=r'pip install "eddyshed\[cluster\]"'),
        opened_executor(config.engine, 1),
    ):
        pass
