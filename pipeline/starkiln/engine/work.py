"""Doing the plan: units are cut into parts and parts are fitted, a bounded number of tasks at a time."""

from __future__ import annotations

import itertools
import uuid
from collections import deque
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from starkiln.engine.disk import disk_trouble
from starkiln.engine.executors import ClusterTrouble, Executor, Finished, WorkerDied
from starkiln.engine.guard import read_trace, remove_mark
from starkiln.engine.isolation import Isolation, Span
from starkiln.engine.job import Job, SavedJob
from starkiln.engine.pace import Limits, Pace
from starkiln.engine.records import (
    Attempt,
    Cut,
    Fitted,
    Guard,
    Part,
    Plan,
    SetAside,
    StartedBefore,
    Stop,
    Unit,
    WorkerDisagrees,
    WorkSink,
)
from starkiln.engine.tasks import assemble_part, cut_unit, fit_rows, remove_pieces, set_row_aside
from starkiln.errors import EnvironmentTrouble, StarkilnError

TRIES = 2
"""How often a task is done before trouble with the environment, or an error in reading, counts."""

LOSSES = {True: 3, False: 10}
"""How often the workers of a cut (True) or a fit (False) may die again and again before it begins."""

REFUSALS = 1000

MARGIN = 1.25
"""A task begins if there is time for so many times what it usually takes."""

CUT_ROW_SECONDS = 2e-5

FAULTY_PARTS = 5
FAULTY_SHARE = 0.01
"""Once so many parts, and so large a share of all, have rows at fault, the run stops."""


class PartFailed(StarkilnError):
    """Rows of a part cannot be read or fitted: a bug, or a bad machine."""


@dataclass(frozen=True)
class _Task:
    """A unit to be cut, a span of a part to be fitted or set aside, or a part to be assembled (no span).

    ``troubles`` and ``losses`` say how often it has met trouble with the environment, and lost its worker.
    """

    work: Unit | Part
    span: Span | None = None
    troubles: int = 0
    losses: int = 0

    @property
    def name(self) -> str:
        """What it is, in a key."""
        if isinstance(self.work, Unit):
            return f"cut-{self.work.number:06d}"
        if self.span is None:
            return f"join-{self.work.number:06d}"
        return f"fit-{self.work.number:06d}-{self.span.first:06d}-{self.span.last:06d}"

    @property
    def fits(self) -> int:
        """The most rows it can have to fit."""
        if isinstance(self.work, Unit) or self.span is None or self.span.set_aside is not None:
            return 0
        return min(self.span.rows, self.work.fits)

    @property
    def kept(self) -> int:
        """The rows of whatever it takes over."""
        return 0 if isinstance(self.work, Unit) or self.span is None else self.span.rows - self.fits


class Work:
    """Feeds an executor with the tasks of a plan, and hands what they make to a sink.

    Cuts run ahead of the fits by no more than it takes to keep the workers busy, so that the disk holds few
    cut rows; an executor never holds more than two tasks a worker.

    Parameters
    ----------
    plan
        The plan.
    job
        The job, or where workers find it.
    executor
        Runs the tasks.
    done
        Parts that are done already.
    set_aside
        Rows that are known to be beyond any stage, by part.
    pace, limits
        What tasks take, and what they may take.
    stop
        Says whether there is time for a task.
    sink
        Receives parts, failures, and rows set aside.
    marks
        Folder of the marks of running tasks.
    """

    def __init__(
        self,
        plan: Plan,
        job: Job | SavedJob,
        executor: Executor,
        *,
        done: frozenset[int],
        set_aside: Mapping[int, tuple[SetAside, ...]],
        pace: Pace,
        limits: Limits,
        stop: Stop,
        sink: WorkSink,
        marks: Path,
    ) -> None:
        self._parts = plan.parts
        self._job = job
        self._executor = executor
        self._set_aside = set_aside
        self._pace = pace
        self._limits = limits
        self._stop = stop
        self._sink = sink
        self._marks = marks
        self._done = set(done)
        self._first_fits = True
        self._cuts = deque(_Task(unit) for unit in plan.units if self._wanted(unit))
        self._fits: deque[_Task] = deque()
        self._pieces: deque[_Task] = deque()
        self._running: dict[str, _Task] = {}
        self._isolations: dict[int, Isolation] = {}
        self._faulty = set(set_aside)
        self._serial = itertools.count()
        self._run_id = uuid.uuid4().hex[:12]

    def run(self) -> bool:
        """Do every part that is not done, and return whether all are.

        When the time is up nothing new begins, and what runs is waited for until its grace is over.

        Raises
        ------
        StarkilnError
            What ends the run; the executor's other tasks are then left to whoever closes it.
        """
        with disk_trouble(self._marks):
            self._marks.mkdir(parents=True, exist_ok=True)
        self._fill()
        while self._running:
            if self._stop.grace_left() <= 0:
                self._executor.abandon()
                break
            finished = self._executor.next_finished()
            if finished is not None:
                self._take(finished)
            self._fill()
        return len(self._done) == self._parts

    # What begins

    def _fill(self) -> None:
        while len(self._running) < 2 * self._executor.workers:
            queue = self._next_queue()
            if not queue or not self._may_begin(queue[0]):
                break
            self._submit(queue.popleft())

    def _next_queue(self) -> deque[_Task]:
        """Return where the next task waits: first what is left of failing parts, then enough cuts, then fits."""
        if self._pieces:
            return self._pieces
        cutting = sum(len(self._wanted(task.work)) for task in self._running.values() if isinstance(task.work, Unit))
        if self._cuts and len(self._fits) + cutting < 2 * self._executor.workers:
            return self._cuts
        return self._fits

    def _wanted(self, unit: Unit) -> frozenset[int]:
        numbers = range(unit.first_part, unit.first_part + len(unit.part_rows))
        return frozenset(number for number in numbers if number not in self._done)

    def _may_begin(self, task: _Task) -> bool:
        """Return whether a task can come to its end in time; the first one may hope for the best."""
        if self._stop.has_time_for(MARGIN * _seconds(task, self._pace.seconds_for) + self._seconds_ahead()):
            return True
        hope = self._first_fits and not self._running
        return hope and self._stop.has_time_for(_seconds(task, self._pace.least_seconds_for))

    def _seconds_ahead(self) -> float:
        """Return what the tasks before the next one take."""
        if len(self._running) < self._executor.workers:
            return 0.0
        running = (_seconds(task, self._pace.seconds_for) for task in self._running.values())
        return sum(running) / self._executor.workers

    def _submit(self, task: _Task) -> None:
        key = f"{task.name}-{next(self._serial)}-{self._run_id}"
        self._running[key] = task
        function, arguments = self._call(task, key)
        urgent = task.span is None or task.span.level > 0 or task.span.set_aside is not None
        self._executor.submit(key, function, self._job, task.work, *arguments, urgent=urgent)

    def _call(self, task: _Task, key: str) -> tuple[Callable[..., Any], tuple[Any, ...]]:
        """Return the function that does a task, and its arguments after the job and what it is about."""
        if isinstance(task.work, Unit):
            wanted = self._wanted(task.work)
            known = {number: rows for number, rows in self._set_aside.items() if number in wanted}
            return cut_unit, (wanted, known)
        if task.span is None:
            return assemble_part, (self._isolations[task.work.number].pieces(),)
        if task.span.set_aside is not None:
            return set_row_aside, (task.span.set_aside,)
        limit = self._limits.limit(task.fits, self._pace, task.kept)
        return fit_rows, (task.span.first, task.span.last, Guard(self._marks / key, limit))

    # What ends

    def _take(self, finished: Finished) -> None:
        task = self._running.pop(finished.key)
        if finished.error is not None:
            self._failed(finished.key, task, finished.error)
        elif isinstance(task.work, Unit):
            self._cut_done(finished.result)
        elif task.span is None:
            self._part_done(task.work, finished.result)
        else:
            self._span_done(task.work, task.span, finished.result)

    def _cut_done(self, cut: Cut) -> None:
        self._sink.cut_done(cut)
        for part in cut.parts:
            isolation = Isolation(part, excused=part.rows == 1 < self._parts)
            self._isolations[part.number] = isolation
            self._fits.extend(_Task(part, span) for span in isolation.spans())

    def _span_done(self, part: Part, span: Span, fitted: Fitted) -> None:
        isolation = self._isolations[part.number]
        if span.set_aside is None:
            self._first_fits = False
            self._pace.note(fitted.fitted, fitted.seconds["process"])
            self._sink.attempt(Attempt(part.number, span.first, span.last, "done", host=fitted.host))
        isolation.done(span, fitted)
        if span.set_aside is None and fitted.rows == part.rows:
            self._part_done(part, fitted)
        elif isolation.complete:
            self._pieces.append(_Task(part))
        else:
            self._go_on(part)

    def _go_on(self, part: Part) -> None:
        isolation = self._isolations[part.number]
        for row in isolation.newly_set_aside():
            self._sink.row_set_aside(part.number, row)
        self._pieces.extend(_Task(part, span) for span in isolation.spans())

    def _part_done(self, part: Part, fitted: Fitted) -> None:
        self._sink.part_done(fitted)
        self._done.add(part.number)
        remove_pieces(piece for piece in self._isolations.pop(part.number).pieces() if piece is not fitted)
        with disk_trouble(part.path):
            part.path.unlink(missing_ok=True)

    # What fails

    def _failed(self, key: str, task: _Task, error: BaseException) -> None:
        if self._stop.requested() is not None:
            # A signal meant for all has ended workers, too, and what they did is left for the next run.
            return
        if isinstance(error, ClusterTrouble):
            raise error
        if isinstance(error, WorkerDisagrees):
            self._refused(task, error)
        elif isinstance(error, EnvironmentTrouble | OSError):
            self._environment(task, error)
        elif isinstance(error, StarkilnError):
            raise error
        elif isinstance(error, WorkerDied) and not (self._marks / key).exists():
            self._lost(task, error)
        elif isinstance(task.work, Unit) or task.span is None or task.span.set_aside is not None:
            self._not_a_fit(task, error)
        else:
            self._fit_failed(key, task.work, task.span, error)

    def _refused(self, task: _Task, error: WorkerDisagrees) -> None:
        self._executor.refuse(error.address)
        if task.losses >= REFUSALS:
            raise EnvironmentTrouble(error.text) from error
        self._submit(replace(task, losses=task.losses + 1))

    def _environment(self, task: _Task, error: EnvironmentTrouble | OSError) -> None:
        if isinstance(task.work, Part):
            self._note(task.work, task.span, "environment", str(error))
        if task.troubles + 1 < TRIES:
            self._submit(replace(task, troubles=task.troubles + 1))
        elif isinstance(error, EnvironmentTrouble):
            raise error
        else:
            raise EnvironmentTrouble(f"{_describe(task.work)}: {error}; run again when mended") from error

    def _lost(self, task: _Task, error: WorkerDied) -> None:
        """Do a task again whose workers died before it began: of tasks before it, or of what is no task's doing."""
        if task.losses + 1 >= LOSSES[isinstance(task.work, Unit)]:
            remedy = "if memory ran out, raise compute.memory_per_worker; run again when mended"
            raise EnvironmentTrouble(f"{_describe(task.work)}: {error}; {remedy}") from error
        self._submit(replace(task, losses=task.losses + 1))

    def _not_a_fit(self, task: _Task, error: BaseException) -> None:
        if task.troubles + 1 >= TRIES:
            raise PartFailed(f"{_describe(task.work)} failed: {_reason(error)}") from error
        self._submit(replace(task, troubles=task.troubles + 1))

    def _fit_failed(self, key: str, part: Part, span: Span, error: BaseException) -> None:
        kind, text, trace = _verdict(error)
        remove_mark(self._marks / key)
        self._note(part, span, kind, text, trace)
        isolation = self._isolations[part.number]
        isolation.failed(span, kind, text)
        if isolation.hopeless:
            raise PartFailed(
                f"{_describe(part)} failed, with each of its rows that was tried: {_reason(error)}"
            ) from error
        self._go_on(part)
        self._count_faults(part, isolation, error)

    def _count_faults(self, part: Part, isolation: Isolation, error: BaseException) -> None:
        if not isolation.faulty or part.number in self._faulty:
            return
        self._faulty.add(part.number)
        if len(self._faulty) >= max(FAULTY_PARTS, FAULTY_SHARE * self._parts):
            raise PartFailed(
                f"rows of {len(self._faulty)} of {self._parts} parts failed, the last with {_reason(error)}; "
                "when mended, run with --retry-failed"
            ) from error

    def _note(self, part: Part, span: Span | None, outcome: str, text: str, trace: str = "") -> None:
        first, last = (0, part.rows) if span is None else (span.first, span.last)
        self._sink.attempt(Attempt(part.number, first, last, outcome, text, trace=trace))


def clear_marks(folder: Path) -> list[Attempt]:
    """Remove the marks that an earlier run left behind, and return the fits that it had begun."""
    attempts = []
    for mark in sorted(folder.glob("fit-*")):
        if mark.suffix:
            continue
        _, part, first, last, *_ = mark.name.split("-")
        trace = read_trace(mark)
        outcome = "slow" if trace else "died"
        attempts.append(Attempt(int(part), int(first), int(last), outcome, "the run was killed", trace=trace))
        remove_mark(mark)
    return attempts


def _seconds(task: _Task, estimate: Callable[[int, int], float]) -> float:
    """Return what a task takes; a cut is of no use without the fit of a part."""
    if not isinstance(task.work, Unit):
        return estimate(task.fits, task.kept)
    rows = min(task.work.part_rows)
    fits = min(rows, task.work.selected - task.work.reused)
    return task.work.selected * CUT_ROW_SECONDS + estimate(fits, rows - fits)


def _verdict(error: BaseException) -> tuple[str, str, str]:
    """Return the kind of a failure, its text, and where the task hung."""
    if isinstance(error, StartedBefore):
        text = "its worker took too long" if error.kind == "slow" else "its worker died"
        return error.kind, text, error.trace
    if isinstance(error, WorkerDied):
        return "died", str(error), ""
    return "raised", f"{type(error).__name__}: {error}", ""


def _describe(work: Unit | Part) -> str:
    if isinstance(work, Unit):
        return f"reading input rows {work.first_row} to {work.last_row - 1}"
    return f"part {work.number} of {work.rows} rows"


def _reason(error: BaseException) -> str:
    kind, text, _ = _verdict(error)
    if kind == "died":
        return "a worker that died; if memory ran out, raise compute.memory_per_worker"
    if kind == "slow":
        return "a row that takes too long; if the machine is slow, raise compute.row_seconds"
    return f"{text} (a bug: please report it, with what --debug shows)"
