"""Signals while a command runs: the first waits for a checkpoint, the second ends."""

from __future__ import annotations

import signal
from contextlib import contextmanager


class Caught:
    """Signals seen so far; while gentle, the first one only sets a flag."""

    def __init__(self):
        self.number = 0
        self._gentle = False

    def __bool__(self):
        return self.number != 0

    @contextmanager
    def gentle(self):
        """Let the first signal in this block wait for a checkpoint."""
        self._gentle = True
        try:
            yield
        finally:
            self._gentle = False

    def handle(self, number, frame):
        """Note a signal; end at once if it is the second, or nothing is at stake."""
        first = not self
        self.number = number
        if not (self._gentle and first):
            if number == signal.SIGINT:
                raise KeyboardInterrupt
            raise SystemExit(128 + number)


@contextmanager
def signals():
    """Catch SIGINT and SIGTERM while the block runs."""
    caught = Caught()
    before = {
        number: signal.signal(number, caught.handle)
        for number in (signal.SIGINT, signal.SIGTERM)
    }
    try:
        yield caught
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
