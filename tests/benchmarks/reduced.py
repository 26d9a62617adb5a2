"""The drift of reduced models against this machine's own matrix product.

    OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 python -m tests.benchmarks.reduced

A dense quadratic model of n modes without y, for 1, 100 and 1000 members, as a
time step has it: in groups that stay in cache. The floor is the rate of a square
double-precision product of order 512, measured in turns with the
drift in one process, in processor time. Useful operations of a drift are two for
each coefficient, 1 + n + n (n + 1) / 2 of them in each of n rows. Steps are whole
steps of `simulate`, noise (residual kind: as many y as x) included.
"""

import argparse
import json
import statistics
import time
from pathlib import Path

import numpy as np

from eddyshed.reduce.reduced import COLUMNS, ReducedModel, compiled_drift
from eddyshed.reduce.simulation import group_width, make_scheme, simulate
from eddyshed.solver.randomness import stream

SIZES = (10, 20, 40, 80)
MEMBERS = (1, 100, 1000)
ROUNDS = 11
SECONDS = 0.03  # of each side in a round
ORDER = 512  # of the product that is the floor


def model_of(n, *, noisy=False):
    """A damped quadratic model; with red noise on each mode if asked."""
    rng = np.random.default_rng(n)
    tensor = 0.01 * rng.standard_normal((n, n, n))
    noise = {}
    if noisy:
        noise = {"x_from_y": np.eye(n), "rate": np.eye(n), "covariance": np.eye(n)}
    return ReducedModel(
        name="dense",
        x_forcing=rng.standard_normal(n),
        x_from_x=rng.standard_normal((n, n)) - 5 * np.eye(n),
        x_from_xx=tensor,
        **noise,
    )


def seconds_each(function):
    """Processor time of one call, from as many as fit in the round."""
    start, calls = time.process_time(), 0
    while time.process_time() - start < SECONDS:
        function()
        calls += 1
    return (time.process_time() - start) / calls


def floor():
    """A function that does a product, and its operations."""
    rng = np.random.default_rng(0)
    a, b = rng.standard_normal((2, ORDER, ORDER))
    out = np.empty((ORDER, ORDER))
    return lambda: np.matmul(a, b, out=out), 2 * ORDER**3


def drift_of(n, members):
    """A function that evaluates the drift of all members, and its operations."""
    model = model_of(n)
    width = group_width(make_scheme(model, 0.01))
    columns = -(-members // COLUMNS) * COLUMNS  # filled up, as a step has them
    x = np.random.default_rng(1).standard_normal((n, columns))
    groups = [
        np.ascontiguousarray(x[:, first : first + width])
        for first in range(0, columns, width)
    ]
    # A drift for each, as each group is stepped to its end before the next.
    parts = [
        (compiled_drift(model), group, np.empty((0, group.shape[1])))
        for group in groups
    ]

    def evaluate():
        for drift, group, nothing in parts:
            drift(group, nothing)

    return evaluate, 2 * n * (1 + n + n * (n + 1) // 2) * members


def steps_each_second(n, members):
    """Member-steps in a second of processor time, of the residual kind."""
    model, steps = model_of(n, noisy=True), max(64, 20_000 // (n * members))
    streams = [stream(1, k, "benchmark") for k in range(members)]
    start = time.process_time()
    simulate(
        model,
        np.zeros((members, n)),
        step=0.002,
        n_steps=steps,
        every=steps,
        streams=streams,
    )
    return members * steps / (time.process_time() - start)


def main():
    """Print the table, and write it as JSON if asked."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", type=Path, metavar="FILE")
    options = parser.parse_args()
    product, product_operations = floor()
    product()
    rows = []
    print(f"{'n':>3} {'members':>8} {'drift / product':>16} {'quartiles':>13} ", end="")
    print(f"{'us / drift':>11} {'member-steps / s':>17}")
    for n in SIZES:
        for members in MEMBERS:
            evaluate, operations = drift_of(n, members)
            evaluate()
            pairs = [
                (seconds_each(evaluate), seconds_each(product)) for _ in range(ROUNDS)
            ]
            shares = [operations / a / (product_operations / b) for a, b in pairs]
            low, middle, high = statistics.quantiles(shares, n=4)
            microseconds = 1e6 * statistics.median(a for a, _ in pairs)
            rate = steps_each_second(n, members)
            rows.append(
                {
                    "modes": n,
                    "members": members,
                    "share": middle,
                    "quartiles": [low, high],
                    "microseconds": microseconds,
                    "member_steps_per_second": rate,
                }
            )
            print(
                f"{n:>3} {members:>8} {middle:>16.1%} {f'{low:.1%}-{high:.1%}':>13} "
                f"{microseconds:>11.1f} {rate:>17.3g}",
                flush=True,
            )
    if options.json is not None:
        options.json.write_text(json.dumps(rows, indent=1) + "\n")


if __name__ == "__main__":
    main()
