"""All Galerkin tensors against the transforms of the evaluations they need.

    python -m tests.benchmarks.projection

One layer on 32 x 32 points has 440 coordinates, of which ten are resolved. The
tensors need B(u, w) of every pair of a resolved and any other vector, B(mean, .)
and a few probes. The floor is the time of six full two-dimensional transforms of
real fields for each: the velocities of u and of w to the grid, and two products
back (Basdevant 1983). Both sides are timed in turns, in processor time; see
`tests.benchmarks` for the reasons.
"""

import math
import statistics
import time

import numpy as np

from eddyshed.reduce.operators import galerkin
from eddyshed.solver.spaces.periodic import Periodic
from tests.benchmarks.__main__ import barotropic, floor_of

POINTS, NX, ROUNDS = 32, 10, 7
TRANSFORMS = 6  # of each evaluation


def projection():
    """A function that projects, and how many evaluations it makes."""
    model = barotropic(Periodic((POINTS, POINTS), (2 * math.pi, 2 * math.pi)))
    rng = np.random.default_rng(0)
    vectors = np.linalg.qr(rng.standard_normal((model.size, model.size)))[0]
    parts = vectors[:, :NX], vectors[:, NX:], rng.standard_normal(model.size)
    counted = []
    galerkin(model, *parts, progress=lambda done, _: counted.append(done))
    return lambda: galerkin(model, *parts), counted[-1]


def seconds(function):
    """Processor time of one call."""
    start = time.process_time()
    function()
    return time.process_time() - start


def main():
    """Print the ratio and its quartiles."""
    project, evaluations = projection()
    eight = floor_of(POINTS, 2)  # it does four times as many as it is told

    def transforms():
        for _ in range(round(evaluations * TRANSFORMS / 8)):
            eight()

    project(), transforms()
    pairs = [(seconds(project), seconds(transforms)) for _ in range(ROUNDS)]
    low, middle, high = statistics.quantiles([a / b for a, b in pairs], n=4)
    taken = statistics.median(a for a, _ in pairs)
    print(
        f"{evaluations} evaluations in {taken:.2f} s: {middle:.2f} times their "
        f"transforms ({low:.2f}-{high:.2f})"
    )


if __name__ == "__main__":
    main()
