"""One process at a time: locks of a study's folder and of each member.

A lock is an open file that the kernel frees when its process ends, however it
ends. The file of a member's lock also holds a few words on how far it is, for
those who look on.
"""

from __future__ import annotations

import errno
import fcntl
import json
import logging
import os
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

from .errors import RunFolderError

log = logging.getLogger(__name__)

# A file system that has no locks says one of these.
LOCKLESS = {errno.ENOSYS, errno.ENOTSUP, errno.ENOLCK}


class Busy(RunFolderError):
    """Another process holds what was asked for."""


class Lock:
    """A lock that is held.

    Parameters
    ----------
    path : Path
        Its file; made, with its folder, if need be, and never removed: others may
        be waiting for it.
    wait : bool
        Whether to wait until it is free.

    Raises
    ------
    Busy
        If another process holds it.
    RunFolderError
        If the file cannot be made.
    """

    def __init__(self, path: Path, *, wait: bool = False):
        self.path = path
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            self._descriptor = os.open(path, os.O_RDWR | os.O_CREAT, 0o666)
        except OSError as error:
            message = (
                f"{path.parent}: cannot be written ({error.strerror}); choose another "
                "place with --runs"
            )
            raise RunFolderError(message) from error
        try:
            _lock(self._descriptor, wait)
        except BlockingIOError as error:
            os.close(self._descriptor)
            message = (
                f"{path.parent}: another process is at work there; wait for it, or "
                "give this study another name"
            )
            raise Busy(message) from error
        except OSError as error:
            if error.errno not in LOCKLESS:
                os.close(self._descriptor)
                message = f"{path}: cannot be locked ({error.strerror})"
                raise RunFolderError(message) from error
            log.warning(
                "%s: this file system has no locks; see to it that no two processes "
                "work on the same run",
                path.parent,
            )

    def release(self) -> None:
        """Let others have it."""
        os.close(self._descriptor)

    def check_place(self) -> None:
        """Make sure that the folder is still where it was.

        Raises
        ------
        RunFolderError
            If it was moved or removed: what is written now would be half a run.
        """
        with suppress(OSError):
            if os.path.samestat(os.stat(self.path), os.fstat(self._descriptor)):
                return
        message = (
            f"{self.path.parent}: the folder was moved or removed while a run was at "
            "work there; its checkpoints are where the folder is now. Put it back, and "
            "run the same command again"
        )
        raise RunFolderError(message)

    def note(self, **facts: Any) -> None:
        """Leave a few words in the file; a full disk is no reason to stop."""
        with suppress(OSError):
            text = json.dumps(facts).encode()
            os.pwrite(self._descriptor, text, 0)
            os.ftruncate(self._descriptor, len(text))


def _lock(descriptor, wait):
    """Lock a file for one; who only looks (`is_held`) is waited for in any case."""
    if not wait:
        for _ in range(3):
            with suppress(BlockingIOError):
                fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
                return
            time.sleep(0.02)
    fcntl.flock(descriptor, fcntl.LOCK_EX | (0 if wait else fcntl.LOCK_NB))


@contextmanager
def holding(path: Path, *, wait: bool = False) -> Iterator[Lock]:
    """Hold a lock while the block runs; arguments and errors as :class:`Lock`."""
    lock = Lock(path, wait=wait)
    try:
        yield lock
    finally:
        lock.release()


def member_lock(folder: Path, member: int) -> Path:
    """File of a member's lock."""
    return folder / f".member-{member:03d}.lock"


def noted(path: Path) -> dict[str, Any]:
    """What the holder of a lock, or the last one, has left there."""
    try:
        found = json.loads(path.read_bytes())
    except (OSError, ValueError):  # absent, empty, or being written just now
        return {}
    return found if isinstance(found, dict) else {}


def is_held(path: Path) -> bool:
    """Whether a process holds a lock now; false where that cannot be known."""
    try:
        descriptor = os.open(path, os.O_RDONLY)
    except OSError:
        return False
    try:
        # Shared, and let go at once: whoever looks does not keep others out for long.
        fcntl.flock(descriptor, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except BlockingIOError:
        return True
    except OSError:
        return False
    finally:
        os.close(descriptor)
    return False
