"""How often each finding of the audit is wrong, on systems that are known.

Run as ``python -m tests.benchmarks.audit_calibration [REPLICAS]``. For each
finding, in records of a quarter, once and four times a length: how often it
*fails* on a system that keeps the assumption, and on one that lies on the
threshold; how often it *fails* on one that breaks it; and how often it is
*undecided* on the first and the last.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np
from scipy import stats

sys.path.insert(0, str(Path(__file__).parents[1]))

from audit_systems import SYSTEMS


def rates(system, degree, length, replicas, seed):
    """Shares of fails and of undecided."""
    rng = np.random.default_rng(seed)
    found = [system(degree, length, rng).verdict for _ in range(replicas)]
    return found.count("fails"), found.count("undecided")


def main():
    """Print the table."""
    replicas = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    chosen = sys.argv[2:] or list(SYSTEMS)
    print(
        "in percent: record | fails if kept, edge, broken | undecided if kept, broken"
    )
    for place, name in enumerate(chosen):
        system, has_edge, base = SYSTEMS[name]
        began = time.process_time()
        for factor in (0.25, 1, 4):
            cells = []
            for k, degree in enumerate(("keeps", "edge", "breaks")):
                if degree == "edge" and not has_edge:
                    cells.append((-1, -1))
                    continue
                cells.append(
                    rates(system, degree, base * factor, replicas, [place, k, 7])
                )
            share = [100 * c / replicas for pair in cells for c in pair]
            print(
                f"{name:28s} {base * factor:6.0f} | {share[0]:5.1f} {share[2]:5.1f} "
                f"{share[4]:5.1f} | {share[1]:5.1f} {share[5]:5.1f}",
                flush=True,
            )
        print(f"    {time.process_time() - began:.1f} s", flush=True)
    half = stats.beta.ppf(0.975, 0.05 * replicas + 1, 0.95 * replicas)
    print(f"5 % of {replicas} replicas: up to {100 * half:.1f} % by chance (95 %)")


if __name__ == "__main__":
    main()
