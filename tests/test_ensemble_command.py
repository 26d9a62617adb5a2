"""Ensembles by the command: slices, signals, what is said of failures and of space."""

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import h5py
import pytest
from ensembles import CONFIG, LONG, assert_same_bits, at_work, config_of, wait_for

from eddyshed.reduce.cli import main
from eddyshed.reduce.show import describe
from eddyshed.solver.ensemble import run_ensemble
from eddyshed.solver.locks import holding, member_lock
from eddyshed.solver.record import open_records
from eddyshed.solver.segments import reached_step

COMMAND = Path(sys.executable).with_name("eddyshed")


def arguments(runs, *overrides, members=4):
    overrides = (f"ensemble.members={members}", *overrides)
    options = [part for text in overrides for part in ("--set", text)]
    return ["truth", str(CONFIG), "--runs", str(runs), *options]


def started(runs, *options, members=4, overrides=()):
    """The command, in a group of processes of its own."""
    return subprocess.Popen(
        [COMMAND, *arguments(runs, *overrides, members=members), *options],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )


def group_is_gone(process):
    try:
        os.killpg(process.pid, 0)
    except ProcessLookupError:
        return True
    return False


@pytest.fixture(scope="module")
def serial(tmp_path_factory):
    """Four members, one after another in this process."""
    folder = tmp_path_factory.mktemp("serial")
    run_ensemble(config_of("ensemble.members=4"), folder)
    return folder


def test_slices_work_in_one_folder_at_the_same_time(serial, tmp_path):
    folder = tmp_path / "ensemble"
    processes = [
        started(tmp_path, "--members", members, "--workers", "1", "--json")
        for members in ("0:2", "2:4")
    ]
    found = [json.loads(p.communicate(timeout=120)[0])["truth"] for p in processes]
    assert [p.returncode for p in processes] == [0, 0]
    assert [f["counts"] for f in found] == [{"done": 2}, {"done": 2}]
    assert [m["member"] for m in found[1]["members"]] == [2, 3]
    assert_same_bits(folder / "truth", serial, range(4))
    with h5py.File(folder / "truth/ensemble.h5") as file:
        assert file["member"][...].tolist() == [0, 1, 2, 3]


def test_members_that_are_missing_are_told_and_run_by_whoever_needs_them(
    serial, tmp_path, capsys
):
    common = arguments(tmp_path, "engine={kind='serial'}")
    assert main([*common, "--members", "1:3"]) == 0
    out = capsys.readouterr().out
    assert "2 members: 2 done" in out
    assert "members 0 and 3 are not complete, of the 4" in out
    facts = describe(tmp_path / "ensemble")
    assert facts["members"] == "4: 2 not begun, 2 complete"
    assert main(common) == 0
    captured = capsys.readouterr()
    assert "4 members: 2 done, 2 skipped" in captured.out
    assert "running, because members 0 and 3 are not at the end" in captured.err
    assert_same_bits(tmp_path / "ensemble/truth", serial, range(4))
    assert main([*common, "--json"]) == 0
    captured = capsys.readouterr()
    assert json.loads(captured.out)["truth"]["counts"] == {"skipped": 4}
    assert "truth: up to date" in captured.err
    # One file lost: made anew, and no member is run for it.
    shown = tmp_path / "ensemble/truth/ensemble.h5"
    shown.unlink()
    assert main([*common, "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["truth"]["counts"] == {"skipped": 4}
    assert shown.is_file()


def test_sigterm_lets_all_workers_checkpoint_and_the_rest_is_the_same(tmp_path):
    truth = tmp_path / "ensemble/truth"
    with started(tmp_path, overrides=LONG, members=3) as process:
        wait_for(lambda: len(at_work(truth)) == 2)
        # To all of the group, as a batch system does.
        os.killpg(process.pid, signal.SIGTERM)
        _, err = process.communicate(timeout=60)
    assert process.returncode == 143
    assert "checkpoint written" in err
    assert "Traceback" not in err
    wait_for(lambda: group_is_gone(process), 10)
    facts = describe(tmp_path / "ensemble")
    assert facts["members"] == "3: 2 stopped, 1 not begun"
    assert "last checkpoint at" in facts["member 0"]
    again = arguments(tmp_path, *LONG, "engine={kind='serial'}", members=3)
    assert main([*again, "--quiet", "--members", "0:2"]) == 0
    other = tmp_path / "other"
    run_ensemble(config_of(*LONG), other, range(2))
    assert_same_bits(truth, other, range(2))


@pytest.mark.parametrize("end", ["second signal", "kill"])
def test_an_abrupt_end_leaves_no_orphan(tmp_path, end):
    truth = tmp_path / "ensemble/truth"
    endless = ("time.duration=400000 d", "output.fields_every=400000 d")
    with started(tmp_path, overrides=endless, members=2) as process:
        wait_for(lambda: len(at_work(truth)) == 2)
        if end == "kill":
            process.kill()
        else:
            for _ in range(2):  # to all of the group, as a terminal does
                os.killpg(process.pid, signal.SIGINT)
                time.sleep(0.1)
        process.communicate(timeout=60)
    assert process.returncode == {"kill": -9, "second signal": 130}[end]
    wait_for(lambda: group_is_gone(process), 20)
    if end == "kill":  # the workers saw that they were alone, and checkpointed
        assert min(reached_step(truth, member) for member in range(2)) > 0


def test_a_failed_member_is_told_and_others_are_kept(tmp_path, capsys):
    # So much energy in the perturbation that all but the first are beyond the bound.
    wild = ("ensemble.perturbation.energy=2000 m2/s2", "engine={kind='serial'}")
    common = arguments(tmp_path, *wild, members=2)
    assert main(common) == 1
    captured = capsys.readouterr()
    assert "1       failed    truth run blew up" in captured.out
    assert "2 members: 1 done, 1 failed" in captured.out
    assert "member 1 is not complete" in captured.err
    assert main([*common, "--json"]) == 1
    found = json.loads(capsys.readouterr().out)["truth"]
    assert found["counts"] == {"skipped": 1, "failed": 1}
    assert found["missing"] == [1]
    facts = describe(tmp_path / "ensemble")
    assert facts["member 0"].startswith("complete")
    assert facts["member 1"].startswith("failed")
    assert "blew up" in facts["member 1"]
    # Nothing is reduced from half of a truth.
    assert main(["reduce", *common[1:], "--quiet"]) == 1
    assert not (tmp_path / "ensemble/split.h5").exists()


def test_a_member_at_work_elsewhere_is_told(serial, tmp_path, capsys):
    truth = tmp_path / "ensemble/truth"
    shutil.copytree(serial, truth)
    shutil.rmtree(truth / "member-003")
    (truth / "member-003.h5").unlink()
    common = arguments(tmp_path, "engine={kind='serial'}")
    with holding(member_lock(truth, 3)):
        assert main(common) == 1
        assert describe(tmp_path / "ensemble")["member 3"].startswith("at work")
    out = capsys.readouterr().out
    assert "3       busy      another process" in out
    assert "4 members: 1 busy, 3 skipped" in out


def test_a_folder_that_cannot_be_written_is_named(tmp_path, capsys):
    (tmp_path / "ensemble").mkdir()
    (tmp_path / "ensemble/truth").write_text("")  # where a folder is needed
    assert main(arguments(tmp_path, "engine={kind='serial'}")) == 2
    assert "truth: cannot be written" in capsys.readouterr().err


@pytest.mark.parametrize("members", ["3", "a:b", "-1:2", "2:2", "3:9"])
def test_members_that_are_no_slice_are_refused(tmp_path, capsys, members):
    try:
        code = main([*arguments(tmp_path), f"--members={members}"])
    except SystemExit as error:  # argparse
        code = error.code
    assert code == 2
    assert "--members" in capsys.readouterr().err
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (("--engine", "dask"), "needs either address or scheduler_file"),
        (("--workers", "0"), "at least 1"),
        (("--engine", "serial"), 'belongs to [engine] kind = "processes"'),
    ],
)
def test_an_engine_that_is_no_engine_is_refused(tmp_path, capsys, options, words):
    overrides = () if "serial" in options else ("engine={}",)
    if "dask" not in options:
        overrides = ()
    assert main([*arguments(tmp_path, *overrides), *options]) == 2
    assert words in capsys.readouterr().err


def test_a_truth_larger_than_the_disk_is_refused(tmp_path, capsys, monkeypatch):
    monkeypatch.setattr("eddyshed.reduce.truth_stage.free_bytes", lambda _: 1_000_000)
    common = arguments(tmp_path, "engine={kind='serial'}")
    assert main(["check", *common[1:]]) == 2
    captured = capsys.readouterr()
    assert "the truth will take" in captured.err
    assert "--ignore-disk-space" in captured.err
    assert "time on the clock" in captured.out
    assert main(common) == 2
    assert not list(tmp_path.rglob("*.h5"))
    assert main([*common, "--ignore-disk-space", "--quiet"]) == 0
    # What is there already takes no more room.
    assert main(["check", *common[1:]]) == 0


def test_the_log_tells_times_and_versions(tmp_path):
    common = arguments(tmp_path, "engine={kind='serial'}")
    assert main([*common, "--members", "0:1", "--quiet"]) == 0
    text = (tmp_path / "ensemble/study.log").read_text(encoding="utf-8")
    for words in ("eddyshed ", "Python ", "numpy ", "h5py ", "member 0: done"):
        assert words in text


def test_the_overnight_config_cut_down(tmp_path, capsys):
    overnight = Path(__file__).parents[1] / "configs/overnight.toml"
    options = []
    for text in (
        "grid.points=[32, 32]",
        "stirring.band=[4, 6]",
        "ensemble.perturbation.band=[4, 6]",
        "ensemble.members=3",
        "time.spin_up=20 d",
        "time.duration=60 d",
        "output.checkpoint_every=20 d",
    ):
        options += ["--set", text]
    common = [str(overnight), "--runs", str(tmp_path), *options]
    assert main(["check", *common]) == 0
    assert "3, 2 at a time" in capsys.readouterr().out
    assert main(["truth", *common]) == 0
    assert "3 members: 3 done" in capsys.readouterr().out
    records = open_records(tmp_path / "overnight/truth")
    assert [len(record.times) for record in records] == [7] * 3
