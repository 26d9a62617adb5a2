"""Members by two processes against one: how much of the second processor is used.

    python -m tests.benchmarks.processes [--rounds N] [--json FILE]

An ensemble of four equal members is run from its start by one process and by two,
in turns, at 64 x 64 and 128 x 128 points; time is on the clock, processes are
started beforehand, and the ratio is taken round by round. What else runs on the
machine takes from the two more than from the one: look at the load that is printed.
"""

import argparse
import json
import os
import statistics
import tempfile
import time
from pathlib import Path

from eddyshed.solver.config import parse_config
from eddyshed.solver.engine import WorkerProcesses
from eddyshed.solver.ensemble import run_ensemble
from eddyshed.solver.settings import TruthConfig

MEMBERS = 4
STEPS = {64: 6000, 128: 2000}  # some seconds for each member
CONFIG = """
name = "benchmark"
[grid]
points = [{n}, {n}]
lengths = ["1000 km", "1000 km"]
[ocean]
kind = "barotropic"
beta = "2e-11 m-1 s-1"
drag = "0.01 1/d"
hyperviscosity_time = "6 h"
[stirring]
energy_rate = "1e-9 m2/s3"
band = [4, 6]
[initial]
kind = "noise"
energy = "0.001 m2/s2"
band = [2, 6]
[time]
step = "0.05 d"
spin_up = 0
duration = "{days} d"
[output]
state_every = "2 d"
[ensemble]
members = {members}
"""


def steps_per_second(config, executor):
    """Steps of all members per second on the clock."""
    with tempfile.TemporaryDirectory() as folder:
        began = time.perf_counter()
        outcomes = run_ensemble(config, Path(folder), executor=executor)
        seconds = time.perf_counter() - began
    if not all(outcome.complete for outcome in outcomes):
        message = f"not all members came to their end: {outcomes}"
        raise RuntimeError(message)
    steps = round(config.time.duration / config.time.step)
    return MEMBERS * steps / seconds


def main():
    """Print the table, and write it as JSON if asked."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--rounds", type=int, default=5, metavar="N")
    parser.add_argument("--json", type=Path, metavar="FILE")
    options = parser.parse_args()
    for library in ("OMP", "OPENBLAS", "MKL"):
        os.environ.setdefault(f"{library}_NUM_THREADS", "1")
    one, two = WorkerProcesses(1), WorkerProcesses(2)
    rows = []
    print(f"{'grid':>9} {'two / one':>10} {'range':>13} {'steps/s':>9} {'load':>6}")
    for n, steps in STEPS.items():
        text = CONFIG.format(n=n, days=steps / 20, members=MEMBERS)
        config = parse_config(text, TruthConfig, "benchmark").config
        pairs = []
        for number in range(options.rounds):
            order = (one, two) if number % 2 == 0 else (two, one)
            speeds = {e: steps_per_second(config, e) for e in order}
            pairs.append((speeds[two], speeds[one]))
        ratios = sorted(a / b for a, b in pairs)
        middle, load = statistics.median(ratios), os.getloadavg()[0]
        speed = statistics.median(a for a, _ in pairs)
        rows.append({"points": n, "ratios": ratios, "load": load, "speed": speed})
        print(
            f"{f'{n} x {n}':>9} {middle:>10.2f} "
            f"{f'{ratios[0]:.2f}-{ratios[-1]:.2f}':>13} {speed:>9.0f} {load:>6.1f}",
            flush=True,
        )
    for executor in (one, two):
        executor.shutdown()
    if options.json is not None:
        options.json.write_text(json.dumps(rows, indent=1) + "\n")


if __name__ == "__main__":
    main()
