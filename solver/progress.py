"""Progress on stderr: a bar on a terminal, a log line a minute elsewhere."""

from __future__ import annotations

import logging
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from itertools import pairwise

from tqdm import tqdm

from .quantities import format_quantity

log = logging.getLogger(__name__)


class Progress:
    """Progress of one long task.

    Parameters
    ----------
    label : str
        What is going on.
    total : int
        Number of units of work.
    done : int
        Units done before, by an earlier run.
    quiet : bool
        Show nothing.
    step : float, optional
        Model time of a unit [s], if units are steps of a run: then model time and
        steps per second are shown as well.
    """

    LOG_EVERY = 60.0  # seconds

    def __init__(
        self,
        label: str,
        total: int,
        *,
        done: int = 0,
        quiet: bool = False,
        step: float | None = None,
    ):
        self._label, self._total, self._done = label, total, done
        self._step, self._before, self._note = step, done, ""
        self._began = time.monotonic()
        self._bar = tqdm(
            total=total,
            initial=done,
            desc=label,
            file=sys.stderr,
            disable=quiet or None,  # None: nothing unless stderr is a terminal
            leave=False,
            bar_format="{desc}: {percentage:3.0f} % |{bar}|{postfix}",
        )
        self._silent = quiet
        self._last = self._began

    def to(self, done: float, note: str = "") -> None:
        """Say how many units are done in all, and what else there is to say."""
        moved, self._done, self._note = done - self._done, done, note
        if not self._bar.disable:
            self._bar.set_postfix_str(f" {self.words()}", refresh=False)
            self._bar.update(moved)
            return
        now = time.monotonic()
        if not self._silent and now - self._last > self.LOG_EVERY:
            self._last = now
            percent = 100 * done / max(1, self._total)
            log.info("%s: %.0f %%, %s", self._label, percent, self.words())

    def words(self) -> str:
        """Model time, speed and what is left, so far as they are known."""
        parts = [self._note] if self._note else []
        if self._step is not None:
            parts.append(
                f"{format_quantity(self._done * self._step, 's')} of "
                f"{format_quantity(self._total * self._step, 's')}"
            )
        new, seconds = self._done - self._before, time.monotonic() - self._began
        if new > 0 and seconds > 0:
            if self._step is not None:
                parts.append(f"{new / seconds:.3g} steps/s")
            parts.append(f"{clock((self._total - self._done) * seconds / new)} left")
        return ", ".join(parts) or "just begun"

    def close(self) -> None:
        """Remove the bar."""
        self._bar.close()


def clock(seconds: float) -> str:
    """Wall time in two units at most, such as ``3 h 20 min``.

    >>> clock(12_000)
    '3 h 20 min'
    """
    whole = round(seconds)
    units = (("d", 86400), ("h", 3600), ("min", 60), ("s", 1))
    for (large, size), (small, part) in pairwise(units):
        if whole >= size:
            rest = whole % size // part
            return f"{whole // size} {large}" + (f" {rest} {small}" if rest else "")
    return f"{whole} s"


@contextmanager
def progress(
    label: str,
    total: int,
    *,
    done: int = 0,
    quiet: bool = False,
    step: float | None = None,
) -> Iterator[Progress]:
    """Show progress while the block runs; arguments as :class:`Progress`."""
    shown = Progress(label, total, done=done, quiet=quiet, step=step)
    try:
        yield shown
    finally:
        shown.close()
