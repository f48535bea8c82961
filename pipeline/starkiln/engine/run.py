"""A run from settings to a published generation."""

from __future__ import annotations

import json
import time
import traceback
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager, nullcontext
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from starkiln.engine import provenance
from starkiln.engine.closing import close_generation
from starkiln.engine.directory import check_name, hold, scratch_folder
from starkiln.engine.disk import disk_trouble
from starkiln.engine.events import EventLog, open_log
from starkiln.engine.executors import SMALL_RUN_ROWS, ClusterTrouble, Executor, SerialExecutor, open_cluster
from starkiln.engine.generations import Generations
from starkiln.engine.job import Job, SavedJob, Stages, fitting_stages
from starkiln.engine.plan import Plan, make_plan
from starkiln.engine.progress import Progress, Silence
from starkiln.engine.resources import peak_memory, worker_count
from starkiln.engine.stopping import StopFlag
from starkiln.engine.tasks import Cut, Fitted
from starkiln.engine.work import Work
from starkiln.errors import EnvironmentTrouble, StarkilnError
from starkiln.settings import Settings, dump_toml, load_settings
from starkiln.stages.audit import together, zero_point_audit
from starkiln.tables.source import Source, open_source
from starkiln.tables.write import PackedFile

SIGNALS_APART = 1.0
"""Seconds between the first and the last process to get a signal that is meant for all."""


@dataclass(frozen=True)
class RunResult:
    """How a run ended.

    Attributes
    ----------
    exit_code
        0 done; 4 done, with input files left out; otherwise that of the error (see `starkiln.errors`).
    counts
        Rows read, filtered, selected, in the catalogue, rejected (by reason too), and pending.
    path
        The published generation, or None if nothing was published.
    message
        The error, or one line on what was done.
    """

    exit_code: int
    counts: dict[str, Any]
    path: Path | None
    message: str


def run(path: str | Path) -> RunResult:
    """Do the run that a settings file describes, and return how it ended; the process goes on.

    What a user can cause is told by the result; an error that is a bug is raised. Workers are new processes that
    import the calling script, so a script calls this below ``if __name__ == "__main__":``.

    Parameters
    ----------
    path
        A TOML settings file.
    """
    try:
        return run_settings(load_settings(path))
    except StarkilnError as error:
        return RunResult(error.exit_code, {}, None, str(error))


def run_settings(
    settings: Settings,
    *,
    progress: Progress | None = None,
    stages: Stages | None = None,
    stop: StopFlag | None = None,
) -> RunResult:
    """Do a run, and publish its catalogue as a new generation of the run directory.

    Parameters
    ----------
    settings
        The settings.
    progress
        Is told how far the run has come.
    stages
        What is done to the rows; fits stars unless given.
    stop
        Notes signals already; without one, signals are noted from here on.

    Raises
    ------
    StarkilnError
        If the run cannot be done; nothing is published then.
    """
    run_dir = settings.run.output
    start = datetime.now(UTC)
    noting = StopFlag() if stop is None else nullcontext(stop)
    with noting as stop, disk_trouble(run_dir), hold(run_dir):
        check_name(run_dir, settings.run.name)
        with open_log(run_dir, start) as log, _end_logged(log):
            log.write("start", name=settings.run.name, starkiln=provenance.versions()["starkiln"])
            one_run = _Run(settings, stages or fitting_stages(), progress or Silence(), stop, log, start)
            try:
                result = one_run.do()
            except Exception as error:
                # When many processes are signalled, workers that died are not the news; they may even die first.
                stop.check(within=SIGNALS_APART if isinstance(error, ClusterTrouble) else 0.0)
                raise
            log.write("end", exit_code=result.exit_code, message=result.message)
            return result


@contextmanager
def _end_logged(log: EventLog) -> Iterator[None]:
    try:
        yield
    except BaseException as error:
        foreseen = isinstance(error, StarkilnError) and error.__cause__ is None
        details = {} if foreseen else {"traceback": "".join(traceback.format_exception(error))}
        log.write("end", exit_code=_exit_code(error), message=str(error) or type(error).__name__, **details)
        raise


def _exit_code(error: BaseException) -> int:
    if isinstance(error, StarkilnError):
        return error.exit_code
    if isinstance(error, KeyboardInterrupt):
        return 130
    return EnvironmentTrouble.exit_code if isinstance(error, OSError) else 1


@dataclass
class _Tally:
    """What the finished parts add up to."""

    catalogue: int = 0
    rejected: Counter[str] = field(default_factory=Counter)
    flags: Counter[str] = field(default_factory=Counter)
    audit: Any = None
    seconds: dict[str, float] = field(default_factory=dict)
    worker_peak: int = 0

    def add_cut(self, cut: Cut) -> None:
        self._add_seconds({"cut": cut.seconds})
        self.worker_peak = max(self.worker_peak, cut.peak_memory)

    def add_part(self, fitted: Fitted) -> None:
        self.catalogue += fitted.written["catalogue"].rows
        self.rejected.update(fitted.reasons)
        self.flags.update(fitted.flags)
        self.audit = together(self.audit, fitted.audit)
        self._add_seconds(fitted.seconds)
        self.worker_peak = max(self.worker_peak, fitted.peak_memory)

    def _add_seconds(self, seconds: dict[str, float]) -> None:
        for stage, spent in seconds.items():
            self.seconds[stage] = self.seconds.get(stage, 0.0) + spent

    def counts(self, plan: Plan) -> dict[str, Any]:
        """Return the counts of the run, which must add up."""
        rejected = self.rejected.total()
        counts = {
            "read": plan.read,
            "filtered": plan.read - plan.selected,
            "selected": plan.selected,
            "catalogue": self.catalogue,
            "rejected": rejected,
            "rejected_by_reason": dict(sorted(self.rejected.items())),
            "pending": 0,
        }
        if plan.selected != self.catalogue + rejected:
            raise RuntimeError(f"rows do not add up: {counts}")
        return counts


class _Run:
    """One run, whose run directory is held."""

    def __init__(
        self,
        settings: Settings,
        stages: Stages,
        progress: Progress,
        stop: StopFlag,
        log: EventLog,
        start: datetime,
    ) -> None:
        self._settings = settings
        self._stages = stages
        self._progress = progress
        self._stop = stop
        self._log = log
        self._start = start
        self._clock = time.perf_counter()
        self._tally = _Tally()
        self._wall: dict[str, float] = {}

    def do(self) -> RunResult:
        settings = self._settings
        source = open_source(settings)
        model = self._stages.build_model(settings)
        self._lap("open")
        self._stop.check()
        generations = Generations(settings.run.output)
        with scratch_folder(settings.run.output, settings.compute.scratch) as scratch:
            workers = worker_count(settings)
            self._progress.begin("planning", sum(file.rows for file in source.files))
            plan = make_plan(source, settings, workers, scratch, self._between_batches)
            self._lap("plan")
            self._log.write(
                "plan", read=plan.read, selected=plan.selected, duplicates=plan.duplicates, parts=plan.parts
            )
            partial = generations.begin()
            try:
                workers = self._work(source, model, plan, workers, scratch, partial)
                files = close_generation(plan, settings, source.schema, partial, scratch, self._stop.check)
                self._lap("pack")
                facts = self._facts(source, model, plan, workers, partial, files)
                (partial / "settings.toml").write_text(dump_toml(settings))
                (partial / "run.json").write_text(json.dumps(facts, indent=2) + "\n")
                self._stop.check()
                published = generations.publish(partial, settings.run.keep_generations)
            finally:
                generations.discard(partial)
        self._log.write("publish", generation=published.name)
        counts, code = facts["counts"], facts["exit_code"]
        return RunResult(code, counts, published, _summary(settings.run.output, counts, source))

    def _work(self, source: Source, model: Any, plan: Plan, workers: int, scratch: Path, partial: Path) -> int:
        """Do every part, and return how many workers did."""
        parts = partial / "parts"
        tables = ["catalogue", "rejected", "index"] + ["draws"] * bool(self._settings.sampling.keep_draws)
        for table in tables:
            (parts / table).mkdir(parents=True)
        job = Job(
            source=source,
            settings=self._settings,
            stages=self._stages,
            model=model,
            stamps=plan.stamps,
            scratch=scratch,
            parts=parts,
        )
        if plan.selected <= SMALL_RUN_ROWS:
            with self._stop.at_once():
                return self._do_parts(plan, job, parts, SerialExecutor())
        self._progress.begin("warming up", 0)
        with self._stop.at_once():
            self._stages.warm_up(self._settings, model)
        self._lap("warm up")
        memory = self._settings.compute.memory_per_worker_bytes
        with open_cluster(min(workers, plan.parts), memory, scratch) as executor:
            self._lap("start workers")
            return self._do_parts(plan, job.save(), parts, executor)

    def _do_parts(self, plan: Plan, job: Job | SavedJob, parts: Path, executor: Executor) -> int:
        self._progress.begin("fitting", plan.selected)
        Work(plan, job, parts, executor, self._stop.check).run(self._tally.add_cut, self._part_done)
        self._lap("work")
        return executor.workers

    def _between_batches(self, rows: int) -> None:
        self._progress.advance(rows)
        self._stop.check()

    def _part_done(self, fitted: Fitted) -> None:
        self._tally.add_part(fitted)
        self._progress.advance(fitted.rows)
        digests = {name: file.sha256 for name, file in fitted.written.items()}
        self._log.write("part", number=fitted.number, rows=fitted.rows, sha256=digests)

    def _lap(self, step: str) -> None:
        now = time.perf_counter()
        self._wall[step], self._clock = now - self._clock, now

    def _facts(
        self,
        source: Source,
        model: Any,
        plan: Plan,
        workers: int,
        partial: Path,
        files: dict[str, list[PackedFile]],
    ) -> dict[str, Any]:
        """Return the contents of run.json."""
        counts = self._tally.counts(plan)
        wall = {step: round(seconds, 3) for step, seconds in self._wall.items()}
        stages = {stage: round(seconds, 3) for stage, seconds in sorted(self._tally.seconds.items())}
        return {
            "name": self._settings.run.name,
            "exit_code": 4 if source.skipped else 0,
            "start": self._start.isoformat(timespec="milliseconds"),
            "end": datetime.now(UTC).isoformat(timespec="milliseconds"),
            "counts": counts,
            "duplicates": plan.duplicates,
            "flags": dict(sorted(self._tally.flags.items())),
            "zero_point_audit": zero_point_audit(self._tally.audit, model, self._settings),
            "workers": workers,
            "parts": plan.parts,
            "seconds": {"wall": wall, "summed_over_workers": stages},
            "stars_per_second": round(plan.selected / self._wall["work"], 2),
            "peak_memory_bytes": {"driver": peak_memory(), "worker": self._tally.worker_peak},
            "versions": provenance.versions(),
            "platform": provenance.platform_facts(),
            "hashes": provenance.hashes(self._settings, model),
            "passbands": provenance.passband_sources(model),
            "input": provenance.input_facts(source, plan, self._settings),
            "files": {
                file.path.relative_to(partial).as_posix(): {"rows": file.rows, "sha256": file.sha256}
                for packed in files.values()
                for file in packed
            },
        }


def _summary(run_dir: Path, counts: dict[str, Any], source: Source) -> str:
    text = f"{counts['catalogue']} of {counts['selected']} stars are in {run_dir / 'catalogue'}"
    if counts["rejected"]:
        text += f", {counts['rejected']} rejected rows in {run_dir / 'rejected'}"
    if source.skipped:
        text += f"; {len(source.skipped)} unusable input files left out, named in {run_dir}/current/run.json"
    return text
