"""A run from settings to a published generation."""

from __future__ import annotations

import traceback
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, nullcontext, suppress
from dataclasses import asdict, dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from time import monotonic
from typing import Any

from starkiln.engine import provenance
from starkiln.engine.bench import Bench, Gains, Laps, RunOptions
from starkiln.engine.board import Board, open_board
from starkiln.engine.build import Making, clear_away, find_build, plan_build, recover
from starkiln.engine.directory import check_name, hold, scratch_folder
from starkiln.engine.disk import disk_trouble
from starkiln.engine.earlier import published_facts
from starkiln.engine.events import EventLog, open_log
from starkiln.engine.executors import ClusterTrouble
from starkiln.engine.generations import Generations
from starkiln.engine.job import Stages, fitting_stages
from starkiln.engine.keys import inputs_key
from starkiln.engine.ledger import Ledger, open_ledger
from starkiln.engine.pace import Pace
from starkiln.engine.progress import Both, Progress, Silence
from starkiln.engine.records import Build
from starkiln.engine.stopping import TIME_UP, RunStopped, StopFlag
from starkiln.errors import EnvironmentTrouble, SettingsError, StarkilnError
from starkiln.settings import Settings, load_settings
from starkiln.tables.source import Source, open_source

SIGNALS_APART = 1.0
"""Seconds between the first and the last process to get a signal that is meant for all."""

__all__ = ["RunOptions", "RunResult", "run", "run_settings"]


@dataclass(frozen=True)
class RunResult:
    """How a run ended.

    Attributes
    ----------
    exit_code
        0 done, or nothing to do; 4 done, with rows set aside for faults or input files left out; otherwise that of
        the error (see `starkiln.errors`).
    counts
        Rows read, filtered, selected, in the catalogue, rejected (by reason too), and pending.
    path
        The published generation; None if the run came to no end.
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
    options: RunOptions | None = None,
    progress: Progress | None = None,
    stages: Stages | None = None,
    stop: StopFlag | None = None,
) -> RunResult:
    """Do a run, or what is left of it, and publish its catalogue as a new generation of the run directory.

    What a stopped run has done counts; of what is published, only new and changed rows are fitted; if nothing is new,
    nothing is done.

    Parameters
    ----------
    settings
        The settings.
    options
        What the run is asked for beside them.
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
    run_dir, name = settings.run.output, settings.run.name
    start = datetime.now(UTC)
    noting = StopFlag() if stop is None else nullcontext(stop)
    with noting as stop, disk_trouble(run_dir), hold(run_dir):
        check_name(run_dir, name)
        with open_log(run_dir, start) as log, open_board(run_dir, name, start) as board:
            one_run = _Run(settings, options or RunOptions(), progress or Silence(), stop, log, board, start)
            with _end_told(log, board):
                log.write("start", name=name, starkiln=provenance.versions()["starkiln"])
                result = one_run.do(stages or fitting_stages())
            log.write("end", exit_code=result.exit_code, message=result.message)
            board.end(result.exit_code, result.message)
            return result


@contextmanager
def _end_told(log: EventLog, board: Board) -> Iterator[None]:
    """Tell log and notice board of an error that ends the run."""
    try:
        yield
    except BaseException as error:
        foreseen = isinstance(error, StarkilnError) and error.__cause__ is None
        details = {} if foreseen else {"traceback": "".join(traceback.format_exception(error))}
        log.write("end", exit_code=_exit_code(error), message=_text(error), **details)
        board.end(_exit_code(error), _text(error))
        raise


@contextmanager
def _end_noted(ledger: Ledger) -> Iterator[None]:
    """Note in the ledger an error that ends the run, if it can still be written."""
    try:
        yield
    except BaseException as error:
        with suppress(StarkilnError):
            ledger.end_run(_exit_code(error), _text(error))
        raise


def _exit_code(error: BaseException) -> int:
    if isinstance(error, StarkilnError):
        return error.exit_code
    if isinstance(error, KeyboardInterrupt):
        return 130
    return EnvironmentTrouble.exit_code if isinstance(error, OSError) else 1


def _text(error: BaseException) -> str:
    return str(error) or type(error).__name__


class _Run:
    """One run, whose run directory is held."""

    def __init__(
        self,
        settings: Settings,
        options: RunOptions,
        progress: Progress,
        stop: StopFlag,
        log: EventLog,
        board: Board,
        start: datetime,
    ) -> None:
        self._settings = settings
        self._options = options
        self._progress = progress
        self._stop = stop
        self._log = log
        self._board = board
        self._start = start
        self._gains = Gains()
        self._source: Source | None = None
        self._making: Making | None = None

    def do(self, stages: Stages) -> RunResult:
        """Do the run; see `run_settings`."""
        run_dir = self._settings.run.output
        with open_ledger(run_dir) as ledger, _end_noted(ledger), self._stops_told(ledger):
            ledger.begin_run(self._start, provenance.versions())
            self._note_deadline()
            generations = Generations(run_dir)
            finished = recover(generations, ledger, self._settings.run.keep_generations, self._log)
            with scratch_folder(run_dir, self._settings.compute.scratch) as scratch:
                bench = self._bench(stages, ledger, generations, scratch)
                result = self._build(bench, finished)
                clear_away(bench)
            ledger.end_run(result.exit_code, result.message)
            return result

    def _note_deadline(self) -> None:
        left = self._stop.deadline - monotonic()
        if left < float("inf"):
            moment = datetime.now(UTC) + timedelta(seconds=left)
            self._board.note(deadline=moment.isoformat(timespec="seconds"))

    @contextmanager
    def _stops_told(self, ledger: Ledger) -> Iterator[None]:
        """Tell with a stop how far the run has come."""
        try:
            yield
        except Exception as error:
            if not isinstance(error, RunStopped):
                try:
                    # When many processes are signalled, workers that died are not the news; they may even die first.
                    self._stop.check_signal(within=SIGNALS_APART if isinstance(error, ClusterTrouble) else 0.0)
                except RunStopped:
                    pass
                else:
                    raise
            raise self._stopped(ledger) from None

    def _stopped(self, ledger: Ledger) -> StarkilnError:
        if not (self._stop.signalled or self._gains.files or self._gains.parts):
            return self._too_short(ledger)
        who, making = self._stop.requested() or TIME_UP, self._making
        if making is not None:
            how_far = f": {making.tally.parts} of {making.plan.parts} parts are done"
        elif self._source is not None and self._gains.files:
            how_far = f": {self._gains.files} of {len(self._source.files)} input files have been read"
        else:
            how_far = ""
        return RunStopped(f"stopped by {who}{how_far}; run again to go on")

    def _too_short(self, ledger: Ledger) -> SettingsError:
        if self._making is None:
            return SettingsError("--time-limit is too short to start, or to read a single input file; give more")
        rows = max(max(unit.part_rows) for unit in self._making.plan.units)
        seconds = Pace(ledger.fit_rates()).seconds_for(rows)
        return SettingsError(
            f"--time-limit is too short: a part of {rows} rows takes about {seconds:.0f} s, beside the time to start; "
            "give more, or lower compute.rows_per_part"
        )

    def _bench(self, stages: Stages, ledger: Ledger, generations: Generations, scratch: Path) -> Bench:
        settings, laps = self._settings, Laps()
        self._source = source = open_source(settings)
        model = stages.build_model(settings)
        laps.lap("open")
        self._stop.check()
        return Bench(
            settings=settings,
            options=self._options,
            stages=stages,
            source=source,
            model=model,
            hashes=provenance.hashes(settings, model),
            published=published_facts(settings.run.output),
            ledger=ledger,
            generations=generations,
            board=self._board,
            progress=Both(self._board, self._progress),
            stop=self._stop,
            log=self._log,
            scratch=scratch,
            start=self._start,
            laps=laps,
            gains=self._gains,
        )

    def _build(self, bench: Bench, finished: Build | None) -> RunResult:
        """Make the generation that is asked for, unless the published one is it."""
        published = bench.published
        self._board.note(published=published and published["number"])
        making = find_build(bench)
        if making is None and not _is_up_to_date(bench, finished):
            making = plan_build(bench)
        if making is None:
            assert published is not None
            code = published["exit_code"] if finished else 0
            return self._result(code, published, bench.generations.folder(published["number"]), done=False)
        self._making = making
        self._tell_plan(making)
        making.work()
        facts = making.close()
        bench.progress.begin("publishing", 0)
        path = bench.generations.publish(making.number, self._settings.run.keep_generations, making.set_state)
        self._log.write("publish", generation=path.name)
        self._board.note(published=making.number)
        return self._result(facts["exit_code"], facts, path, done=True)

    def _tell_plan(self, making: Making) -> None:
        plan, tally, rows = making.plan, making.tally, asdict(making.plan.rows)
        about = {"read": plan.read, "selected": plan.selected, "parts": plan.parts, "why": plan.why}
        self._log.write("plan", build=making.number, **about, **rows)
        told = {name: count for name, count in rows.items() if name != "without_id"}
        self._board.note(
            build=making.number,
            why=plan.why,
            rows=told | {"selected": plan.selected, "done": tally.rows, "set_aside": tally.set_aside},
            parts={"total": plan.parts, "done": tally.parts},
        )

    def _result(self, code: int, facts: Mapping[str, Any], path: Path, *, done: bool) -> RunResult:
        text = _summary(self._settings.run.output, facts)
        return RunResult(code, facts["counts"], path, text if done else f"nothing to do: {text}")


def _is_up_to_date(bench: Bench, finished: Build | None) -> bool:
    """Return whether the published generation is what is asked for, as far as footers can tell."""
    published, options = bench.published, bench.options
    if published is None:
        return False
    if published["hashes"].get("inputs") != inputs_key(bench.source, bench.settings, bench.hashes):
        return False
    if finished is not None and options.met_by(finished):
        return True
    rows = published["rows"]
    return not options.refit_all and not (options.retry_failed and rows["failed"] + rows["set_aside"])


def _summary(run_dir: Path, facts: Mapping[str, Any]) -> str:
    counts, rows, skipped = facts["counts"], facts["rows"], facts["input"]["skipped"]
    text = f"{counts['catalogue']} of {counts['selected']} stars are in {run_dir / 'catalogue'}"
    if counts["rejected"]:
        text += f", {counts['rejected']} rejected rows in {run_dir / 'rejected'}"
    if rows["kept"]:
        text += f"; {rows['new']} new, {rows['changed']} changed, {rows['kept']} kept, {rows['gone']} gone"
    if rows["set_aside"]:
        text += f"; {rows['set_aside']} rows were set aside for faults: see `kind` in {run_dir / 'rejected'}"
    if skipped:
        text += f"; {len(skipped)} unusable input files left out, named in {run_dir}/current/run.json"
    return text
