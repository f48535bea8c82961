"""Where tasks run: in this process, or on a cluster of worker processes of this machine."""

from __future__ import annotations

import asyncio
import gc
import logging
import os
import queue
import signal
import tempfile
from collections import deque
from collections.abc import Callable, Iterator
from concurrent.futures import CancelledError
from contextlib import ExitStack, contextmanager, suppress
from dataclasses import dataclass
from multiprocessing import resource_tracker
from pathlib import Path
from typing import Any, Protocol

from starkiln.errors import EnvironmentTrouble

SMALL_RUN_ROWS = 500
"""Up to so many rows a cluster would take longer to start than the work."""

ALLOCATION = {
    "MALLOC_ARENA_MAX": "1",
    "MALLOC_TRIM_THRESHOLD_": str(256 * 2**20),
    "MALLOC_MMAP_THRESHOLD_": str(32 * 2**20),
}
"""Chains are made and dropped all the time: giving their memory back to the system took a sixth of the time."""

WORKER_DEATHS_ALLOWED = 3

POLL_SECONDS = 0.5
HAND_OVER_SECONDS = 2.0
LOST_WORKER_SECONDS = 30.0
"""A worker that has not come back by then is replaced."""

NO_WORKERS_SECONDS = 120.0
"""Without any worker for so long, the run ends."""

SILENT_WORKER_SECONDS = 3600.0
"""A worker without a sign of life for so long is ended. Tasks end hung ones long before, and tell which row it was."""

KILL_SECONDS = 0.1


class WorkerDied(Exception):
    """The worker processes that had a task died, again and again."""


class ClusterTrouble(EnvironmentTrouble):
    """The worker processes do not start, or cannot be reached any more."""


@dataclass(frozen=True)
class Finished:
    """A task that has ended: its key, and its result or its error."""

    key: str
    result: Any
    error: BaseException | None


class Executor(Protocol):
    """Runs plain functions of small arguments, each under a key of its own."""

    @property
    def workers(self) -> int:
        """How many tasks run at a time."""

    def submit(self, key: str, function: Callable[..., Any], *args: Any, urgent: bool = False) -> None:
        """Take a task; urgent ones go before the others."""

    def next_finished(self) -> Finished | None:
        """Return a task that has ended, or None if none did within a short while."""

    def refuse(self, address: str) -> None:
        """Give a worker no more tasks."""

    def abandon(self) -> None:
        """Give up the tasks that have not ended."""


class SerialExecutor:
    """Runs each task in this process, when its result is asked for."""

    workers = 1

    def __init__(self) -> None:
        self._tasks: deque[tuple[str, Callable[..., Any], tuple[Any, ...]]] = deque()

    def submit(self, key: str, function: Callable[..., Any], *args: Any, urgent: bool = False) -> None:
        """Take a task; urgent ones go before the others."""
        task = (key, function, args)
        if urgent:
            self._tasks.appendleft(task)
        else:
            self._tasks.append(task)

    def next_finished(self) -> Finished | None:
        """Run the next task."""
        if not self._tasks:
            return None
        key, function, args = self._tasks.popleft()
        try:
            return Finished(key, function(*args), None)
        except Exception as error:
            return Finished(key, None, error)

    def refuse(self, address: str) -> None:
        """Do nothing: this process is the only one."""

    def abandon(self) -> None:
        """Forget the tasks."""
        self._tasks.clear()


class ClusterExecutor:
    """Runs tasks on the workers of a dask cluster, and replaces workers that are lost for good."""

    def __init__(self, cluster: Any, client: Any, workers: int) -> None:
        self.workers = workers
        self._cluster = cluster
        self._client = client
        self._futures: dict[str, Any] = {}
        self._done: queue.SimpleQueue[Any] = queue.SimpleQueue()

    def submit(self, key: str, function: Callable[..., Any], *args: Any, urgent: bool = False) -> None:
        """Take a task; urgent ones go before the others."""
        future = self._client.submit(function, *args, key=key, pure=False, priority=int(urgent))
        self._futures[key] = future
        future.add_done_callback(self._done.put)

    def next_finished(self) -> Finished | None:
        """Wait a short while for a task to end, and return it."""
        if len(self._cluster.workers) < self.workers:
            self._cluster.scale(self.workers)
        try:
            future = self._done.get(timeout=POLL_SECONDS)
        except queue.Empty:
            return None
        try:
            finished = Finished(future.key, future.result(timeout=HAND_OVER_SECONDS), None)
        except Exception as error:
            if future.status not in ("error", "cancelled"):
                # The worker died before it handed the result over, so the task is done again.
                future.add_done_callback(self._done.put)
                return None
            finished = Finished(future.key, None, plain_error(error))
        del self._futures[future.key]
        # An erred future stays in the scheduler until it is released.
        future.release()
        return finished

    def refuse(self, address: str) -> None:
        """Do nothing: these workers are this program's own."""

    def abandon(self) -> None:
        """End the workers in the middle of their tasks."""
        # They may be dying already, of the same signal that ends the run.
        with suppress(Exception):
            _kill_workers(self._cluster)


def plain_error(error: Exception) -> Exception:
    """Return the error of a task, with dask's own ones in terms of this program."""
    from distributed import KilledWorker
    from distributed.scheduler import NoWorkerError

    if isinstance(error, KilledWorker):
        return WorkerDied(f"its worker died {WORKER_DEATHS_ALLOWED + 1} times")
    if isinstance(error, NoWorkerError | CancelledError):
        return ClusterTrouble("the worker processes are gone and cannot be started again; run again when mended")
    return error


@contextmanager
def open_cluster(workers: int, memory_per_worker: int, scratch: Path) -> Iterator[ClusterExecutor]:
    """Start worker processes on the loopback interface, encrypted, and end them afterwards.

    Parameters
    ----------
    workers
        How many processes, of one thread each.
    memory_per_worker
        Bytes at which a worker is restarted.
    scratch
        A folder for dask's own files.

    Raises
    ------
    ClusterTrouble
        If the workers do not start.
    """
    import dask
    from distributed import Client, LocalCluster
    from distributed.security import Security

    one_thread = dict.fromkeys(("OMP_NUM_THREADS", "MKL_NUM_THREADS", "OPENBLAS_NUM_THREADS", "NUMBA_NUM_THREADS"), "1")
    options = {
        "distributed.scheduler.allowed-failures": WORKER_DEATHS_ALLOWED,
        "distributed.scheduler.no-workers-timeout": NO_WORKERS_SECONDS,
        "distributed.scheduler.worker-ttl": SILENT_WORKER_SECONDS,
        "distributed.deploy.lost-worker-timeout": LOST_WORKER_SECONDS,
        "distributed.nanny.pre-spawn-environ": one_thread | ALLOCATION,
        "distributed.comm.require-encryption": True,
        # Results are small; what a worker spills to disk it would unpickle from there.
        "distributed.worker.memory.target": False,
        "distributed.worker.memory.spill": False,
        # What goes wrong comes back with the task; dask's own lines would only repeat it.
        "logging": {"distributed": "critical"},
    }
    with dask.config.set(options), asyncio_silenced(), _temporary_files_in(scratch), ExitStack() as stack:
        try:
            with interrupts_blocked():
                cluster = stack.enter_context(
                    LocalCluster(
                        n_workers=workers,
                        threads_per_worker=1,
                        processes=True,
                        memory_limit=memory_per_worker,
                        protocol="tls://",
                        security=Security.temporary(),
                        host="127.0.0.1",
                        dashboard_address="127.0.0.1:0",
                        local_directory=os.fspath(scratch),
                        silence_logs=logging.CRITICAL,
                    )
                )
                client = stack.enter_context(Client(cluster))
        except (RuntimeError, OSError) as error:
            raise ClusterTrouble(
                f"cannot start {workers} worker processes ({error}); try fewer with --workers"
            ) from error
        executor = ClusterExecutor(cluster, client, workers)
        try:
            yield executor
        except BaseException:
            executor.abandon()
            raise


@contextmanager
def _temporary_files_in(folder: Path) -> Iterator[None]:
    """Let libraries, also in worker processes, make their temporary files in a folder of this run.

    The system's may be small, or full.
    """
    before, variable = tempfile.tempdir, os.environ.get("TMPDIR")
    tempfile.tempdir = os.environ["TMPDIR"] = os.fspath(folder)
    try:
        yield
    finally:
        tempfile.tempdir = before
        if variable is None:
            del os.environ["TMPDIR"]
        else:
            os.environ["TMPDIR"] = variable


@contextmanager
def asyncio_silenced() -> Iterator[None]:
    """Keep asyncio from telling of errors that nobody fetched, and dask of workers that are killed in the end.

    dask leaves such errors behind when workers die, and tells of deaths even after it has closed a cluster.
    """
    loggers = [logging.getLogger(name) for name in ("asyncio", "distributed")]
    levels = [logger.level for logger in loggers]
    for logger in loggers:
        logger.setLevel(logging.CRITICAL)
    try:
        yield
    finally:
        gc.collect()  # asyncio tells when it finds the error thrown away
        for logger, level in zip(loggers, levels, strict=True):
            logger.setLevel(level)


@contextmanager
def interrupts_blocked() -> Iterator[None]:
    """Keep Ctrl-C from the threads and processes that are started here, for as long as they live.

    A terminal sends it to every process of a command; only the main thread of this one is to act upon it.
    """
    # Whatever thread starts Python's resource tracker is left with SIGINT unblocked.
    resource_tracker.ensure_running()
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


def _kill_workers(cluster: Any) -> None:
    """End workers in the middle of a task, which a cluster that is closed would wait for."""

    async def kill() -> None:
        nannies = cluster.workers.values()
        await asyncio.gather(*(nanny.close(timeout=KILL_SECONDS, reason="stopped") for nanny in nannies))

    cluster.sync(kill)
