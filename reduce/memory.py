"""What the reduction may hold in memory at once."""

from __future__ import annotations

from eddyshed.solver.errors import DataError
from eddyshed.solver.quantities import format_quantity

OWN_BYTES = 150_000_000  # Python and its libraries, before any data
STRETCH_BYTES = 64_000_000  # of the truth that is read at once, at most


def spare_bytes(memory: float) -> float:
    """What a budget leaves for data [B]."""
    return memory - OWN_BYTES


def stretch_rows(memory: float, size: int) -> int:
    """States to read at once: work on them takes up to eight times their size."""
    return max(1, int(min(spare_bytes(memory) / 8, STRETCH_BYTES) // (8 * size)))


def check_memory(needed: float, memory: float, what: str, instead: str) -> None:
    """Refuse what would not fit, before any of it is allocated.

    Parameters
    ----------
    needed : float
        Forecast of what it takes [B].
    memory : float
        The budget [B].
    what : str
        What needs it.
    instead : str
        What would need less.

    Raises
    ------
    DataError
        If it does not fit.
    """
    if needed <= spare_bytes(memory):
        return
    # A tenth more than needed, in whole tenths of a gigabyte.
    enough = (int(1.1 * (needed + OWN_BYTES) / 1e8) + 1) * 1e8
    message = (
        f'[limits] memory = "{format_quantity(memory, "B")}": {what} would take '
        f"{format_quantity(float(f'{needed:.3g}'), 'B')} beside the "
        f"{format_quantity(OWN_BYTES, 'B')} of the program itself; {instead}, or "
        f'allow memory = "{format_quantity(enough, "B")}"'
    )
    raise DataError(message)
