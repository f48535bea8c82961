"""Rows that no stage can do: they are found and set aside, and no other row is the worse for it."""

import json
import random
import sqlite3
import time
from contextlib import suppress

import psutil
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from fake_stages import FAILING_ID, pass_through, stages
from pipeline_survey import write
from real_runs import ended
from small_survey import settings_for, stars
from starkiln.engine.run import run_settings

pytestmark = pytest.mark.slow


@pytest.fixture
def settings_of(tmp_path):
    """A function that gives settings of a run of ten parts with two workers."""
    folder = write(tmp_path / "survey", a=stars(100))

    def settings_of(output="run", **changes):
        usual = {"compute__workers": 2, "compute__rows_per_part": 10}
        return settings_for(folder, tmp_path / output, **usual | changes)

    return settings_of


def rows_of(run_dir, table):
    paths = sorted((run_dir / table).rglob("*.parquet"))
    return pa.concat_tables([pq.ParquetFile(path).read() for path in paths])


def told(run_dir, what):
    with sqlite3.connect(run_dir / "ledger.sqlite") as connection:
        return connection.execute(what).fetchall()


def assert_only_these_are_set_aside(settings, run_dir, failing, reason):
    """The rows are in `rejected`, and all the others are, bit by bit, as in a run without trouble."""
    calm = settings("calm")
    assert run_settings(calm, stages=stages(pass_through)).exit_code == 0
    rejected = rows_of(run_dir, "rejected")
    assert rejected["star_id"].to_pylist() == failing
    assert set(rejected["kind"].to_pylist()) <= {"fault"}
    assert set(rejected["reason"].to_pylist()) <= {reason}
    expected = rows_of(calm.run.output, "catalogue")
    others = pa.array([star not in failing for star in expected["star_id"].to_pylist()])
    assert rows_of(run_dir, "catalogue").equals(expected.filter(others))


@pytest.mark.parametrize(
    ("stage", "reason", "tries", "changes"),
    [
        ("raise_at_failing_id", "stage raised", 4, {}),
        ("hang_at_failing_id", "took too long", 3, {"compute__row_seconds": 6.0}),
        ("hang_in_kernel", "took too long", 3, {"compute__row_seconds": 6.0}),
        ("exit_at_failing_id", "worker died", 6, {}),
        ("kill_worker", "worker died", 6, {}),
        ("eat_memory", "worker died", 6, {"compute__memory_per_worker": "600MB"}),
    ],
)
def test_a_row_that_no_stage_can_do_is_set_aside(start, settings_of, stage, reason, tries, changes):
    settings = settings_of(**changes)
    code, out, err = ended(start(settings, stage))
    assert code == 4, (out, err)
    run_dir = settings.run.output
    assert_only_these_are_set_aside(settings_of, run_dir, [FAILING_ID], reason)
    failed = told(run_dir, "SELECT outcome FROM attempts WHERE outcome != 'done'")
    assert len(failed) == tries


@pytest.mark.parametrize("cluster", [True, False])
def test_two_rows_of_a_part_are_found_both(start, settings_of, cluster):
    settings = settings_of()
    assert ended(start(settings, "raise_at_two_ids", cluster=cluster))[0] == 4
    assert_only_these_are_set_aside(settings_of, settings.run.output, [FAILING_ID, FAILING_ID + 4], "stage raised")


def test_a_part_of_one_row_may_be_at_fault_as_a_whole(start, settings_of):
    settings = settings_of(compute__rows_per_part=1)
    assert ended(start(settings, "raise_at_failing_id", cluster=False))[0] == 4
    assert_only_these_are_set_aside(settings_of, settings.run.output, [FAILING_ID], "stage raised")


def test_a_stage_that_fails_on_every_row_stops_the_run(start, settings_of):
    settings = settings_of()
    code, out, err = ended(start(settings, "raise_always"))
    assert (code, out) == (1, "")
    assert "of 10 rows failed, with each of its rows that was tried: ArithmeticError: the stage has a bug" in err
    assert not (settings.run.output / "current").exists()
    assert told(settings.run.output, "SELECT * FROM set_aside") == []


def test_rows_set_aside_are_told_once_and_tried_again_on_demand(start, settings_of):
    settings = settings_of()
    assert ended(start(settings, "raise_at_failing_id"))[0] == 4
    published = (settings.run.output / "current").resolve()
    assert ended(start(settings, "raise_at_failing_id"))[0] == 0
    assert (settings.run.output / "current").resolve() == published
    assert ended(start(settings, "pass_through", "--retry-failed"))[0] == 0
    assert rows_of(settings.run.output, "rejected").num_rows == 0
    calm = settings_of("calm")
    run_settings(calm, stages=stages(pass_through))
    assert rows_of(settings.run.output, "catalogue").equals(rows_of(calm.run.output, "catalogue"))


def test_a_small_run_that_hangs_ends_and_the_next_one_finds_the_row(start, settings_of):
    settings = settings_of(compute__row_seconds=6.0)
    code, out, err = ended(start(settings, "hang_at_failing_id", cluster=False))
    assert code == 1
    assert list(settings.run.output.glob("generations/*.partial/started/fit-*"))
    code, out, err = ended(start(settings, "hang_at_failing_id", cluster=False))
    assert code == 4, (out, err)
    assert_only_these_are_set_aside(settings_of, settings.run.output, [FAILING_ID], "took too long")


def test_workers_that_are_killed_from_outside_blame_no_row(start, settings_of):
    settings = settings_of(compute__rows_per_part=5)
    process = start(settings, "take_a_moment")
    chance, killed = random.Random(7), 0
    while process.poll() is None:
        at_work = workers_at_work(settings.run.output)
        if at_work and killed < 5:
            chance.choice(at_work).kill()
            killed += 1
            time.sleep(2)
        time.sleep(0.1)
    code, out, err = ended(process)
    assert code == 0, (out, err)
    assert killed >= 3
    outcomes = {outcome for (outcome,) in told(settings.run.output, "SELECT outcome FROM attempts")}
    assert outcomes == {"done", "died"}
    assert_only_these_are_set_aside(settings_of, settings.run.output, [], "")


def workers_at_work(run_dir):
    """The workers that have marked a task as begun; one that dies while it starts is away for long."""
    found = []
    for mark in run_dir.glob("generations/*.partial/started/fit-*"):
        with suppress(psutil.Error, OSError, ValueError, TypeError):
            found.append(psutil.Process(json.loads(mark.read_text())["pid"]))
    return found
