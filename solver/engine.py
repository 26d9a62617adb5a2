"""Where the members of an ensemble run: an executor for each kind of engine.

All of them are a :class:`concurrent.futures.Executor`, and which one it is
changes no number. On this machine members run in processes, each on one thread;
on several machines Dask distributed runs them, on workers that somebody started.
"""

from __future__ import annotations

import logging
import multiprocessing
import os
import signal
import threading
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from contextlib import contextmanager, suppress
from multiprocessing import resource_tracker
from queue import SimpleQueue
from typing import Any

from .errors import EngineError, LostWorker
from .settings import DaskSettings, EngineSettings, SerialSettings

log = logging.getLogger(__name__)

# One thread in each process. Libraries read it when they are loaded, so it must be
# in the environment before a process starts.
ONE_THREAD = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
ATTEMPTS = 3  # processes that a member may lose before it counts as failed

PATIENCE = 10  # seconds in which a scheduler must answer


class WorkerProcesses(Executor):
    """Processes of this machine, one call at a time in each, replaced when they die.

    The pool of the standard library gives up all of its calls when one process
    dies. Here a process that dies takes down its own call alone, and that is made
    again in another.

    Parameters
    ----------
    workers : int
        How many processes.
    """

    def __init__(self, workers: int):
        self._idle: SimpleQueue[_Process] = SimpleQueue()
        self._all: set[_Process] = set()
        self._closed = False
        self._lock = threading.Lock()
        self._threads = ThreadPoolExecutor(workers)
        for _ in range(workers):
            self._idle.put(self._start())

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future:
        """Call a function of a module in one of the processes.

        The future raises what the function raised, or :class:`LostWorker` if three
        processes died of it.
        """
        return self._threads.submit(self._carry_out, fn, args, kwargs)

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        """End the processes when the calls that were made are done."""
        self._threads.shutdown(wait=wait, cancel_futures=cancel_futures)
        for process in self._close():
            process.end()

    def kill(self) -> None:
        """End the processes now, whatever they do."""
        for process in self._close():
            process.kill()
        self._threads.shutdown(wait=True, cancel_futures=True)

    def _close(self):
        """Start no more processes; those that there are."""
        with self._lock:
            self._closed = True
            return list(self._all)

    def _start(self):
        """Start a process."""
        with self._lock:
            if self._closed:
                message = "the processes were told to end"
                raise LostWorker(message)
            process = _Process()
            self._all.add(process)
            return process

    def _carry_out(self, fn, args, kwargs):
        for attempt in range(1, ATTEMPTS + 1):
            process = self._idle.get()
            try:
                return process.call(fn, args, kwargs)
            except EOFError:
                code = process.end()
                self._all.discard(process)
                process = self._start()
                log.warning(
                    "a worker process ended by itself (exit code %s, loss %d of %d)",
                    code,
                    attempt,
                    ATTEMPTS,
                )
            finally:
                self._idle.put(process)
        message = (
            f"the process that ran it died {ATTEMPTS} times without a word, perhaps "
            "for want of memory; try fewer [engine] workers"
        )
        raise LostWorker(message)


class _Process:
    """One worker process and the line to it."""

    def __init__(self):
        context = multiprocessing.get_context("spawn")
        self._line, far_end = context.Pipe()
        self._process = context.Process(target=_serve, args=(far_end,), daemon=True)
        # A terminal and a batch system send signals to a whole group of processes.
        # Those are for the parent alone; a child inherits what is blocked. The
        # helper process of multiprocessing must be there: starting it unblocks.
        resource_tracker.ensure_running()
        signals = {signal.SIGINT, signal.SIGTERM}
        before = signal.pthread_sigmask(signal.SIG_BLOCK, signals)
        try:
            self._process.start()
        finally:
            signal.pthread_sigmask(signal.SIG_SETMASK, before)
        far_end.close()  # or its loss would never be seen

    def call(self, fn, args, kwargs):
        """Make a call; raises EOFError if the process dies of it."""
        try:
            self._line.send((fn, args, kwargs))
            failed, result = self._line.recv()
        except OSError as error:
            raise EOFError from error
        if failed:
            raise result
        return result

    def end(self):
        """Let it end when it is idle, and return its exit code."""
        with suppress(OSError):
            self._line.close()
        self._process.join()
        return self._process.exitcode

    def kill(self):
        """End it now."""
        self._process.kill()
        self._process.join()


def _serve(line):
    """Make the calls that come along the line, until it is cut."""
    while True:
        try:
            fn, args, kwargs = line.recv()
        except EOFError:
            return
        try:
            answer = (False, fn(*args, **kwargs))
        except Exception as error:
            answer = (True, error)
        try:
            line.send(answer)
        except OSError:  # nobody is there any more
            return


def workers_of(engine: EngineSettings, members: int) -> int | None:
    """How many members run at the same time; None where a cluster decides.

    Parameters
    ----------
    engine : EngineSettings
    members : int
        How many there are to run.
    """
    if isinstance(engine, DaskSettings):
        return None
    if isinstance(engine, SerialSettings):
        return 1
    wanted = engine.workers or len(os.sched_getaffinity(0))
    return max(1, min(wanted, members))


@contextmanager
def opened_executor(engine: EngineSettings, members: int) -> Iterator[Executor | None]:
    """Give the executor of an engine while the block runs.

    Parameters
    ----------
    engine : EngineSettings
    members : int
        How many there are to run: no more processes are started.

    Yields
    ------
    Executor or None
        None stands for this process itself. If the block ends in an exception,
        nothing is waited for: processes are killed, calls of a cluster dropped.

    Raises
    ------
    EngineError
        If there is no Dask, or no scheduler answers.
    """
    if isinstance(engine, SerialSettings):
        yield None
    elif isinstance(engine, DaskSettings):
        with _dask_executor(engine) as executor:
            yield executor
    else:
        with _environment(dict.fromkeys(ONE_THREAD, "1")):
            executor = WorkerProcesses(workers_of(engine, members))
            try:
                yield executor
            except BaseException:
                executor.kill()
                raise
            executor.shutdown()


@contextmanager
def _environment(wanted: Mapping[str, str]) -> Iterator[None]:
    """Set variables that are not set, while the block runs."""
    added = {key: value for key, value in wanted.items() if key not in os.environ}
    os.environ.update(added)
    try:
        yield
    finally:
        for key in added:
            os.environ.pop(key, None)


@contextmanager
def _dask_executor(engine: DaskSettings) -> Iterator[Executor]:
    """Executor of a Dask scheduler."""
    try:
        from dask.distributed import Client
    except ImportError as error:
        message = (
            '[engine] kind = "dask" needs Dask distributed, which is not installed: '
            'pip install "eddyshed[cluster]"'
        )
        raise EngineError(message) from error
    where = engine.address or f"the scheduler of {engine.scheduler_file}"
    try:
        client = Client(
            engine.address,
            **({} if engine.address else {"scheduler_file": engine.scheduler_file}),
            timeout=PATIENCE,
            set_as_default=False,
        )
    except (OSError, ValueError, TimeoutError) as error:
        message = (
            f"[engine] no Dask scheduler answers at {where} ({error}); start one with "
            "`dask scheduler`, and workers with `dask worker ADDRESS --nthreads 1`"
        )
        raise EngineError(message) from error
    with client:
        threads = client.nthreads().values()
        log.info("engine: %d Dask workers at %s", len(threads), where)
        if any(count > 1 for count in threads):
            log.warning(
                "engine: some Dask workers have several threads, on which members "
                "slow each other down; start them with --nthreads 1"
            )
        # A worker that is lost is the scheduler's own business: it gives what ran
        # there to another.
        executor = client.get_executor(pure=False)
        try:
            yield executor
        except BaseException:
            executor.shutdown(wait=False)
            raise
