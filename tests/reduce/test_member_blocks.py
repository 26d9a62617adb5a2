"""Reduced models run block by block: stopped, gone on with, refused beforehand."""

from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from splits import resolved_only

from eddyshed.reduce import member_blocks
from eddyshed.reduce.benchmark import run_closure, truth_side
from eddyshed.reduce.cli import main
from eddyshed.reduce.noise.ornstein_uhlenbeck import OrnsteinUhlenbeck
from eddyshed.reduce.reduced import ReducedModel
from eddyshed.reduce.settings import BenchmarkSettings

MEMBERS = 40


@pytest.fixture(scope="module")
def truth():
    red = OrnsteinUhlenbeck(rate=0.2 * np.eye(2), covariance=np.eye(2))
    x = red.simulate(2000, 0.5, np.random.default_rng(3))[0]
    return truth_side(resolved_only(x - x.mean(axis=0), step=0.5), 5)


def model(growth=0.0):
    """Noise on two modes; with growth they are lost."""
    return ReducedModel(
        name="residual",
        x_forcing=np.zeros(2),
        x_from_x=(growth - 0.2) * np.eye(2),
        x_from_xx=np.zeros((2, 2, 2)),
        x_from_y=np.eye(2),
        rate=np.eye(2),
        covariance=0.05 * np.eye(2),
    )


def run(truth, folder=None, *, stamp="stamp", stop=np.inf, growth=0.0):
    """Run all members; be interrupted when a number of member-steps are done."""
    config = SimpleNamespace(benchmark=BenchmarkSettings(members=MEMBERS), seed=5)
    seen = []

    def progress(done, total):
        seen.append(done / total)
        if done > stop * total:
            raise KeyboardInterrupt

    found = run_closure(config, model(growth), truth, progress, folder, stamp)
    assert seen == sorted(seen)
    assert seen[-1] == 1
    return found


def files(folder):
    return {path.name: path.stat().st_mtime_ns for path in folder.iterdir()}


@pytest.mark.parametrize("growth", [0.0, 0.5])
def test_a_run_that_was_stopped_is_the_same_to_the_bit(
    growth, truth, tmp_path, monkeypatch
):
    whole = run(truth, growth=growth)
    monkeypatch.setattr(member_blocks, "BLOCK_MEMORY", 1)  # so 16 at a time
    folder = tmp_path / "residual.members"
    if not growth:  # else all are lost before progress is told
        with pytest.raises(KeyboardInterrupt):
            run(truth, folder, stop=0.6)
        before = files(folder)
        assert list(before) == ["0-15.h5"]
    again = run(truth, folder, growth=growth)
    np.testing.assert_array_equal(again.series, whole.series)
    assert again.lost == whole.lost
    assert (len(again.lost) > 0) == (growth > 0)
    assert again.step_check == whole.step_check
    assert (again.start, again.step, again.noisy) == (whole.start, whole.step, True)
    assert again.cost > 0
    after = files(folder)
    assert sorted(after) == ["0-15.h5", "16-31.h5", "32-39.h5"]
    if not growth:
        assert after["0-15.h5"] == before["0-15.h5"]
    # What was made from something else is not taken.
    run(truth, folder, stamp="other", growth=growth)
    assert files(folder)["0-15.h5"] > after["0-15.h5"]


def test_blocks_are_wide_where_that_is_fast():
    def width(n_work, records):
        scheme = SimpleNamespace(n_work=n_work, n_observed=10)
        return member_blocks.block_width(scheme, records)

    assert width(84, 1000) == 256
    assert width(1771, 1000) == 64  # a mebibyte of products
    # 64 MB of 8-byte numbers, 10 modes and 20 000 records are 40 members: 32.
    assert width(84, 20_000) == 32
    assert width(84, 10**9) == 16


def test_what_will_not_fit_is_refused_before_the_truth_is_run(capsys):
    tiny = str(Path(__file__).parents[1] / "tiny.toml")
    long = ("--set", 'benchmark.duration="1000000 d"')
    assert main(["check", tiny, *long, "--set", "benchmark.members=100"]) == 2
    said = " ".join(capsys.readouterr().err.split())
    # 1e6 days at 0.8 days in 100 members, two modes, six times eight bytes.
    assert "(100 members, 1250001 records, 2 modes) would take 12 GB" in said
    assert "[limits] memory" in said
    assert "shorter duration or fewer members" in said
    assert main(["check", tiny, *long, "--set", "benchmark.members=10"]) == 0
