"""The command, as a user runs it."""

import json
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import h5py
import numpy as np
import pytest

from eddyshed.reduce.cli import main

TINY = Path(__file__).with_name("tiny.toml")
MADE = (
    "truth/member-000.h5",
    "flow.h5",
    "split.h5",
    "closures.h5",
    "audit.json",
    "benchmark.json",
    "report.html",
)


def eddyshed(*arguments, **options):
    """Run the installed command in a process of its own."""
    command = [Path(sys.executable).with_name("eddyshed"), *map(str, arguments)]
    return subprocess.run(
        command, capture_output=True, text=True, timeout=300, check=False, **options
    )


@pytest.fixture(scope="session")
def study(tmp_path_factory):
    """A whole tiny study, made in one go."""
    runs = tmp_path_factory.mktemp("runs")
    result = eddyshed("study", TINY, "--runs", runs)
    assert result.returncode == 0, result.stderr
    return runs / "tiny", result


def numbers(folder):
    """Every number of a study that does not tell the time."""
    found = {}
    for path in sorted(folder.rglob("*.h5")):
        if "segment" in path.name:
            continue

        def visit(name, item, path=path):
            if isinstance(item, h5py.Dataset) and item.dtype.kind in "fi":
                found[f"{path.relative_to(folder)}:{name}"] = item[...]

        with h5py.File(path) as file:
            file.visititems(visit)
    for name in ("audit.json", "benchmark.json"):
        content = json.loads((folder / name).read_text())
        if "truth" in content:
            del content["truth"]["cost"]
            for entry in content["closures"]:
                del entry["cost"]
        found[name] = content
    return found


def assert_same_numbers(one, other):
    one, other = numbers(one), numbers(other)
    assert one.keys() == other.keys()
    for name, value in one.items():
        if isinstance(value, np.ndarray):
            np.testing.assert_array_equal(value, other[name], err_msg=name)
        else:
            assert value == other[name], name


def test_study_makes_everything_and_prints_the_scores(study):
    folder, result = study
    for name in MADE:
        assert (folder / name).is_file()
    for word in ("separation", "recommended", "residual", "within sampling", "+-"):
        assert word in result.stdout
    # Results go to stdout, what goes on to stderr.
    assert "running" in result.stderr
    assert "running" not in result.stdout
    assert "Not a forecast" in result.stdout


def test_the_audit_sees_that_the_white_closure_grows(study):
    # Its drift has no cubic term here, and the model says so itself.
    folder, _ = study
    audit = json.loads((folder / "audit.json").read_text())
    scores = json.loads((folder / "benchmark.json").read_text())["closures"]
    notes = " ".join(note for entry in scores for note in entry["notes"])
    assert "the closure is linearly unstable" in notes
    failing = {
        one["closure"]
        for one in audit["closures"]
        for reason in one["reasons"]
        if reason.startswith("balance: white stability fails")
    }
    assert failing == {"white"}


def test_a_second_call_reuses_everything(study):
    folder, first = study
    before = {name: (folder / name).stat().st_mtime_ns for name in MADE}
    result = eddyshed("study", TINY, "--runs", folder.parent)
    assert result.returncode == 0
    assert result.stdout == first.stdout
    assert result.stderr.count("up to date, reused") == 6  # each stage, once
    assert "running" not in result.stderr
    assert before == {name: (folder / name).stat().st_mtime_ns for name in MADE}


def test_only_what_depends_on_a_change_is_run_again(study, tmp_path):
    folder, _ = study
    copy = tmp_path / "tiny"
    subprocess.run(["cp", "-a", folder, copy], check=True)
    result = eddyshed(
        "study", TINY, "--runs", tmp_path, "--set", "audit.separation=2.25"
    )
    assert result.returncode == 0
    for line in ("truth: up to date", "reduce: up to date", "benchmark: up to date"):
        assert line in result.stderr
    for line in ("audit: running", "report: running"):
        assert line in result.stderr
    assert "# with --set audit.separation=2.25" in (copy / "config.toml").read_text()


def test_two_runs_are_the_same_to_the_bit(study, tmp_path):
    folder, _ = study
    assert eddyshed("study", TINY, "--runs", tmp_path, "--quiet").returncode == 0
    assert_same_numbers(tmp_path / "tiny", folder)
    assert (tmp_path / "tiny/config.toml").read_text() == TINY.read_text()


@pytest.mark.parametrize(
    ("number", "code"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)]
)
def test_a_signal_in_the_truth_leaves_a_checkpoint(study, tmp_path, number, code):
    command = [Path(sys.executable).with_name("eddyshed"), "study", TINY]
    with subprocess.Popen(
        [*command, "--runs", tmp_path], stderr=subprocess.PIPE, text=True
    ) as process:
        for line in process.stderr:
            if "step 0 of" in line:
                break
        time.sleep(0.3)
        process.send_signal(number)
        rest = process.stderr.read()
        assert process.wait(timeout=60) == code
    assert "checkpoint written" in rest
    assert list(tmp_path.glob("tiny/truth/member-000/segment-*.h5"))
    result = eddyshed("study", TINY, "--runs", tmp_path)
    assert result.returncode == 0
    assert "step 0 of" not in result.stderr
    assert_same_numbers(tmp_path / "tiny", study[0])


@pytest.mark.parametrize("stage", ["reduce", "audit", "benchmark"])
def test_a_kill_in_any_later_stage_costs_that_stage_at_most(study, tmp_path, stage):
    folder, _ = study
    copy = tmp_path / "tiny"
    copy.mkdir()
    subprocess.run(["cp", "-a", folder / "truth", copy / "truth"], check=True)
    command = [Path(sys.executable).with_name("eddyshed"), "study", TINY]
    with subprocess.Popen(
        [*command, "--runs", tmp_path], stderr=subprocess.PIPE, text=True
    ) as process:
        for line in process.stderr:
            if line.startswith(f"{stage}: running"):
                break
        time.sleep(0.2)
        process.kill()
        process.stderr.read()
    result = eddyshed("study", TINY, "--runs", tmp_path)
    assert result.returncode == 0, result.stderr
    assert_same_numbers(copy, folder)
    assert not list(copy.rglob("*.partial")) or process.returncode == -signal.SIGKILL


def test_json_for_machines(study):
    folder, _ = study
    result = eddyshed("benchmark", TINY, "--runs", folder.parent, "--json")
    found = json.loads(result.stdout)["benchmark"]
    assert {entry["name"] for entry in found["closures"]} == {
        "bare",
        "residual",
        "coloured",
        "white",
    }
    scores = found["closures"][1]["scores"]
    assert {s["quantity"] for s in scores} >= {"mean", "variance", "integral time"}
    for part in scores:
        # No number without its error.
        assert len(part["difference"]["error"]) == len(part["difference"]["value"])


def test_show(study, capsys):
    folder, _ = study
    assert main(["show", str(folder)]) == 0
    assert "complete" in capsys.readouterr().out
    assert main(["show", str(folder / "truth/member-000.h5"), "--json"]) == 0
    facts = json.loads(capsys.readouterr().out)
    assert facts["grid"] == "16 x 16"
    assert "100 %, complete" in facts["reached"]


def test_show_writes_out_a_reduced_equation(study, capsys):
    folder, _ = study
    assert main(["show", str(folder), "--equation", "white"]) == 0
    out = capsys.readouterr().out
    assert "x1 = cos 0,1, typically" in out
    assert "dx1/dt = " in out
    assert main(["show", str(folder), "--equation", "white", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["equation"] == out.rstrip("\n")
    assert main(["show", str(folder), "--equation", "coloured"]) == 2
    assert "named 'coloured'; it has white" in capsys.readouterr().err
    assert main(["show", str(folder / "truth"), "--equation", "white"]) == 2
    assert "holds no closures.h5" in capsys.readouterr().err


def test_check_runs_nothing(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert main(["check", str(TINY)]) == 0
    out = capsys.readouterr().out
    for words in ("grid spacing", "12000 steps", "MB free", "Not a forecast"):
        assert words in out
    assert list(tmp_path.iterdir()) == []
    assert main(["check", "--reference"]) == 0
    reference = capsys.readouterr().out
    for key in ("hyperviscosity_time", "state_every", "variance_tolerance"):
        assert key in reference


@pytest.mark.parametrize(
    ("override", "words"),
    [
        ("ocean.viscocity=1 m2/s", 'did you mean "viscosity"'),
        ("ocean.drag=0.01 1/m", "drag"),
        ("ocean.drag=0.01", "drag"),
        ("ocean.drag=-1 1/d", "drag"),
        ("grid.points=[17, 16]", "must be even"),
        ("time.step=0.7 d", "whole number of steps"),
        ("closures.use=['bear']", "bare"),
        ('resolved.family="zonal "', "zonal"),
        ("nonsense", "nonsense"),
        ('name="../away"', "folder name"),
    ],
)
def test_bad_config_writes_nothing(tmp_path, capsys, override, words):
    code = main(["study", str(TINY), "--runs", str(tmp_path), "--set", override])
    assert code == 2
    captured = capsys.readouterr()
    assert words in captured.err
    assert captured.out == ""
    assert "Traceback" not in captured.err
    assert list(tmp_path.iterdir()) == []


def test_bad_config_names_all_problems_at_once(tmp_path, capsys):
    overrides = ["grid.points=[17, 16]", "ocean.drag=-1 1/d", "time.step=0.7 km"]
    options = [part for text in overrides for part in ("--set", text)]
    assert main(["check", str(TINY), *options]) == 2
    err = capsys.readouterr().err
    for word in ("points", "drag", "step", "3 problems"):
        assert word in err


@pytest.mark.parametrize(
    ("override", "words"),
    [
        ("resolved.up_to=12", "beyond the grid"),
        ("forcing.trades.waves=[0, 9]", "beyond the modes"),
    ],
)
def test_what_does_not_fit_the_grid_is_refused_before_the_truth(
    tmp_path, capsys, override, words
):
    assert main(["study", str(TINY), "--runs", str(tmp_path), "--set", override]) == 2
    assert words in capsys.readouterr().err
    assert not list(tmp_path.rglob("*.h5"))


def test_too_many_modes_for_a_cubic_are_refused_before_the_truth(tmp_path, capsys):
    options = ["--set", "resolved.family=isotropic", "--set", "resolved.up_to=5"]
    assert main(["study", str(TINY), "--runs", str(tmp_path), *options]) == 2
    assert "it is made for at most 48 modes" in capsys.readouterr().err
    assert not list(tmp_path.rglob("*.h5"))


def test_a_folder_of_another_config_is_refused(study, capsys):
    folder, _ = study
    before = numbers(folder)
    code = main(
        ["truth", str(TINY), "--runs", str(folder.parent), "--set", "seed=4", "--quiet"]
    )
    assert code == 2
    assert "seed: was 3, now 4" in capsys.readouterr().err
    assert numbers(folder).keys() == before.keys()


def test_a_damaged_file_is_made_anew(study, tmp_path):
    folder, _ = study
    copy = tmp_path / "tiny"
    subprocess.run(["cp", "-a", folder, copy], check=True)
    for name in ("split.h5", "benchmark.json"):
        whole = (copy / name).read_bytes()
        (copy / name).write_bytes(whole[: len(whole) // 2])
    result = eddyshed("study", TINY, "--runs", tmp_path)
    assert result.returncode == 0, result.stderr
    assert "truth: up to date" in result.stderr
    assert_same_numbers(copy, folder)


def test_a_foreign_file_is_refused(tmp_path, capsys):
    path = tmp_path / "foreign.h5"
    with h5py.File(path, "w") as file:
        file["x"] = 1
    assert main(["show", str(path)]) == 2
    assert "not one that eddyshed wrote" in capsys.readouterr().err
    path.write_bytes(path.read_bytes()[:100])
    assert main(["show", str(path)]) == 2
    assert "not a whole HDF5 file" in capsys.readouterr().err
    assert main(["show", str(tmp_path)]) == 2
    assert "not a run folder" in capsys.readouterr().err


def test_a_blow_up_exits_with_one(tmp_path, capsys):
    options = []
    for text in (
        "time.step=40 d",
        "time.spin_up=0 d",
        "time.duration=80000 d",
        "output.state_every=40 d",
        "output.resolved.every=40 d",
        "output.checkpoint_every=40 d",
        "forcing.trades.amplitude=2e-11 s-2",
    ):
        options += ["--set", text]
    assert main(["truth", str(TINY), "--runs", str(tmp_path), "--quiet", *options]) == 1
    err = capsys.readouterr().err
    assert "blew up" in err
    last = sorted(tmp_path.rglob("segment-*.h5"))[-1]
    assert last.name in err


def test_an_unwritable_place_is_refused(tmp_path, capsys):
    blocked = tmp_path / "file"
    blocked.write_text("")
    # Nobody may make a folder below /proc, not even root.
    for place in (blocked, Path("/proc/runs")):
        assert main(["study", str(TINY), "--runs", str(place)]) == 2
        err = capsys.readouterr().err
        assert "cannot be written" in err
        assert "--runs" in err


def test_a_second_process_in_the_same_folder_is_refused(study):
    folder, _ = study
    import fcntl

    with (folder / ".lock").open("w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        result = eddyshed("study", TINY, "--runs", folder.parent)
    assert result.returncode == 2
    assert "another process" in result.stderr


def test_usage():
    assert eddyshed().returncode == 2
    assert eddyshed("stduy", TINY).returncode == 2
    assert eddyshed("study", TINY, "--qui").returncode == 2  # no abbreviations
    help_text = eddyshed("--help")
    assert help_text.returncode == 0
    assert "Exit codes" in help_text.stdout
    assert eddyshed("study", "nowhere.toml").returncode == 2


def test_help_loads_nothing_heavy():
    # Start-up must not wait for libraries that only a run needs.
    script = (
        "import sys; from eddyshed.reduce.cli import parser; parser();"
        "print([m for m in ('numpy', 'scipy', 'h5py', 'pyfftw') if m in sys.modules])"
    )
    result = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True
    )
    assert result.stdout.strip() == "[]"


def test_a_closed_pipe_is_no_error():
    command = (
        f"{Path(sys.executable).with_name('eddyshed')} check --reference | head -1"
    )
    result = subprocess.run(
        ["bash", "-o", "pipefail", "-c", command],
        capture_output=True,
        text=True,
        check=False,
    )
    assert "Traceback" not in result.stderr


@pytest.mark.parametrize(
    ("time", "start", "word"),
    [
        (
            '{kind="seasonal", period="360 d", amplitude=0.2}',
            None,
            "whatever the season",
        ),
        # A reduced model then runs from the end of the spin-up to that of the truth.
        ('{kind="step", at="4000 d", before=0.9}', 1600 * 86400.0, "for good"),
    ],
)
def test_a_reduction_under_forcing_that_varies(time, start, word, tmp_path):
    arguments = [str(TINY), "--runs", str(tmp_path), "--set"]
    assert main(["benchmark", *arguments, f"forcing.trades.time={time}"]) == 0
    folder = tmp_path / "tiny"
    with h5py.File(folder / "closures.h5") as file:
        for name in ("bare", "residual", "coloured"):
            assert file[name]["variation"]["resolved"].shape == (1, 2)
            assert word in file[name].attrs["notes"]
            assert bool(np.any(file[name]["variation"]["unresolved"][...])) == (
                name == "coloured"
            )
        # The limit takes it too, and runs by its clock.
        assert file["white/variation/resolved"].shape == (1, 2)
        assert "runs under the mean forcing" not in file["white"].attrs["notes"]
        # The pattern is a wave of three, which is not among the resolved.
        assert not np.any(file["operators/variation/resolved"][...])
    for name in ("coloured", "white"):
        with h5py.File(folder / "simulated" / f"{name}.h5") as file:
            if start is not None:
                assert file["time"][0] == start
                assert file["time"][-1] == start + 8000 * 86400.0


def test_the_white_closures_know_the_season(tmp_path, capsys):
    # The forced wave ties (1, 1) to (1, -1): both are kept, the wave itself is not.
    overrides = (
        'resolved={kind="fourier", up_to=1.5}',
        "forcing.trades.waves=[0, 2]",
        'forcing.trades.time={kind="seasonal", period="360 d", amplitude=0.5}',
        'closures.use=["white", "white_open"]',
        'time.duration="2000 d"',
    )
    sets = [part for each in overrides for part in ("--set", each)]
    assert main(["reduce", str(TINY), "--runs", str(tmp_path), *sets]) == 0
    folder = tmp_path / "tiny"
    with h5py.File(folder / "closures.h5") as file:
        for name in ("white", "white_open"):
            notes = file[name].attrs["notes"]
            assert "whatever the season" in notes
            assert "runs under the mean forcing" not in notes
            assert np.any(file[name]["modulation"][...])
            facts = json.loads(file[name].attrs["facts"])
            assert facts["unresolved_forcing [share of rms tendency]"] > 1e-3
            assert facts["resolved_forcing [share of rms tendency]"] == 0
    capsys.readouterr()
    assert main(["show", str(folder), "--equation", "white"]) == 0
    printed = capsys.readouterr().out
    assert "s1 = seasonal (period 360 d, amplitude 0.5, phase 0), less" in printed
    assert re.search(r"dx\d/dt: \+ s1 \( .*x\d", printed)


def test_a_box_that_does_not_fit_leaves_no_folder(tmp_path, capsys):
    arguments = ["truth", str(TINY), "--runs", str(tmp_path / "runs")]
    box = 'output.boxes.gyre={field="buoyancy", x=["1 km", "2000 km"]}'
    assert main([*arguments, "--set", box]) == 2
    problem = capsys.readouterr().err
    assert "[output.boxes.gyre] field = " in problem
    assert "reaches beyond the box, 0 to 1800 km" in problem
    assert not (tmp_path / "runs").exists()
