import itertools
import math

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from fake_stages import lose_a_row, pass_through, raise_always, raise_at_failing_id, raise_disk_full, raise_once
from part_runs import plan_run
from small_survey import stars
from starkiln.engine.closing import part_path
from starkiln.engine.executors import ClusterTrouble, Finished, SerialExecutor, WorkerDied
from starkiln.engine.pace import Limits, Pace
from starkiln.engine.records import Attempt, SetAside, StartedBefore, WorkerDisagrees
from starkiln.engine.tasks import assemble_part, cut_unit, fit_rows
from starkiln.engine.work import PartFailed, Work, clear_marks
from starkiln.errors import EnvironmentTrouble, InputError
from starkiln.tables.write import publish


class Watched(SerialExecutor):
    """Notes the tasks, the most held at once, and the cut files on disk after each task."""

    workers = 3

    def __init__(self, scratch):
        super().__init__()
        self.scratch, self.held, self.most_held, self.most_cut = scratch, 0, 0, 0
        self.tasks, self.refused, self.abandoned = {}, [], False

    def submit(self, key, function, *args, urgent=False):
        super().submit(key, function, *args, urgent=urgent)
        self.tasks[key] = (function, args)
        self.held += 1
        self.most_held = max(self.held, self.most_held)

    def next_finished(self):
        finished = super().next_finished()
        self.held -= 1
        self.most_cut = max(self.most_cut, len(list(self.scratch.glob("*.arrow"))))
        error = self.error_of(finished.key, *self.tasks[finished.key])
        return finished if error is None else Finished(finished.key, None, error)

    def error_of(self, key, function, args):
        return None

    def refuse(self, address):
        self.refused.append(address)

    def abandon(self):
        self.abandoned = True

    def spans(self):
        """The spans that were tried, in the order they were submitted."""
        return [(args[1].number, args[2], args[3]) for function, args in self.tasks.values() if function is fit_rows]


class Faulty(Watched):
    """Fails the fits of row 3 of part 1, so many times, and the rest of the errors, of any task, once each."""

    def __init__(self, scratch, *errors, row=None, times=math.inf, function=None):
        super().__init__(scratch)
        self.errors, self.row, self.times, self.function = list(errors), row, times, function

    def error_of(self, key, function, args):
        if self.function is not None and function is not self.function:
            return None
        if self.row is not None:
            hit = function is fit_rows and args[1].number == 1 and args[2] <= 3 < args[3]
            self.times -= hit
            return self.row if hit and self.times >= 0 else None
        return self.errors.pop(0) if self.errors else None


class Sink:
    """Puts parts in place, and remembers what it was told."""

    def __init__(self, parts):
        self.parts, self.cuts, self.done, self.attempts, self.aside = parts, [], [], [], {}

    def cut_done(self, cut):
        self.cuts.append(cut)

    def part_done(self, fitted):
        for table, written in fitted.written.items():
            publish(written, part_path(self.parts, table, fitted.number))
        self.done.append(fitted)

    def attempt(self, attempt):
        self.attempts.append(attempt)

    def row_set_aside(self, part, row):
        self.aside.setdefault(part, []).append(row)


class Clock:
    """A Stop whose time is told by hand, or by the tasks that are asked about."""

    def __init__(self, seconds=math.inf, grace=math.inf):
        self.seconds, self.grace, self.signal, self.asked = seconds, grace, None, []

    def check(self, within=0.0):
        raise AssertionError("Work asks whether there is time")

    def requested(self):
        return self.signal

    def has_time_for(self, seconds):
        self.asked.append(seconds)
        return self.signal is None and seconds < self.seconds

    def grace_left(self):
        return self.grace if self.signal else math.inf


class Done:
    def __init__(self, sink, executor, folder, complete):
        self.sink, self.executor, self.folder, self.complete = sink, executor, folder, complete

    def rows(self, table):
        paths = sorted((self.folder / "parts" / table).iterdir())
        return pa.concat_tables([pq.ParquetFile(path).read() for path in paths]).to_pylist()


def do_work(
    folder,
    process=pass_through,
    *,
    files=5,
    rows=20,
    executor=Watched,
    stop=None,
    done=(),
    set_aside=None,
    pace=None,
    sink=Sink,
    part_rows=10,
):
    """Do the parts of a small table, of which each file is a unit."""
    tables = folder / "input"
    tables.mkdir(parents=True)
    for number in range(files):
        pq.write_table(stars(rows, 1 + rows * number), tables / f"{number:03d}.parquet")
    planned = plan_run(folder / "run", tables, process, part_rows=part_rows)
    executor = executor(planned.job.scratch)
    sink = sink(planned.job.parts)
    work = Work(
        planned.plan,
        planned.job,
        executor,
        done=frozenset(done),
        set_aside=set_aside or {},
        pace=pace or Pace(),
        limits=Limits(45.0, planned.job.settings.sampling),
        stop=stop or Clock(),
        sink=sink,
        marks=folder / "run" / "marks",
    )
    return Done(sink, executor, folder / "run", work.run())


def test_every_part_is_handed_over_and_nothing_is_left(tmp_path):
    run = do_work(tmp_path)
    assert run.complete
    assert len(run.sink.cuts) == 5
    assert [len(run.rows(table)) for table in ("catalogue", "rejected", "index")] == [100, 0, 100]
    assert sorted(run.sink.attempts, key=lambda attempt: attempt.part) == [
        Attempt(part, 0, 10, "done", host=run.sink.done[0].host) for part in range(10)
    ]
    assert not list((run.folder / "scratch").glob("*.arrow"))
    assert not list((run.folder / "marks").iterdir())


def test_few_tasks_and_few_cut_files_at_a_time(tmp_path):
    executor = do_work(tmp_path, files=30).executor
    assert executor.most_held <= 2 * executor.workers
    assert executor.most_cut <= 4 * executor.workers


def test_parts_that_are_done_are_not_cut_or_fitted(tmp_path):
    run = do_work(tmp_path, done=[0, 2, 3, 5])
    assert run.complete
    assert {part for part, _, _ in run.executor.spans()} == {1, 4, 6, 7, 8, 9}
    cut = {args[1].number: args[2] for function, args in run.executor.tasks.values() if function is cut_unit}
    assert cut == {0: {1}, 2: {4}, 3: {6, 7}, 4: {8, 9}}


def test_an_error_that_passes_costs_nothing(tmp_path):
    run = do_work(tmp_path, raise_once)
    assert (tmp_path / "seen").exists()
    assert len(run.rows("catalogue")) == 100
    assert [attempt.outcome for attempt in run.sink.attempts if attempt.part == 1] == ["raised", "done"]


def test_a_row_at_fault_is_set_aside_and_its_neighbours_are_as_ever(tmp_path):
    run, calm = do_work(tmp_path / "a", raise_at_failing_id), do_work(tmp_path / "b")
    assert run.complete
    assert run.sink.aside == {1: [SetAside(2, "stage raised", "ArithmeticError: the stage has a bug")]}
    assert run.rows("catalogue") == [row for row in calm.rows("catalogue") if row["star_id"] != 13]
    (rejected,) = run.rows("rejected")
    assert (rejected["star_id"], rejected["kind"], rejected["reason"]) == (13, "fault", "stage raised")
    index = {row["id_hash"]: row for row in run.rows("index")}
    assert len(index) == 100
    assert sum(row["file"] == "rejected" for row in index.values()) == 1
    assert not list((run.folder / "parts").rglob(".piece*"))


def test_rows_known_to_be_at_fault_are_not_tried_again(tmp_path):
    known = {1: (SetAside(2, "stage raised", "no"),)}
    run = do_work(tmp_path, raise_at_failing_id, set_aside=known)
    assert run.complete
    assert run.sink.aside == {}
    assert [span for span in run.executor.spans() if span[0] == 1] == [(1, 0, 2), (1, 3, 10)]
    assert [row["star_id"] for row in run.rows("rejected")] == [13]


@pytest.mark.parametrize(
    ("error", "reason", "tries"),
    [
        (StartedBefore("slow", "where it hung"), "took too long", [(0, 10), (3, 4), (3, 4)]),
        (StartedBefore("died"), "worker died", [(0, 10)] * 2 + [(3, 4)] * 4),
    ],
)
def test_a_task_that_was_cut_off_is_told_apart(tmp_path, error, reason, tries):
    run = do_work(tmp_path, executor=lambda scratch: Faulty(scratch, row=error))
    assert run.sink.aside[1][0].reason == reason
    failed = [attempt for attempt in run.sink.attempts if attempt.outcome == error.kind]
    assert [(attempt.first, attempt.last) for attempt in failed] == tries
    assert {attempt.trace for attempt in failed} == {error.trace}


def test_a_worker_that_died_before_a_task_began_blames_nobody(tmp_path):
    error = WorkerDied("its worker died 4 times")
    run = do_work(tmp_path, executor=lambda scratch: Faulty(scratch, *[error] * 2, row=error, times=9))
    assert run.complete
    assert {attempt.outcome for attempt in run.sink.attempts} == {"done"}


def test_a_worker_that_dies_again_and_again_before_it_begins_is_trouble_with_a_remedy(tmp_path):
    error = WorkerDied("its worker died 4 times")
    with pytest.raises(EnvironmentTrouble, match=r"part 1 .*worker died 4 times; .*compute\.memory_per_worker"):
        do_work(tmp_path, executor=lambda scratch: Faulty(scratch, row=error))


def test_a_worker_that_died_when_a_task_had_begun_counts(tmp_path):
    class Marked(Faulty):
        def error_of(self, key, function, args):
            if (error := super().error_of(key, function, args)) is not None:
                args[4].mark.touch()
            return error

    error = WorkerDied("its worker died 4 times")
    run = do_work(tmp_path, executor=lambda scratch: Marked(scratch, row=error))
    assert [row.reason for row in run.sink.aside[1]] == ["worker died"]
    assert not list((run.folder / "marks").iterdir())


def test_a_worker_that_disagrees_is_refused_and_its_task_done_elsewhere(tmp_path):
    error = WorkerDisagrees("tcp://a", "another version")
    run = do_work(tmp_path, executor=lambda scratch: Faulty(scratch, error))
    assert run.executor.refused == ["tcp://a"]
    assert run.complete


def test_a_stage_that_fails_on_every_row_is_a_bug(tmp_path):
    with pytest.raises(PartFailed, match=r"part \d of 10 rows failed, with each .*: the stage has a bug") as caught:
        do_work(tmp_path, raise_always)
    assert caught.value.exit_code == 1


def test_a_stage_that_loses_a_row_is_a_bug(tmp_path):
    with pytest.raises(PartFailed, match=r"\d+ rows went in, \d+ \+ 0 came out"):
        do_work(tmp_path, lose_a_row)


def raise_at_the_first_row_of_each_part(table, settings, model):
    if any(star % 10 == 1 for star in table["star_id"].to_pylist()):
        raise ArithmeticError("a bug")
    return pass_through(table, settings, model)


def test_rows_at_fault_in_many_parts_are_a_bug(tmp_path):
    sinks = []
    with pytest.raises(PartFailed, match=r"rows of 5 of 10 parts failed, .*run with --retry-failed"):
        do_work(
            tmp_path,
            raise_at_the_first_row_of_each_part,
            sink=lambda parts: sinks.append(Sink(parts)) or sinks[0],
        )
    assert len(sinks[0].aside) == 5


def test_parts_that_were_at_fault_before_count_but_do_not_stop_a_run_by_themselves(tmp_path):
    known = {part: (SetAside(0, "stage raised", ""),) for part in range(5)}
    assert do_work(tmp_path / "a", set_aside=known).complete
    with pytest.raises(PartFailed, match="rows of 6 of 10 parts failed"):
        do_work(tmp_path / "b", raise_at_the_first_row_of_each_part, set_aside=known)


def test_another_row_of_a_part_that_was_at_fault_before_does_not_stop_the_run(tmp_path):
    known = {part: (SetAside(5, "stage raised", ""),) for part in range(5)}
    run = do_work(tmp_path, raise_at_failing_id, set_aside=known)
    assert [row["star_id"] for row in run.rows("rejected")] == [6, 13, 16, 26, 36, 46]


@pytest.mark.parametrize(
    ("kind", "remedy"), [("died", r"compute\.memory_per_worker"), ("slow", r"compute\.row_seconds")]
)
def test_a_part_that_is_hopeless_for_the_machine_tells_the_remedy(tmp_path, kind, remedy):
    class Hopeless(Watched):
        def error_of(self, key, function, args):
            return StartedBefore(kind) if function is fit_rows else None

    with pytest.raises(PartFailed, match=f"of 10 rows failed, .*raise {remedy}"):
        do_work(tmp_path, executor=Hopeless)


def test_a_part_of_one_row_is_set_aside_where_there_are_other_parts(tmp_path):
    run = do_work(tmp_path / "a", raise_at_failing_id, files=1, part_rows=1)
    assert [row["star_id"] for row in run.rows("rejected")] == [13]
    with pytest.raises(PartFailed, match="part 0 of 1 rows"):
        do_work(tmp_path / "b", raise_always, files=1, rows=1, part_rows=1)


def test_a_full_disk_is_no_bug(tmp_path):
    with pytest.raises(EnvironmentTrouble, match=r"part 1 of 10 rows: .*No space left on device"):
        do_work(tmp_path, raise_disk_full)


@pytest.mark.parametrize("function", [cut_unit, fit_rows])
@pytest.mark.parametrize("error", [EnvironmentTrouble("stale"), OSError(116, "stale")])
def test_trouble_that_passes_costs_nothing(tmp_path, error, function):
    run = do_work(tmp_path, executor=lambda scratch: Faulty(scratch, error, function=function))
    assert run.complete
    outcomes = [attempt.outcome for attempt in run.sink.attempts]
    assert outcomes.count("environment") == (function is fit_rows)


@pytest.mark.parametrize("error", [InputError("damaged"), ClusterTrouble("gone")])
def test_some_errors_are_not_tried_again(tmp_path, error):
    executors = []
    with pytest.raises(type(error), match=str(error)):
        do_work(tmp_path, executor=lambda scratch: executors.append(Faulty(scratch, error)) or executors[0])
    assert len(executors[0].spans()) == 0


@pytest.mark.parametrize("function", [cut_unit, assemble_part])
def test_what_is_no_fit_is_done_twice_before_it_is_a_bug(tmp_path, function):
    def faulty(*errors):
        return lambda scratch: Faulty(scratch, *errors, function=function)

    assert do_work(tmp_path / "a", raise_at_failing_id, executor=faulty(KeyError("x"))).complete
    with pytest.raises(PartFailed, match=r"failed: KeyError: 'x' \(a bug"):
        do_work(tmp_path / "b", raise_at_failing_id, executor=faulty(*[KeyError("x")] * 6))


class StopsAfter(Sink):
    """Asks for the end when two parts are done."""

    stop = None

    def part_done(self, fitted):
        super().part_done(fitted)
        if len(self.done) == 2:
            StopsAfter.stop.signal = "SIGTERM"


def test_when_asked_to_stop_what_runs_is_done_and_nothing_else_begins(tmp_path):
    StopsAfter.stop = Clock(grace=20)
    run = do_work(tmp_path, stop=StopsAfter.stop, sink=StopsAfter)
    assert not run.complete
    assert 2 < len(run.sink.done) <= 2 + 2 * run.executor.workers
    assert not run.executor.abandoned


def test_when_the_grace_is_over_what_runs_is_abandoned(tmp_path):
    StopsAfter.stop = Clock(grace=0)
    run = do_work(tmp_path, stop=StopsAfter.stop, sink=StopsAfter)
    assert len(run.sink.done) == 2
    assert run.executor.abandoned


def test_errors_once_a_stop_is_asked_for_blame_nobody(tmp_path):
    class Dying(Watched):
        def error_of(self, key, function, args):
            return StartedBefore("died") if StopsAfter.stop.signal else None

    StopsAfter.stop = Clock(grace=20)
    run = do_work(tmp_path, stop=StopsAfter.stop, sink=StopsAfter, executor=Dying)
    assert not run.complete
    assert {attempt.outcome for attempt in run.sink.attempts} == {"done"}


def test_nothing_begins_that_the_time_left_does_not_allow(tmp_path):
    # A part of 5 rows usually takes 1.1 s, and a quarter more is asked for.
    run = do_work(tmp_path / "a", stop=Clock(seconds=1.2), part_rows=5)
    assert not run.complete
    assert len(run.sink.done) == 1
    assert do_work(tmp_path / "b", stop=Clock(seconds=100), part_rows=5).complete


def test_the_first_part_may_hope_to_be_as_fast_as_ever(tmp_path):
    def parts_done(name, seconds, rates):
        return len(do_work(tmp_path / name, stop=Clock(seconds), pace=Pace(rates)).sink.done)

    assert parts_done("a", 3.0, [0.1, 1.0, 1.0]) == 1
    assert parts_done("b", 1.9, [0.1, 1.0, 1.0]) == 0


def test_a_task_that_waits_for_others_needs_their_time_too(tmp_path):
    stop = Clock(seconds=1e6)
    do_work(tmp_path, stop=stop)
    assert max(stop.asked) > 2 * min(stop.asked)


def test_the_pace_is_learnt_from_what_is_fitted(tmp_path):
    pace = Pace()
    do_work(tmp_path, pace=pace)
    assert 0 < pace.per_row < 0.02


def test_a_task_is_marked_under_a_name_of_its_own_and_has_a_limit(tmp_path):
    run = do_work(tmp_path, raise_once)
    guards = [args[4] for function, args in run.executor.tasks.values() if function is fit_rows]
    assert len({guard.mark for guard in guards}) == len(guards) == 11
    assert all(20 < guard.limit_s < 22 for guard in guards)


def test_marks_of_a_run_that_was_killed_tell_what_it_was_at(tmp_path):
    for name, text in {"fit-000012-000000-005000-7-abc": "", "fit-000003-000313-000626-9-abc": "File x"}.items():
        (tmp_path / name).touch()
        (tmp_path / f"{name}.trace").write_text(text)
    attempts = clear_marks(tmp_path)
    assert [(attempt.part, attempt.first, attempt.last, attempt.outcome) for attempt in attempts] == [
        (3, 313, 626, "slow"),
        (12, 0, 5000, "died"),
    ]
    assert not list(tmp_path.iterdir())
    assert clear_marks(tmp_path / "none") == []


def test_keys_are_never_used_twice(tmp_path):
    keys = list(do_work(tmp_path, raise_at_failing_id).executor.tasks)
    assert all(first != second for first, second in itertools.combinations(keys, 2))
