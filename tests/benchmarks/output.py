"""What writing a truth run costs, as a share of the run.

    python -m tests.benchmarks.output

A turbulent run of 256 x 256 points is made as a user would, with its default
checkpoint (every 273 states there), and the processor and wall time spent on
recording, on segments and on the index is added up within that same run. The
shipped configs record a state every 5 to 16 steps.
"""

import os
import tempfile
import time
from pathlib import Path

# As the command does, and before numpy is loaded.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

from eddyshed.solver import truth
from eddyshed.solver.config import parse_config
from eddyshed.solver.settings import TruthConfig

CONFIG = """
name = "output"
[grid]
points = [256, 256]
lengths = ["1800 km", "1800 km"]
[ocean]
kind = "barotropic"
beta = "2e-11 m-1 s-1"
drag = "0.01 1/d"
hyperviscosity_time = "2 h"
[forcing.wind]
kind = "wave"
amplitude = "2e-12 s-2"
waves = [0, 3]
[initial]
kind = "noise"
energy = "0.001 m2/s2"
band = [3, 8]
[time]
step = "0.5 h"
spin_up = "0 h"
duration = "1400 h"
[output]
"""
STREAMS = {
    "state every 10 steps": 'state_every = "5 h"\n',
    "state every 10 steps, all other streams": """
state_every = "5 h"
boxes_every = "1 h"
fields_every = "50 h"
[output.resolved]
every = "1 h"
up_to = 4
[output.boxes.west]
field = "vorticity"
x = ["0 km", "300 km"]
[output.boxes.jet]
field = "eastward_velocity"
y = ["800 km", "1000 km"]
""",
}


class Meter:
    """Adds up the time of all calls of some functions."""

    def __init__(self):
        self.processor = self.wall = 0.0

    def timed(self, function):
        """The function, timed."""

        def call(*arguments, **options):
            processor, wall = time.process_time(), time.perf_counter()
            try:
                return function(*arguments, **options)
            finally:
                self.processor += time.process_time() - processor
                self.wall += time.perf_counter() - wall

        return call


def shares(streams):
    """Shares of output in processor and wall time, and bytes written."""
    config = parse_config(CONFIG + streams, TruthConfig, "output.toml").config
    meter, real = Meter(), (truth.Recorder.record, truth.MemberFiles.add)
    truth.Recorder.record, truth.MemberFiles.add = map(meter.timed, real)
    try:
        with tempfile.TemporaryDirectory() as folder:
            processor, wall = time.process_time(), time.perf_counter()
            truth.run_member(config, 0, Path(folder))
            processor = time.process_time() - processor
            wall = time.perf_counter() - wall
            size = sum(path.stat().st_size for path in Path(folder).rglob("*.h5"))
    finally:
        truth.Recorder.record, truth.MemberFiles.add = real
    return meter.processor / processor, meter.wall / wall, size


def main():
    """Print the table."""
    print(f"{'256 x 256, 2800 steps':<42} {'processor':>9} {'wall':>7} {'written':>9}")
    for name, streams in STREAMS.items():
        processor, wall, size = shares(streams)
        print(
            f"{name:<42} {processor:>8.2%} {wall:>7.2%} {size / 1e6:>6.1f} MB",
            flush=True,
        )


if __name__ == "__main__":
    main()
