import pyarrow.parquet as pq
import pytest

from fake_stages import (
    NoModel,
    lose_a_row,
    pass_through,
    raise_at_failing_id,
    raise_disk_full,
    raise_once,
    stages,
)
from small_survey import settings_for, stars
from starkiln.engine.executors import Finished, SerialExecutor, WorkerDied
from starkiln.engine.job import Job
from starkiln.engine.plan import make_plan
from starkiln.engine.work import PartFailed, Work
from starkiln.errors import EnvironmentTrouble, InputError
from starkiln.tables.source import open_source


class Watched(SerialExecutor):
    """Notes the most tasks held at once, and the cut files on disk after each task."""

    workers = 3

    def __init__(self, scratch):
        super().__init__()
        self.scratch, self.held, self.most_held, self.most_cut = scratch, 0, 0, 0

    def submit(self, *task, **options):
        super().submit(*task, **options)
        self.held += 1
        self.most_held = max(self.held, self.most_held)

    def next_finished(self):
        self.held -= 1
        finished = super().next_finished()
        self.most_cut = max(self.most_cut, len(list(self.scratch.glob("*.arrow"))))
        return finished


def do_work(tmp_path, process=pass_through, rows=100, row_group_size=20, executor=None, check=lambda: None):
    """Do the parts of a small table, and return the work's results and its executor."""
    folder, scratch, parts = tmp_path / "input", tmp_path / "scratch", tmp_path / "parts"
    for path in (folder, scratch, *(parts / name for name in ("catalogue", "rejected", "index"))):
        path.mkdir(parents=True)
    pq.write_table(stars(rows), folder / "a.parquet", row_group_size=row_group_size)
    settings = settings_for(folder, compute__rows_per_part=10)
    source = open_source(settings)
    plan = make_plan(source, settings, 1, scratch)
    job = Job(
        source=source,
        settings=settings,
        stages=stages(process),
        model=NoModel(),
        stamps=plan.stamps,
        scratch=scratch,
        parts=parts,
    )
    executor = executor or Watched(scratch)
    cuts, fitted = [], []
    Work(plan, job, parts, executor, check).run(cuts.append, fitted.append)
    return cuts, fitted, executor


def test_every_part_is_put_in_place_and_its_cut_file_removed(tmp_path):
    cuts, fitted, _ = do_work(tmp_path)
    assert len(cuts) == 5
    assert sorted(part.number for part in fitted) == list(range(10))
    for table, rows in (("catalogue", 10), ("rejected", 0), ("index", 10)):
        paths = sorted((tmp_path / "parts" / table).iterdir())
        assert [path.name for path in paths] == [f"part-{number:06d}.parquet" for number in range(10)]
        assert {pq.read_metadata(path).num_rows for path in paths} == {rows}
    assert not list((tmp_path / "scratch").glob("*.arrow"))


def test_few_tasks_and_few_cut_files_at_a_time(tmp_path):
    _, fitted, executor = do_work(tmp_path, rows=1000, row_group_size=10)
    assert len(fitted) == 100
    assert executor.most_held <= 2 * executor.workers
    assert executor.most_cut <= 4 * executor.workers


def test_an_error_that_passes_costs_nothing(tmp_path):
    _, fitted, _ = do_work(tmp_path, raise_once)
    assert (tmp_path / "seen").exists()
    assert sum(part.rows for part in fitted) == 100


def test_an_error_that_stays_is_a_bug_that_names_the_part(tmp_path):
    with pytest.raises(PartFailed, match=r"part 1 of 10 rows failed: ArithmeticError: the stage has a bug") as caught:
        do_work(tmp_path, raise_at_failing_id)
    assert caught.value.exit_code == 1


def test_a_stage_that_loses_a_row_is_a_bug(tmp_path):
    with pytest.raises(PartFailed, match=r"10 rows went in, 9 \+ 0 came out"):
        do_work(tmp_path, lose_a_row)


def test_a_full_disk_is_no_bug(tmp_path):
    with pytest.raises(EnvironmentTrouble, match=r"part 1 of 10 rows: .*No space left on device"):
        do_work(tmp_path, raise_disk_full)


def test_a_part_whose_worker_dies_tells_the_remedy(tmp_path):
    class Deadly(SerialExecutor):
        def next_finished(self):
            finished = super().next_finished()
            if finished.key.startswith("fit"):
                return Finished(finished.key, None, WorkerDied("its worker died 4 times"))
            return finished

    with pytest.raises(PartFailed, match=r"worker died 4 times; if memory ran out, raise compute\.memory_per_worker"):
        do_work(tmp_path, executor=Deadly())


def test_input_that_is_unusable_is_not_tried_again(tmp_path):
    class Unreadable(SerialExecutor):
        tries = 0

        def next_finished(self):
            self.tries += 1
            return Finished("cut-000000-0", None, InputError("damaged"))

    executor = Unreadable()
    with pytest.raises(InputError, match="damaged"):
        do_work(tmp_path, executor=executor)
    assert executor.tries == 1


def test_the_check_stops_the_work(tmp_path):
    calls = []

    def stop():
        calls.append(None)
        if len(calls) > 3:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        do_work(tmp_path, check=stop)
    assert len(list((tmp_path / "parts" / "catalogue").iterdir())) < 10
