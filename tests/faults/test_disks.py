"""A full disk, a folder that must not be written, a folder that vanishes."""

import os
import resource
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

import pytest
from survivors import check_what_is_there, finish
from tiny_truth import config_of
from victims import OVERRIDES, look

from eddyshed.solver.errors import RunFolderError
from eddyshed.solver.segments import member_paths, reached_step
from eddyshed.solver.truth import run_member


def sizes(folder):
    """Bytes of the index, and of the largest segment, of a whole run."""
    index, segments = member_paths(folder, 0)
    return index.stat().st_size, max(p.stat().st_size for p in segments.iterdir())


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory):
    folder = tmp_path_factory.mktemp("undisturbed")
    assert run_member(config_of(*OVERRIDES), 0, folder)
    return folder


@pytest.mark.parametrize("room", ["none", "half a segment", "segments, not the index"])
def test_a_disk_that_fills_up(victims, whole, undisturbed, tmp_path, room):
    index, segment = sizes(undisturbed)
    limit = {"none": 0, "half a segment": segment // 2}.get(room, index - 1)
    if limit == index - 1:
        # Of a run this short the index is the larger file, if by little.
        assert segment < limit
    victims.start(tmp_path, room=(13, limit), pause=0)
    code, problem = victims.end()
    assert code == RunFolderError.exit_code == 2
    assert problem.startswith("RunFolderError: ")
    assert "cannot be written (File too large)" in problem
    assert "what was there before is untouched" in problem
    assert "run the same command again" in problem
    acknowledged, _ = look(victims.board)
    assert acknowledged >= 13
    check_what_is_there(tmp_path, whole, acknowledged)
    assert list(tmp_path.rglob("*.partial")) == []
    # Room was made: the same command goes on.
    finish(tmp_path, whole)


@pytest.fixture
def open_folder():
    """A folder that any user can reach, which pytest's own are not."""
    folder = Path(tempfile.mkdtemp())
    folder.chmod(0o755)
    yield folder
    for inner in [folder, *folder.rglob("*")]:
        if inner.is_dir():
            inner.chmod(0o755)
    shutil.rmtree(folder)


def test_a_folder_that_must_not_be_written(victims, whole, open_folder):
    # Root is not bound by permissions, so there a victim becomes nobody first.
    truth = open_folder / "truth"
    steps = iter(range(17))
    run_member(config_of(*OVERRIDES), 0, truth, stop=lambda: next(steps, None) is None)
    reached = reached_step(truth, 0)
    for folder in (truth / "member-000", truth):
        folder.chmod(0o555)
    victims.start(truth, as_nobody=True, pause=0)
    code, problem = victims.end()
    assert code == 2, problem
    assert problem.startswith(f"RunFolderError: {truth}")
    assert "cannot be written (Permission denied)" in problem
    assert look(victims.board)[0] == 0
    assert reached_step(truth, 0) == reached
    check_what_is_there(truth, whole, reached)
    for folder in (truth, truth / "member-000"):
        folder.chmod(0o755)
    finish(truth, whole)


@pytest.mark.parametrize("what", ["member-000", "."])
def test_a_folder_that_vanishes_under_way(whole, tmp_path, what):
    truth = tmp_path / "truth"
    elsewhere = tmp_path / "elsewhere"

    def unmount(_):
        # Told of a step that has no checkpoint yet, it waits for one.
        if reached_step(truth, 0) >= 13 and not elsewhere.exists():
            (truth / what).resolve().rename(elsewhere)

    said = {"member-000": r"vanished.*still mounted", ".": "moved or removed"}[what]
    with pytest.raises(RunFolderError, match=said) as caught:
        run_member(config_of(*OVERRIDES), 0, truth, progress=unmount)
    assert str(truth) in str(caught.value)
    # It was not made anew, with a gap where the first part was.
    assert not (truth / "member-000").exists()
    elsewhere.rename(truth / what if what != "." else truth)
    check_what_is_there(truth, whole, 13)
    finish(truth, whole)


def test_the_command_says_so_and_exits_with_2(tmp_path):
    config = Path(__file__).parents[1] / "tiny.toml"
    command = [sys.executable, "-m", "eddyshed.reduce.cli", "truth", str(config)]
    result = subprocess.run(
        [*command, "--runs", str(tmp_path / "runs"), "--set", "time.duration=80 d"],
        capture_output=True,
        text=True,
        check=False,
        timeout=120,
        # Room for the study's small files, not for a segment.
        preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (30_000, 30_000)),
    )
    assert result.returncode == 2
    assert "cannot be written (File too large)" in result.stderr
    assert "Traceback" not in result.stderr
    assert os.listdir(tmp_path / "runs") == ["tiny"]
