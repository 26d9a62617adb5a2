"""A truth step against the transforms that it cannot do without.

    python -m tests.benchmarks [--json FILE]

The floor of an ocean's step is four times the fewest full two-dimensional
transforms of real fields that are known to give its tendency exactly
(barotropic 4: Basdevant 1983; two layers 9; slice 7), periodic in both
directions, planned by measurement, on one thread. Step and floor are timed in
turns in one process, in processor time, and their ratio is taken round by
round: that is what survives a busy machine.
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
from eddyshed.solver.oceans.boussinesq import Boussinesq, BoussinesqSettings
from eddyshed.solver.oceans.two_layer import TwoLayer, TwoLayerSettings
from eddyshed.solver.spaces.basin import Basin
from eddyshed.solver.spaces.channel import Channel
from eddyshed.solver.spaces.periodic import Periodic
from eddyshed.solver.stepping import IntegratingFactorRK4

SIZES = (32, 64, 128, 256)
ROUNDS = 11
SECONDS = 0.05  # of each side in a round


def barotropic(space):
    """One layer."""
    settings = BarotropicSettings(beta=10.0, drag=0.1, viscosity=1e-3)
    return Barotropic(settings, space)


def two_layer(space):
    """Two layers under a shear."""
    return TwoLayer(
        TwoLayerSettings(
            upper_depth=1.0,
            lower_depth=4.0,
            deformation_radius=0.5,
            upper_current=0.1,
            viscosity=1e-3,
        ),
        space,
    )


def slice_of(space):
    """A stratified slice."""
    settings = BoussinesqSettings(
        buoyancy_gradient=1.0, viscosity=1e-3, diffusivity=1e-3
    )
    return Boussinesq(settings, space)


# Ocean, space, and the fewest transforms of a tendency.
CASES = {
    "barotropic, periodic": (barotropic, Periodic, 4),
    "barotropic, channel": (barotropic, Channel, 4),
    "barotropic, basin": (barotropic, Basin, 4),
    "two layers, periodic": (two_layer, Periodic, 9),
    "slice, periodic": (slice_of, Periodic, 7),
}


def floor_of(n, count):
    """A function that does the transforms of a step, `count` for each tendency."""
    field = pyfftw.empty_aligned((n, n), dtype="float64")
    modes = pyfftw.empty_aligned((n, n // 2 + 1), dtype="complex128")
    axes = {"axes": (0, 1), "flags": ("FFTW_MEASURE",), "threads": 1}
    forward = pyfftw.FFTW(field, modes, direction="FFTW_FORWARD", **axes)
    backward = pyfftw.FFTW(modes, field, direction="FFTW_BACKWARD", **axes)
    field[:] = np.random.default_rng(0).standard_normal((n, n)) * 1e-3

    def transforms():
        for _ in range(2 * count):  # four tendencies, two transforms in a pair
            forward.execute()
            backward.execute()
            # Unnormalised transforms would overflow, and infinities are slow.
            np.multiply(field, 1 / n**2, out=field)

    return transforms


def step_of(n, make, space):
    """A function that does one step of a decaying turbulent flow."""
    ocean = make(space((n, n), (2 * math.pi, 2 * math.pi)))
    total = np.hypot(*ocean.waves.T)
    z = np.random.default_rng(1).standard_normal(ocean.size) / (1 + total**2)
    stepper = IntegratingFactorRK4(ocean, 0.1 / n)
    return lambda: stepper.advance(0.0, z)


def seconds_each(function):
    """Processor time of one call, from as many as fit in the round."""
    start, calls = time.process_time(), 0
    while time.process_time() - start < SECONDS:
        function()
        calls += 1
    return (time.process_time() - start) / calls


def compare(n, make, space, count):
    """Ratios of step to floor, one for each round, and microseconds a step."""
    step, floor = step_of(n, make, space), floor_of(n, count)
    seconds_each(step), seconds_each(floor)
    pairs = [(seconds_each(step), seconds_each(floor)) for _ in range(ROUNDS)]
    return [a / b for a, b in pairs], 1e6 * statistics.median(a for a, _ in pairs)


def main():
    """Print the table, and write it as JSON if asked."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", type=Path, metavar="FILE")
    options = parser.parse_args()
    rows = []
    print(
        f"{'':<22} {'grid':>9} {'step / floor':>13} {'quartiles':>13} {'us / step':>10}"
    )
    for name, case in CASES.items():
        for n in SIZES:
            ratios, microseconds = compare(n, *case)
            low, middle, high = statistics.quantiles(ratios, n=4)
            rows.append(
                {
                    "case": name,
                    "points": n,
                    "ratio": middle,
                    "quartiles": [low, high],
                    "microseconds": microseconds,
                }
            )
            print(
                f"{name:<22} {f'{n} x {n}':>9} {middle:>13.2f} "
                f"{f'{low:.2f}-{high:.2f}':>13} {microseconds:>10.0f}",
                flush=True,
            )
    if options.json is not None:
        options.json.write_text(json.dumps(rows, indent=1) + "\n")


if __name__ == "__main__":
    main()
