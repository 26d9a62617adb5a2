"""Processes that run a truth and are killed, or that a disk fails.

This file is also the script that :class:`Victims` starts. It imports everything
once and then forks one process for each line that it reads, so that a kill costs
milliseconds and not the start of an interpreter. A victim works on a disk made
slow, in pieces with pauses between, so that much of its time falls into writing
and renaming, and says in shared memory where it is and which checkpoint it has
acknowledged: what a killed process wrote there stays.
"""

from __future__ import annotations

import json
import mmap
import os
import resource
import signal
import struct
import subprocess
import sys
import time
from pathlib import Path

PHASES = (
    "starting",
    "stepping",
    "building a segment",
    "writing a segment",
    "flushing a segment",
    "moving a segment",
    "segment in its place",
    "building the index",
    "writing the index",
    "flushing the index",
    "moving the index",
    "index in its place",
    "finished",
)
LAYOUT = "<qq"  # acknowledged step, phase
PAUSE = 0.008  # seconds
NOBODY = 65534  # the user without rights: Linux Standard Base 5.0, from memory
# Three days of record, a segment every fourth step: nearly all time is writing.
# Stirring is in the config; gusts that it lacks have a memory to keep as well.
OVERRIDES = (
    "time.spin_up=0.5 d",
    "time.duration=3 d",
    "output.state_every=0.3 d",
    "output.boxes_every=0.1 d",
    "output.resolved.every=0.2 d",
    "output.fields_every=1 d",
    "output.checkpoint_every=0.4 d",
    'forcing.storms.kind="gusts"',
    "forcing.storms.acceleration=2e-8 m/s2",
    "forcing.storms.band=[2, 3]",
    "forcing.storms.decorrelation=1 d",
)


def look(board: mmap.mmap) -> tuple[int, str]:
    """Acknowledged step and phase of a victim, alive or dead."""
    step, phase = struct.unpack_from(LAYOUT, board)
    return step, PHASES[phase]


class Victims:
    """Starts victims, kills them, and says where it met them."""

    def __init__(self, folder):
        self._path = folder / "board"
        self._path.write_bytes(bytes(16))
        with self._path.open("r+b") as file:
            self.board = mmap.mmap(file.fileno(), 0)
        self._process = subprocess.Popen(
            [sys.executable, __file__],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )

    def close(self):
        self._process.communicate(timeout=60)
        self.board.close()

    def _say(self, line):
        self._process.stdin.write(line + "\n")
        self._process.stdin.flush()

    def start(self, folder, *, aim=None, room=None, as_nobody=False, pause=PAUSE):
        """Start a victim, return its process number.

        Parameters
        ----------
        folder : Path
            Where it runs.
        aim : (str, int), optional
            Phase in which it kills itself, and how often it is met before.
        room : (int, int), optional
            Step after which its files cannot grow beyond so many bytes.
        as_nobody : bool
            Whether it writes files without the rights of root, if it has them.
        pause : float
            How slow its disk is [s].
        """
        self.board[:] = bytes(16)
        order = {
            "folder": str(folder),
            "aim": aim,
            "room": room,
            "as_nobody": as_nobody,
            "pause": pause,
            "board": str(self._path),
        }
        self._say(json.dumps(order))
        return int(self._process.stdout.readline())

    def await_phase(self, phase):
        """Wait until the victim is there, or has finished."""
        deadline = time.monotonic() + 60
        while look(self.board)[1] not in (phase, "finished"):
            assert time.monotonic() < deadline
            time.sleep(0.0003)

    def end(self):
        """Wait for the end; exit code, or minus the signal, and what the error said."""
        self._say("")
        return tuple(json.loads(self._process.stdout.readline()))


class Slow:
    """Wraps what writes a file, tells where it is, and may kill itself there.

    Parameters
    ----------
    board : mmap
        Where to tell.
    aim : (str, int) or None
        Phase, and how often it is met before the victim kills itself in it.
    pause : float
        How long it waits wherever it may be killed [s].
    as_nobody : bool
        Whether files are written without the rights of root.
    """

    def __init__(self, board, aim, pause, *, as_nobody):
        self._board, self._pause, self._as_nobody = board, pause, as_nobody
        self._aim, self._left = aim or (None, 0)
        self._step = self._phase = 0

    def acknowledge(self, step):
        """Tell that everything up to a step is said to be safe."""
        self._step = step
        self.enter("stepping")

    def enter(self, phase):
        """Tell the phase, and die in it if it is the one aimed at."""
        self._phase = PHASES.index(phase)
        struct.pack_into(LAYOUT, self._board, 0, self._step, self._phase)
        if phase == self._aim:
            self._left -= 1
            if self._left == 0:
                os.kill(os.getpid(), signal.SIGKILL)

    def wrap(self, files):
        """Take the place of what `solver.files` calls."""
        real_replacing, real_write = files.replacing, Path.write_bytes
        real_sync, real_replace = os.fsync, Path.replace
        what = ["a segment"]

        def replacing(path):
            is_segment = path.name.startswith("segment")
            what[0] = "a segment" if is_segment else "the index"
            self.enter(f"building {what[0]}")
            return real_replacing(path)

        def write(path, data):
            if self._as_nobody and os.geteuid() == 0:
                # Not before: what Python has still to load may be for root alone.
                os.seteuid(NOBODY)
            half = len(data) // 2
            with path.open("wb") as handle:
                handle.write(data[:half])
                handle.flush()
                self.enter(f"writing {what[0]}")
                time.sleep(4 * self._pause)
                handle.write(data[half:])
            return real_write(path, data)

        def sync(handle):
            if not PHASES[self._phase].endswith("in its place"):  # then the folder's
                self.enter(f"flushing {what[0]}")
            time.sleep(self._pause)
            return real_sync(handle)

        def replace(path, target):
            self.enter(f"moving {what[0]}")
            time.sleep(self._pause)
            result = real_replace(path, target)
            self.enter(f"{what[0].split()[1]} in its place")
            time.sleep(self._pause)
            return result

        files.replacing, files.os.fsync = replacing, sync
        Path.write_bytes, Path.replace = write, replace


def run(order, board):
    """Be a victim: run the truth that was ordered to its end."""
    from tiny_truth import config_of

    from eddyshed.solver import files
    from eddyshed.solver.segments import reached_step
    from eddyshed.solver.truth import run_member

    slow = Slow(board, order["aim"], order["pause"], as_nobody=order["as_nobody"])
    slow.enter("starting")
    slow.wrap(files)

    folder = Path(order["folder"])

    def acknowledge(step):
        if step > reached_step(folder, 0):
            return  # on its way only: nothing is promised yet
        slow.acknowledge(step)
        if order["room"] is not None and step >= order["room"][0]:
            # Python ignores the signal that goes with it: writing fails.
            resource.setrlimit(resource.RLIMIT_FSIZE, (order["room"][1],) * 2)

    config = config_of(*OVERRIDES)
    run_member(config, 0, folder, progress=acknowledge)
    slow.enter("finished")


def forked(order):
    """Start a victim; its number, and the pipe in which it tells how it failed."""
    with open(order["board"], "r+b") as file:
        board = mmap.mmap(file.fileno(), 0)
    ear, mouth = os.pipe()
    pid = os.fork()
    if pid:
        os.close(mouth)
        return pid, ear
    code = 0
    try:
        run(order, board)
    except BaseException as error:
        code = getattr(error, "exit_code", 99)
        os.write(mouth, f"{type(error).__name__}: {error}".encode())
    finally:
        os._exit(code)


def main():
    """Fork a victim for each line, and bury it when told to."""
    sys.path.insert(0, str(Path(__file__).parents[1]))
    import tiny_truth  # noqa: F401  (imported before the fork, for all victims)

    from eddyshed.solver import exponential, truth  # noqa: F401

    for line in iter(sys.stdin.readline, ""):
        pid, ear = forked(json.loads(line))
        print(pid, flush=True)  # noqa: T201
        sys.stdin.readline()
        _, status = os.waitpid(pid, 0)
        with open(ear, encoding="utf-8") as pipe:
            told = [os.waitstatus_to_exitcode(status), pipe.read()]
        print(json.dumps(told), flush=True)  # noqa: T201


if __name__ == "__main__":
    main()
