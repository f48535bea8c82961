"""A generation in the making: found where an earlier run left it, or planned anew; its parts done; its files packed."""

from __future__ import annotations

import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import partial
from pathlib import Path
from typing import Any

from starkiln.engine.bench import Bench
from starkiln.engine.closing import close_generation
from starkiln.engine.disk import remove_folder, sweep
from starkiln.engine.earlier import find_earlier
from starkiln.engine.events import EventLog
from starkiln.engine.executors import SMALL_RUN_ROWS, Executor, Finished, SerialExecutor, open_cluster
from starkiln.engine.facts import audit_source, generation_facts, write_facts
from starkiln.engine.foreign import open_foreign
from starkiln.engine.generations import Generations
from starkiln.engine.identity import make_identity
from starkiln.engine.job import Job, SavedJob
from starkiln.engine.keys import ROWS_VERSION, inputs_key, plan_key
from starkiln.engine.ledger import Ledger
from starkiln.engine.pace import Limits, Pace
from starkiln.engine.plan import load_plan, make_plan, rows_per_part, save_plan
from starkiln.engine.provenance import digest
from starkiln.engine.records import Build, DonePart, Guard, Plan, PlannedFile
from starkiln.engine.resources import worker_count
from starkiln.engine.stopping import RunStopped, StopFlag
from starkiln.engine.store import PartStore, make_part_folders, sound_parts
from starkiln.engine.tally import Tally
from starkiln.engine.work import Work, clear_marks
from starkiln.settings import Settings

TOLD_BEFORE_SECONDS = 0.5

START_SECONDS = 5.0
"""With less time than that workers are not started: they could do no part any more."""

KEPT_ROWS_LIKE_ONE_FITTED = 200
"""So many rows can be taken over while one is fitted."""


def recover(generations: Generations, ledger: Ledger, keep: int, log: EventLog) -> Build | None:
    """Bring a run directory into order after a run that was stopped at any instant.

    Parameters
    ----------
    generations
        Its generations.
    ledger
        Its ledger.
    keep
        How many generations to keep.
    log
        Is told what was found.

    Returns
    -------
    The build whose publication was finished here, if there was one.
    """
    finished = None
    for build in ledger.builds():
        if build.state == "publishing" and generations.folder(build.number).is_dir():
            generations.finish(build.number, keep, partial(ledger.set_state, build.number))
            log.write("recover", build=build.number, state="published")
            finished = build
        elif build.state == "publishing":
            ledger.set_state(build.number, "building")
            log.write("recover", build=build.number, state="building")
    complete, unfinished = set(generations.numbers()), set(generations.partials())
    for build in ledger.builds():
        if build.number in complete:
            if build.state != "published":
                ledger.set_state(build.number, "published")
        elif build.state == "published" or build.number not in unfinished:
            ledger.drop_build(build.number)
    generations.sweep({build.number for build in ledger.builds() if build.state != "published"})
    return finished


def find_build(bench: Bench) -> Making | None:
    """Return the build that an earlier run left and that this one goes on with, None if there is none.

    One that no longer fits the settings and the input is kept as earlier results.
    """
    wanted = plan_key(bench.source, bench.settings, bench.hashes, bench.published)
    for build in bench.ledger.builds():
        if build.state != "building":
            continue
        plan = None
        if build.plan_key == wanted and bench.options.met_by(build):
            plan = load_plan(bench.generations.partial(build.number) / "plan", build.plan_sha256)
        if plan is not None:
            making = Making(bench, build, plan)
            if not making.is_too_coarse():
                bench.log.write("resume", build=build.number, parts=plan.parts, done=making.tally.parts)
                return making
        bench.ledger.set_state(build.number, "earlier")
    return None


def plan_build(bench: Bench) -> Making | None:
    """Plan a new generation, and write the plan down; None if it would be the published one again."""
    ledger, generations, options = bench.ledger, bench.generations, bench.options
    fit_key = bench.hashes["fit_key"]
    left = [
        (build, ledger.done_parts(build.number))
        for build in ledger.builds()
        if build.state == "earlier" and build.fit_key == fit_key
    ]
    number = max([ledger.next_number(), *(known + 1 for known in generations.numbers() + generations.partials())])
    folder = generations.begin(number) / "plan"
    plan = _make_plan(bench, folder, left)
    bench.laps.lap("plan")
    if _says_nothing_new(bench, plan):
        generations.remove_partial(number)
        return None
    build = Build(
        number=number,
        plan_key=plan_key(bench.source, bench.settings, bench.hashes, bench.published),
        fit_key=fit_key,
        refit_all=options.refit_all,
        retry_failed=options.retry_failed,
        plan_sha256=save_plan(plan, folder),
        parts=plan.parts,
        state="building",
    )
    ledger.begin_build(build)
    used = {file.path for file in plan.earlier}
    for other in ledger.builds():
        folder = generations.partial(other.number)
        if other.state == "earlier" and not any(path.is_relative_to(folder) for path in used):
            drop_build(bench, other.number)
    return Making(bench, build, plan)


def drop_build(bench: Bench, number: int) -> None:
    """Forget a build and remove its folder."""
    bench.ledger.drop_build(number)
    bench.generations.remove_partial(number)


def clear_away(bench: Bench) -> None:
    """Remove what was only needed to build: partial generations, and the checkpoints of planning."""
    for build in bench.ledger.builds():
        if build.state == "published":
            bench.generations.remove_partial(build.number)
        else:
            drop_build(bench, build.number)
    bench.ledger.forget_planning()
    remove_folder(planning_folder(bench.settings))


def planning_folder(settings: Settings) -> Path:
    """Return where the hashes of input files are kept until a generation is published."""
    return settings.run.output / "planning"


def _make_plan(bench: Bench, folder: Path, left: list[tuple[Build, dict[int, DonePart]]]) -> Plan:
    settings, source, options = bench.settings, bench.source, bench.options
    earlier = find_earlier(
        settings.run.output,
        left,
        settings,
        bench.hashes,
        source,
        refit_all=options.refit_all,
        check=bench.stop.check,
    )
    planned = 0

    def file_planned(file: PlannedFile, fresh: bool) -> None:
        nonlocal planned
        planned += 1
        bench.gains.files += fresh
        bench.board.note(files={"planned": planned})

    def between(rows: int) -> None:
        bench.progress.advance(rows)
        bench.stop.check()

    bench.board.note(files={"total": len(source.files)})
    bench.progress.begin("planning", source.rows)
    return make_plan(
        source,
        settings,
        worker_count(settings),
        folder=folder,
        planning=planning_folder(settings),
        scratch=bench.scratch,
        checkpoints=bench.ledger,
        earlier=earlier,
        retry_failed=options.retry_failed,
        between=between,
        may_begin=bench.stop.has_time_for,
        on_file=file_planned,
    )


def output_digest(settings: Settings) -> str:
    """Return a digest of the settings that decide what the files of a generation look like."""
    return digest([settings.output.model_dump(mode="json"), settings.input.id, settings.input.carry])


def _says_nothing_new(bench: Bench, plan: Plan) -> bool:
    """Return whether the published generation is what the plan would give."""
    if bench.published is None or bench.options.refit_all or plan.rows.retried:
        return False
    ours = {"fit_key": bench.hashes["fit_key"], "content": plan.content, "output": output_digest(bench.settings)}
    ours["rows"] = ROWS_VERSION
    return all(bench.published["hashes"].get(name) == value for name, value in ours.items())


class Making:
    """A generation whose plan stands: what is done of it, and the rest of its way.

    Parameters
    ----------
    bench
        What to work with.
    build, plan
        What is to be made.
    """

    def __init__(self, bench: Bench, build: Build, plan: Plan) -> None:
        self.build = build
        self.plan = plan
        self._bench = bench
        self.number = build.number
        self.partial = bench.generations.partial(build.number)
        self._parts = self.partial / "parts"
        self.done = sound_parts(self._parts, bench.ledger, build.number, bench.log, bench.stop.check)
        self.tally = Tally.of(self.done.values(), bench.ledger.set_aside(build.number))
        self._fitted_before = self.tally.fitted
        self._workers = 0

    def set_state(self, state: str) -> None:
        """Note in the ledger how far the build has come."""
        self._bench.ledger.set_state(self.number, state)

    def is_too_coarse(self) -> bool:
        """Return whether no part is done yet and smaller parts are asked for than those planned."""
        compute, plan = self._bench.settings.compute, self.plan
        most = rows_per_part(plan.selected, self._fits(), worker_count(self._bench.settings), compute.rows_per_part)
        return not self.done and max(max(unit.part_rows) for unit in plan.units) > most

    def _is_small(self) -> bool:
        kept = self.plan.selected - self._fits()
        return self._fits() + kept / KEPT_ROWS_LIKE_ONE_FITTED <= SMALL_RUN_ROWS

    def _fits(self) -> int:
        return self.plan.selected - sum(unit.reused for unit in self.plan.units)

    def work(self) -> None:
        """Do every part that is not done.

        Raises
        ------
        RunStopped
            If a signal comes or the time is up before.
        """
        bench, left = self._bench, self.plan.parts - len(self.done)
        if not left:
            return
        make_part_folders(self._parts, bool(bench.settings.sampling.keep_draws))
        sweep(self._parts)
        marks = self.partial / "started"
        cut_off = clear_marks(marks)
        for attempt in cut_off:
            bench.ledger.add_attempt(self.number, attempt)
        with self._executor(left, safely=bool(cut_off)) as (executor, job):
            self._workers = executor.workers
            bench.board.note(workers=executor.workers)
            bench.progress.begin("fitting", self.plan.selected - self.tally.rows)
            try:
                all_done = self._work_of(job, executor, marks).run()
            finally:
                bench.laps.lap("work")
            if not all_done:
                raise RunStopped("stopped before all parts were done; run again to go on")

    def _work_of(self, job: Job | SavedJob, executor: Executor, marks: Path) -> Work:
        bench = self._bench
        settings = bench.settings
        return Work(
            self.plan,
            job,
            executor,
            done=frozenset(self.done),
            set_aside=bench.ledger.set_aside(self.number),
            pace=Pace(bench.ledger.fit_rates()),
            limits=Limits(settings.compute.row_seconds, settings.sampling),
            stop=bench.stop,
            sink=PartStore(self._parts, self.number, self.tally, bench),
            marks=marks,
        )

    @contextmanager
    def _executor(self, left: int, *, safely: bool) -> Iterator[tuple[Executor, Job | SavedJob]]:
        """Give what does the tasks, and the job as it takes it.

        A small run needs no other process, unless an earlier one was cut off in the middle of a task: a task that
        hangs ends its process.
        """
        bench, options = self._bench, self._bench.options
        job = Job(
            source=bench.source,
            settings=bench.settings,
            stages=bench.stages,
            model=bench.model,
            stamps=self.plan.stamps,
            scratch=bench.scratch,
            parts=self._parts,
            earlier=self.plan.earlier,
            notes=self.partial / "plan" / "notes",
        )
        if options.scheduler or options.scheduler_file:
            identity = make_identity(self.partial)
            with open_foreign(options.scheduler, options.scheduler_file, identity, bench.log) as foreign:
                bench.laps.lap("start workers")
                yield foreign, job.save(identity)
        elif self._is_small() and not safely:
            self._warm_up()
            yield _InterruptedExecutor(bench.stop), job
        else:
            self._warm_up()
            self._check_time_to_start()
            workers = min(worker_count(bench.settings), left)
            with open_cluster(workers, bench.settings.compute.memory_per_worker_bytes, bench.scratch) as cluster:
                bench.laps.lap("start workers")
                yield cluster, job.save()

    def _check_time_to_start(self) -> None:
        # Starting them cannot be interrupted.
        if not self._bench.stop.has_time_for(START_SECONDS):
            raise RunStopped("stopped before workers were started; run again to go on")

    def _warm_up(self) -> None:
        """Compile what the stages need, so that no task takes long for it."""
        bench = self._bench
        bench.progress.begin("warming up", 0)
        with bench.stop.at_once():
            bench.stages.prepare(bench.settings, bench.model)
            bench.stages.warm_up(bench.settings, bench.model)
        bench.laps.lap("warm up")

    def close(self) -> dict[str, Any]:
        """Pack the parts into the files of the generation, and return its run.json, which is written last."""
        bench, plan = self._bench, self.plan
        settings, result = bench.settings, self.partial / "result"
        # When all parts are done at the start of a run, packing is all it can do, however little time it has.
        check = bench.stop.check if bench.gains.parts else bench.stop.check_signal
        bench.progress.begin("packing", 0)
        files = close_generation(plan, settings, bench.source.schema, self._parts, result, bench.scratch, check)
        bench.laps.lap("pack")
        published = bench.published
        folder = bench.generations.folder(published["number"]) if published else None
        audit = audit_source(self.tally, plan, published, folder)
        facts = generation_facts(
            settings=settings,
            source=bench.source,
            model=bench.model,
            plan=plan,
            tally=self.tally,
            audit=audit,
            hashes=self._hashes(),
            workers=self._workers,
            start=bench.start,
            fitted_now=self.tally.fitted - self._fitted_before,
            wall=bench.laps.seconds,
            files=files,
            folder=result,
        )
        write_facts(result, settings, facts, audit)
        check()
        return facts

    def _hashes(self) -> dict[str, Any]:
        bench = self._bench
        return {
            **bench.hashes,
            "rows": ROWS_VERSION,
            "inputs": inputs_key(bench.source, bench.settings, bench.hashes),
            "content": self.plan.content,
            "output": output_digest(bench.settings),
        }


class _InterruptedExecutor(SerialExecutor):
    """Runs tasks in this process; a signal, or the end of the time, interrupts the one that runs.

    One that hangs ends this process, and then says so.
    """

    def __init__(self, stop: StopFlag) -> None:
        super().__init__()
        self._stop = stop

    def submit(self, key: str, function: Callable[..., Any], *args: Any, urgent: bool = False) -> None:
        """Take a task; urgent ones go before the others."""
        super().submit(key, _hanging_told, function, *args, urgent=urgent)

    def next_finished(self) -> Finished | None:
        """Run the next task."""
        with self._stop.at_once():
            return super().next_finished()


def _hanging_told(function: Callable[..., Any], *args: Any) -> Any:
    """Do a task, and tell shortly before its guard ends this process."""
    limits = [argument.limit_s for argument in args if isinstance(argument, Guard)]
    told = threading.Timer(max(min(limits, default=0.0) - TOLD_BEFORE_SECONDS, 0.0), _tell_hanging)
    if limits:
        told.daemon = True
        told.start()
    try:
        return function(*args)
    finally:
        told.cancel()


def _tell_hanging() -> None:
    print(
        "starkiln: a row takes too long, and ends this process; run again: worker processes will set it aside",
        file=sys.stderr,
        flush=True,
    )
