"""Running tasks on a dask cluster that somebody else has started, and leaves running."""

from __future__ import annotations

import itertools
import json
import logging
import queue
import time
import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from starkiln.engine.disk import disk_trouble
from starkiln.engine.events import EventLog
from starkiln.engine.executors import (
    HAND_OVER_SECONDS,
    POLL_SECONDS,
    ClusterTrouble,
    Finished,
    asyncio_silenced,
    interrupts_blocked,
    plain_error,
)
from starkiln.engine.identity import identify
from starkiln.engine.records import Identity
from starkiln.errors import SettingsError

LOOK_SECONDS = 1.0
"""How often the scheduler is asked for its workers."""

NO_WORKERS_SECONDS = 120.0
"""Without a worker to use for so long, the run ends."""

CONNECT_SECONDS = 10.0

HOW_TO_START = "start workers with: dask worker {address} --nthreads 1 --nanny"


@dataclass
class _Sent:
    """A task, and the workers that may do it; none, and no future, while it waits for a worker."""

    function: Callable[..., Any]
    arguments: tuple[Any, ...]
    urgent: bool
    future: Any = None
    addresses: frozenset[str] = frozenset()


class ForeignExecutor:
    """Runs tasks on those workers of a cluster that agree with the run, also on late-comers; closes none of them.

    A worker is known by its address and its folder, since one that starts anew may get the same address.

    Parameters
    ----------
    client
        Connected to the scheduler.
    address
        The scheduler's address, for messages.
    identity
        What workers must agree on.
    log
        Is told of workers that join, leave, or are refused.
    """

    def __init__(self, client: Any, address: str, identity: Identity, log: EventLog) -> None:
        self._client = client
        self._address = address
        self._identity = identity
        self._log = log
        self._tasks: dict[str, _Sent] = {}
        self._done: queue.SimpleQueue[tuple[str, Any]] = queue.SimpleQueue()
        self._vetting: dict[tuple[str, str], Any] = {}
        self._agreed: dict[str, str] = {}
        self._refused: dict[tuple[str, str], str] = {}
        self._serial = itertools.count()
        self._next_look = 0.0
        self._had_worker = time.monotonic()

    @property
    def workers(self) -> int:
        """How many tasks run at a time."""
        return max(1, len(self._agreed))

    def check_workers(self) -> None:
        """Look at the workers that are there before the run begins.

        Raises
        ------
        SettingsError
            If one has no nanny, or more than one thread.
        """
        for address, facts in self._ask().items():
            if unfit := _unfit(facts):
                hint = HOW_TO_START.format(address=self._address)
                raise SettingsError(f"worker {address} of the cluster {unfit}; {hint}")

    def submit(self, key: str, function: Callable[..., Any], *args: Any, urgent: bool = False) -> None:
        """Take a task; urgent ones go before the others."""
        self._tasks[key] = _Sent(function, args, urgent)
        self._send(key)

    def next_finished(self) -> Finished | None:
        """Wait a short while for a task to end, and return it.

        Raises
        ------
        ClusterTrouble
            If the scheduler cannot be reached, or no worker has agreed with the run for long.
        """
        if time.monotonic() >= self._next_look:
            self._look()
            self._next_look = time.monotonic() + LOOK_SECONDS
        try:
            key, future = self._done.get(timeout=POLL_SECONDS)
        except queue.Empty:
            return None
        task = self._tasks.get(key)
        if task is None or task.future is not future:
            return None  # it has been given to other workers since
        try:
            finished = Finished(key, future.result(timeout=HAND_OVER_SECONDS), None)
        except Exception as error:
            if future.status not in ("error", "cancelled"):
                # The worker died before it handed the result over, so the task is done again.
                self._listen(key, future)
                return None
            finished = Finished(key, None, plain_error(error))
        del self._tasks[key]
        future.release()
        return finished

    def refuse(self, address: str) -> None:
        """Give a worker no more tasks."""
        folder = self._agreed.pop(address, None)
        if folder is not None:
            self._note_refusal((address, folder), "it does not agree with the run any more")
            self._send_again()

    def abandon(self) -> None:
        """Cancel what has not ended; a worker that is at it comes to its end, and nobody hears of it."""
        tasks, self._tasks = self._tasks, {}
        futures = [task.future for task in tasks.values() if task.future is not None]
        with suppress(Exception):
            self._client.cancel([*futures, *self._vetting.values()])
        self._vetting = {}

    def _send(self, key: str) -> None:
        """Give a task to the workers that have agreed, if there are any."""
        task = self._tasks[key]
        task.addresses = frozenset(self._agreed)
        if not task.addresses:
            return
        task.future = self._client.submit(
            task.function,
            *task.arguments,
            key=f"{key}.{next(self._serial)}",
            pure=False,
            priority=int(task.urgent),
            workers=sorted(task.addresses),
            allow_other_workers=False,
        )
        self._listen(key, task.future)

    def _listen(self, key: str, future: Any) -> None:
        future.add_done_callback(lambda ended: self._done.put((key, ended)))

    def _send_again(self) -> None:
        """Give tasks that wait for a worker, or whose workers are all gone, to those there are.

        A task that is only for workers that are gone would wait for ever.
        """
        for key, task in self._tasks.items():
            if task.addresses.isdisjoint(self._agreed) and not (task.future is not None and task.future.done()):
                lost, task.future = task.future, None
                if lost is not None:
                    self._client.cancel([lost])
                self._send(key)

    def _look(self) -> None:
        """Take notice of workers that have come, gone, or been found to agree."""
        found = self._ask()
        workers = {address: facts["local_directory"] for address, facts in found.items()}
        for address, folder in list(self._agreed.items()):
            if workers.get(address) != folder:
                del self._agreed[address]
                self._log.write("worker", address=address, state="gone")
        for worker in workers.items():
            if worker not in self._vetting and worker not in self._refused and worker not in self._agreed.items():
                self._vet(worker, found[worker[0]])
        self._take_verdicts(workers)
        self._send_again()
        if self._agreed:
            self._had_worker = time.monotonic()
        elif time.monotonic() - self._had_worker > NO_WORKERS_SECONDS:
            reasons = "; ".join(f"{address}: {text}" for (address, _), text in self._refused.items())
            raise ClusterTrouble(
                f"no worker of {self._address} can be used ({reasons or 'there is none'}); run again when mended"
            )

    def _ask(self) -> dict[str, Any]:
        try:
            # The client's scheduler_info() now and then has no workers: another thread of it asks for the totals only.
            return dict(self._client.sync(self._client.scheduler.identity, n_workers=-1)["workers"])
        except Exception as error:
            raise ClusterTrouble(
                f"the scheduler {self._address} cannot be reached any more ({error}); run again when mended"
            ) from error

    def _vet(self, worker: tuple[str, str], facts: dict[str, Any]) -> None:
        if unfit := _unfit(facts):
            self._note_refusal(worker, f"it {unfit}")
            return
        self._vetting[worker] = self._client.submit(
            identify,
            self._identity,
            key=f"identify-{self._identity.nonce}-{next(self._serial)}",
            pure=False,
            priority=2,
            workers=[worker[0]],
            allow_other_workers=False,
        )

    def _take_verdicts(self, workers: dict[str, str]) -> None:
        for worker, future in list(self._vetting.items()):
            address, folder = worker
            if workers.get(address) != folder:
                self._client.cancel([future])
            elif not future.done():
                continue
            elif text := _verdict(future):
                self._note_refusal(worker, text)
            else:
                self._agreed[address] = folder
                self._log.write("worker", address=address, state="agreed")
            del self._vetting[worker]

    def _note_refusal(self, worker: tuple[str, str], text: str) -> None:
        self._refused[worker] = text
        self._log.write("refused", address=worker[0], reason=text)


def _unfit(facts: dict[str, Any]) -> str:
    """Return what a worker lacks to be used."""
    if not facts.get("nanny"):
        return "has no nanny, which starts it anew when it dies"
    if facts["nthreads"] != 1:
        return f"has {facts['nthreads']} threads, of which a task that hangs would end the others"
    return ""


def _verdict(future: Any) -> str:
    """Return why a worker is of no use, in what it said of itself."""
    try:
        return str(future.result(timeout=HAND_OVER_SECONDS))
    except Exception as error:
        return f"it cannot say what it is: {type(error).__name__}: {error}"
    finally:
        future.release()


@contextmanager
def open_foreign(
    scheduler: str | None, scheduler_file: Path | None, identity: Identity, log: EventLog
) -> Iterator[ForeignExecutor]:
    """Connect to a scheduler, and leave it and its workers as they are afterwards.

    Encryption is set up as dask's own configuration says.

    Parameters
    ----------
    scheduler
        The address, such as tls://10.0.0.1:8786.
    scheduler_file
        A file that a scheduler has written its address into; used if there is no address.
    identity
        What workers must agree on.
    log
        Is told of workers that join, leave, or are refused.

    Raises
    ------
    ClusterTrouble
        If there is no such scheduler.
    SettingsError
        If the address is none, or a worker has no nanny or more than one thread.
    """
    import dask
    from distributed import Client

    address = scheduler or _address_in(scheduler_file)
    connecting = dask.config.set({"distributed.comm.timeouts.connect": CONNECT_SECONDS})
    with connecting, _quiet(), asyncio_silenced():
        try:
            with interrupts_blocked(), warnings.catch_warnings(action="ignore"):
                client = Client(address, timeout=CONNECT_SECONDS, set_as_default=False, name="starkiln")
        except OSError as error:
            raise ClusterTrouble(f"no scheduler answers at {address} ({error}); run again when it does") from error
        except (ValueError, TypeError, RuntimeError) as error:
            raise SettingsError(f"scheduler {address}: {error}") from error
        executor = ForeignExecutor(client, address, identity, log)
        try:
            executor.check_workers()
            yield executor
        finally:
            executor.abandon()
            with suppress(Exception):
                client.close()


def _address_in(scheduler_file: Path | None) -> str:
    assert scheduler_file is not None
    with disk_trouble(scheduler_file):
        text = scheduler_file.read_text()
    try:
        return str(json.loads(text)["address"])
    except (ValueError, LookupError, TypeError) as error:
        raise SettingsError(f"{scheduler_file} is not a file that a dask scheduler has written") from error


@contextmanager
def _quiet() -> Iterator[None]:
    """Keep dask from telling what the run tells in its own words."""
    loggers = [logging.getLogger(name) for name in ("distributed", "distributed.client")]
    levels = [logger.level for logger in loggers]
    for logger in loggers:
        logger.setLevel(logging.CRITICAL)
    try:
        yield
    finally:
        for logger, level in zip(loggers, levels, strict=True):
            logger.setLevel(level)
