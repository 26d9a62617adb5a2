"""Progress on stderr: a bar on a terminal, a log line a minute elsewhere."""

from __future__ import annotations

import logging
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager

from tqdm import tqdm

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
    """

    LOG_EVERY = 60.0  # seconds

    def __init__(self, label: str, total: int, *, done: int = 0, quiet: bool = False):
        self._label, self._total, self._done = label, total, done
        self._bar = tqdm(
            total=total,
            initial=done,
            desc=label,
            file=sys.stderr,
            disable=quiet or None,  # None: nothing unless stderr is a terminal
            leave=False,
            unit_scale=True,
        )
        self._silent = quiet
        self._last = time.monotonic()

    def to(self, done: int) -> None:
        """Say how many units are done in all."""
        self._bar.update(done - self._done)
        self._done = done
        now = time.monotonic()
        if self._bar.disable and not self._silent and now - self._last > self.LOG_EVERY:
            self._last = now
            log.info("%s: %.0f %%", self._label, 100 * done / max(1, self._total))

    def close(self) -> None:
        """Remove the bar."""
        self._bar.close()


@contextmanager
def progress(
    label: str, total: int, *, done: int = 0, quiet: bool = False
) -> Iterator[Progress]:
    """Show progress while the block runs; arguments as :class:`Progress`."""
    shown = Progress(label, total, done=done, quiet=quiet)
    try:
        yield shown
    finally:
        shown.close()
