"""A truth step against the transforms that it cannot do without.

    python -m tests.benchmarks [--json FILE]

The floor of a barotropic tendency is four full two-dimensional transforms of
real fields, the least that is known for the exact advection (Basdevant 1983),
planned by measurement, on one thread; a step has four tendencies. Step and
floor are timed in turns in one process, in processor time, and their ratio is
taken round by round: that is what survives a busy machine.
"""

import argparse
import json
import math
import statistics
import time
from pathlib import Path

import numpy as np
import pyfftw

from eddyshed.solver.oceans.barotropic import Barotropic, BarotropicSettings
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.stepping import IntegratingFactorRK4

SIZES = (32, 64, 128, 256)
ROUNDS = 11
SECONDS = 0.05  # of each side in a round


def floor_of(n):
    """A function that does the sixteen transforms of a step."""
    field = pyfftw.empty_aligned((n, n), dtype="float64")
    modes = pyfftw.empty_aligned((n, n // 2 + 1), dtype="complex128")
    axes = {"axes": (0, 1), "flags": ("FFTW_MEASURE",), "threads": 1}
    forward = pyfftw.FFTW(field, modes, direction="FFTW_FORWARD", **axes)
    backward = pyfftw.FFTW(modes, field, direction="FFTW_BACKWARD", **axes)
    field[:] = np.random.default_rng(0).standard_normal((n, n)) * 1e-3

    def transforms():
        for _ in range(8):
            forward.execute()
            backward.execute()
            # Unnormalised transforms would overflow, and infinities are slow.
            np.multiply(field, 1 / n**2, out=field)

    return transforms


def step_of(n):
    """A function that does one step of a decaying turbulent flow."""
    settings = BarotropicSettings(beta=10.0, drag=0.1, viscosity=1e-3)
    ocean = Barotropic(settings, Periodic((n, n), (2 * math.pi, 2 * math.pi)))
    k2 = np.repeat(ocean.space.k_squared, 2)
    z = np.random.default_rng(1).standard_normal(ocean.size) / (1 + k2)
    stepper = IntegratingFactorRK4(ocean, 0.1 / n)
    return lambda: stepper.advance(0.0, z)


def seconds_each(function):
    """Processor time of one call, from as many as fit in the round."""
    start, calls = time.process_time(), 0
    while time.process_time() - start < SECONDS:
        function()
        calls += 1
    return (time.process_time() - start) / calls


def compare(n):
    """Ratios of step to floor, one for each round, and microseconds a step."""
    step, floor = step_of(n), floor_of(n)
    seconds_each(step), seconds_each(floor)
    pairs = [(seconds_each(step), seconds_each(floor)) for _ in range(ROUNDS)]
    return [a / b for a, b in pairs], 1e6 * statistics.median(a for a, _ in pairs)


def main():
    """Print the table, and write it as JSON if asked."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", type=Path, metavar="FILE")
    options = parser.parse_args()
    rows = []
    print(f"{'grid':>10} {'step / floor':>14} {'quartiles':>14} {'us / step':>10}")
    for n in SIZES:
        ratios, microseconds = compare(n)
        low, middle, high = statistics.quantiles(ratios, n=4)
        rows.append(
            {"points": n, "ratio": middle, "quartiles": [low, high], "us": microseconds}
        )
        print(
            f"{f'{n} x {n}':>10} {middle:>14.2f} {f'{low:.2f}-{high:.2f}':>14} "
            f"{microseconds:>10.0f}"
        )
    if options.json is not None:
        options.json.write_text(json.dumps(rows, indent=1) + "\n")


if __name__ == "__main__":
    main()
