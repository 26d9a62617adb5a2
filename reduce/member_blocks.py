"""Members of a reduced model run block by block, and kept as they end."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from math import ceil
from pathlib import Path

import numpy as np

from .memory import check_memory
from .reduced import COLUMNS
from .settings import StudyConfig
from .simulated import Simulated, load, save
from .simulation import Scheme, group_width

BLOCK_MEMORY = 64_000_000  # bytes of the series of members that are run together
LARGEST_BLOCK = 256  # members: with more, a step of each takes as long
# Bytes that statistics, scores and files take for one of a series: five were
# measured, for members of 2000 records and more.
WORK = 6


def in_blocks(
    run: Callable[[range], Simulated],
    members: int,
    width: int,
    folder: Path | None,
    stamp: str,
) -> Simulated:
    """Run members in blocks, one after the other.

    Parameters
    ----------
    run : callable
        ``run(range)`` runs some members, whose lost ones bear their numbers in the
        whole.
    members, width : int
        How many there are, and in a block.
    folder : Path or None
        Where blocks are kept as they end, a file each. What is there already is not
        run again, so a run that was stopped goes on from there. The caller removes
        the folder once the whole is safe.
    stamp : str
        Fingerprint of what the files are made from; those of another are replaced.

    Returns
    -------
    Simulated
        The whole. What half the step changes is not known of it.

    Notes
    -----
    With a folder, no more than one block is in memory until all have been run; then
    they are read back whole, as statistics need them. :func:`check_series_memory`
    tells beforehand whether that fits.
    """
    blocks = [range(k, min(k + width, members)) for k in range(0, members, width)]
    if folder is None:
        return _joined([run(block) for block in blocks])
    paths = [folder / f"{block[0]}-{block[-1]}.h5" for block in blocks]
    for path, block in zip(paths, blocks, strict=True):
        if load(path, stamp) is None:
            save(path, stamp, f"members {block[0]} to {block[-1]}", run(block))
    return _joined([load(path, stamp) for path in paths])


def block_width(scheme: Scheme, records: int) -> int:
    """Members to run together: as many as are stepped well, 64 MB, but 16 at least.

    In multiples of 16 the numbers of a member do not depend on its block.
    """
    fitting = BLOCK_MEMORY // (8 * records * scheme.n_observed)
    width = min(group_width(scheme), fitting, LARGEST_BLOCK)
    return max(width // COLUMNS, 1) * COLUMNS


def _joined(runs):
    return replace(
        runs[0],
        series=np.concatenate([run.series for run in runs]),
        lost=tuple(pair for run in runs for pair in run.lost),
        cost=float(np.average([r.cost for r in runs], weights=[*map(_count, runs)])),
    )


def _count(run):
    return len(run.series)


def check_series_memory(config: StudyConfig, modes: int) -> None:
    """Refuse a benchmark whose series would not fit into the memory allowed.

    Parameters
    ----------
    config : StudyConfig
    modes : int
        How many are resolved.

    Raises
    ------
    DataError
        If it does not fit.
    """
    from .benchmark import member_duration

    members, fine = config.benchmark.members, config.output.resolved
    interval = config.output.state_every if fine is None else fine.every
    truth_length = config.ensemble.members * config.time.duration
    records = ceil(member_duration(config.benchmark, truth_length) / interval) + 1
    check_memory(
        8.0 * WORK * members * records * modes,
        config.limits.memory,
        f"scoring reduced models ({members} members, {records} records, {modes} modes)",
        "give [benchmark] a shorter duration or fewer members",
    )
