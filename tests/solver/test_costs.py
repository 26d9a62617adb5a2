"""What is forecast comes about, and progress says what is so."""

import dataclasses
import io
import logging
import sys
import time

import pytest
from ensembles import config_of

from eddyshed.solver.ensemble import run_ensemble
from eddyshed.solver.forecast import bytes_to_come, forecast_run
from eddyshed.solver.progress import Progress, clock, progress
from eddyshed.solver.truth import run_member


def size_of(folder):
    return sum(p.stat().st_size for p in folder.rglob("*.h5") if p.stem != "ensemble")


@pytest.mark.parametrize("points", [16, 32])
def test_disk_comes_out_as_forecast(tmp_path, points):
    config = config_of(f"grid.points=[{points}, {points}]", "ensemble.members=2")
    everything = bytes_to_come(config, tmp_path, range(2))
    assert everything == forecast_run(config, seconds=0.01).disk_bytes
    run_ensemble(config, tmp_path, [0])
    # A tenth: what HDF5 adds to a segment is a fit to files of other sizes.
    assert size_of(tmp_path) == pytest.approx(everything / 2, rel=0.1)
    # What is there is not to come.
    assert bytes_to_come(config, tmp_path, range(2)) == everything / 2
    assert bytes_to_come(config, tmp_path, [0]) == 0


def test_processor_time_comes_out_as_forecast(tmp_path):
    config = config_of("output.checkpoint_every=45 d")
    found = forecast_run(config)
    began = time.process_time()
    run_member(config, 0, tmp_path)
    took = time.process_time() - began
    # Writing, and building the ocean, weigh much in so short a run; and processor
    # time varies by half or so with what else uses the caches.
    assert found.seconds / 6 / 4 < took < 4 * found.seconds / 6 + 0.5


def test_time_on_the_clock_is_that_of_rounds():
    found = dataclasses.replace(
        forecast_run(config_of(), seconds=0.01),
        members=5,
        workers=2,
        steps=1000,
        seconds_per_step=0.01,
    )
    assert found.seconds == pytest.approx(50)
    assert found.wall_seconds(2) == pytest.approx(30)  # three rounds of ten seconds
    assert found.wall_seconds(1) == pytest.approx(60)  # two share a processor
    assert dataclasses.replace(found, workers=None).wall_seconds(2) is None


class Terminal(io.StringIO):
    def isatty(self):
        return True


def test_a_bar_tells_model_time_speed_and_what_is_left(monkeypatch):
    terminal, now = Terminal(), [100.0]
    monkeypatch.setattr(sys, "stderr", terminal)
    monkeypatch.setattr("eddyshed.solver.progress.time.monotonic", lambda: now[0])
    with progress("truth", 1000, done=200, step=86400.0) as shown:
        now[0] += 10
        shown.to(400, "1 complete")
        # 200 of the 800 steps that were left took 10 s: 600 more take 30 s.
        assert shown.words() == "1 complete, 400 d of 1000 d, 20 steps/s, 30 s left"
        shown._bar.refresh()
    assert "truth:  40 % |" in terminal.getvalue()
    assert "20 steps/s, 30 s left" in terminal.getvalue()


def test_off_a_terminal_a_line_a_minute_is_logged(monkeypatch, caplog):
    now = [0.0]
    monkeypatch.setattr(sys, "stderr", io.StringIO())
    monkeypatch.setattr("eddyshed.solver.progress.time.monotonic", lambda: now[0])
    shown = Progress("truth", 100)
    with caplog.at_level(logging.INFO, logger="eddyshed"):
        for second in range(1, 151):
            now[0] = float(second)
            shown.to(second / 2)
    shown.close()
    assert [record.getMessage() for record in caplog.records] == [
        "truth: 30 %, 2 min 19 s left",  # 30.5 done in 61 s
        "truth: 61 %, 1 min 18 s left",  # 61 in 122 s
    ]
    quiet = Progress("truth", 100, quiet=True)
    now[0] += 1000
    caplog.clear()
    quiet.to(50)
    assert not caplog.records
    quiet.close()


@pytest.mark.parametrize(
    ("seconds", "text"),
    [(0, "0 s"), (59.6, "1 min"), (3599, "59 min 59 s"), (90061, "1 d 1 h")],
)
def test_wall_time_in_words(seconds, text):
    assert clock(seconds) == text
