"""Doing the plan: units are cut into parts and parts are fitted, a bounded number of tasks at a time."""

from __future__ import annotations

import itertools
from collections import deque
from collections.abc import Callable
from pathlib import Path
from typing import Any

from starkiln.engine.closing import part_path
from starkiln.engine.executors import ClusterTrouble, Executor, Finished, WorkerDied
from starkiln.engine.job import Job, SavedJob
from starkiln.engine.plan import Plan, Unit
from starkiln.engine.tasks import Cut, Fitted, Part, cut_unit, fit_part
from starkiln.errors import EnvironmentTrouble, StarkilnError
from starkiln.tables.write import publish

TRIES = 2
"""How often a task is done before its error counts."""


class PartFailed(StarkilnError):
    """A stage failed on the rows of a part: a bug, or a bad machine."""


class Work:
    """Feeds an executor with the tasks of a plan, and puts the files of finished parts in place.

    Cuts run ahead of the fits by no more than it takes to keep the workers busy, so that the disk holds few
    cut rows; an executor never holds more than two tasks a worker.

    Parameters
    ----------
    plan
        The plan.
    job
        The job, or where workers find it.
    parts_folder
        Receives the parts' files, in one folder per table.
    executor
        Runs the tasks.
    check
        Called again and again; may raise to stop.
    """

    def __init__(
        self,
        plan: Plan,
        job: Job | SavedJob,
        parts_folder: Path,
        executor: Executor,
        check: Callable[[], None],
    ) -> None:
        self._job = job
        self._parts_folder = parts_folder
        self._executor = executor
        self._check = check
        self._units = deque(plan.units)
        self._waiting: deque[Part] = deque()
        self._running: dict[str, tuple[Unit | Part, int]] = {}
        self._serial = itertools.count()

    def run(self, on_cut: Callable[[Cut], None], on_part: Callable[[Fitted], None]) -> None:
        """Do every part, calling back as each is in place.

        Raises
        ------
        StarkilnError
            What stops the run; the executor's other tasks are then left to whoever closes it.
        """
        self._fill()
        while self._running:
            self._check()
            finished = self._executor.next_finished()
            if finished is None:
                continue
            task, tries = self._running.pop(finished.key)
            if finished.error is not None:
                self._try_again(task, tries, finished)
            elif isinstance(task, Unit):
                self._waiting.extend(finished.result.parts)
                on_cut(finished.result)
            else:
                self._put_in_place(task, finished.result)
                on_part(finished.result)
            self._fill()

    def _fill(self) -> None:
        while len(self._running) < 2 * self._executor.workers:
            if self._units and self._parts_ahead() < 2 * self._executor.workers:
                self._submit(self._units.popleft(), 1)
            elif self._waiting:
                self._submit(self._waiting.popleft(), 1)
            else:
                break

    def _parts_ahead(self) -> int:
        cutting = sum(len(task.part_rows) for task, _ in self._running.values() if isinstance(task, Unit))
        return len(self._waiting) + cutting

    def _submit(self, task: Unit | Part, tries: int) -> None:
        cutting = isinstance(task, Unit)
        key = f"{'cut' if cutting else 'fit'}-{task.number:06d}-{next(self._serial)}"
        self._running[key] = (task, tries)
        function: Callable[..., Any] = cut_unit if cutting else fit_part
        self._executor.submit(key, function, self._job, task, urgent=cutting)

    def _try_again(self, task: Unit | Part, tries: int, finished: Finished) -> None:
        error = finished.error
        assert error is not None
        if isinstance(error, StarkilnError) and not isinstance(error, EnvironmentTrouble):
            raise error
        if tries < TRIES and not isinstance(error, ClusterTrouble):
            self._submit(task, tries + 1)
            return
        if isinstance(error, EnvironmentTrouble):
            raise error
        if isinstance(error, OSError):
            raise EnvironmentTrouble(f"{_describe(task)}: {error}; run again when mended") from error
        raise PartFailed(f"{_describe(task)} failed: {_reason(error)}") from error

    def _put_in_place(self, part: Part, fitted: Fitted) -> None:
        for name, written in fitted.written.items():
            publish(written, part_path(self._parts_folder, name, part.number))
        part.path.unlink()


def _describe(task: Unit | Part) -> str:
    if isinstance(task, Unit):
        return f"reading input rows {task.first_row} to {task.last_row - 1}"
    return f"part {task.number} of {task.rows} rows"


def _reason(error: BaseException) -> str:
    if isinstance(error, WorkerDied):
        return f"{error}; if memory ran out, raise compute.memory_per_worker"
    return f"{type(error).__name__}: {error} (a bug: please report it, with what --debug shows)"
