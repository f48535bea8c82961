"""Processes that are killed in the middle of their work."""

import json
import os
import signal

import psutil
import pytest

from fake_stages import pass_through, stages
from pipeline_survey import write
from real_runs import ended, still_running, wait_until, workers_of
from small_survey import settings_for, stars
from starkiln.engine.run import run_settings

pytestmark = pytest.mark.slow


@pytest.fixture
def settings(tmp_path):
    """Settings of a run of ten parts with two workers."""
    folder = write(tmp_path / "survey", a=stars(100))
    return settings_for(folder, tmp_path / "run", compute__workers=2, compute__rows_per_part=10)


def busy(tmp_path, process):
    """Wait until parts are being fitted."""
    wait_until(process, lambda: list((tmp_path / "run").glob("generations/*.partial/parts/catalogue/part-*")))


def files_of(generation):
    return json.loads((generation / "run.json").read_text())["files"]


def test_a_killed_worker_costs_time_only(start, tmp_path, settings):
    process = start(settings, "take_a_moment")
    busy(tmp_path, process)
    first = workers_of(process.pid)
    first[0].kill()
    wait_until(process, lambda: len(set(workers_of(process.pid)) - set(first)) > 0)
    assert ended(process)[0::2] == (0, "")
    undisturbed = settings_for(settings.input.tables, tmp_path / "undisturbed")
    expected = run_settings(undisturbed, stages=stages(pass_through)).path
    assert files_of(tmp_path / "run" / "current") == files_of(expected)
    assert len(files_of(expected)) == 3


def test_a_task_that_kills_each_worker_it_gets_ends_with_1_and_a_remedy(start, tmp_path, settings):
    code, out, err = ended(start(settings, "kill_worker"))
    assert (code, out) == (1, "")
    assert err == (
        "starkiln: part 1 of 10 rows failed: its worker died 4 times; "
        "if memory ran out, raise compute.memory_per_worker\n"
    )
    assert not (tmp_path / "run" / "current").exists()


def test_a_stage_that_raises_ends_with_1_and_names_the_part(start, tmp_path, settings):
    code, out, err = ended(start(settings, "raise_at_failing_id"))
    assert (code, out) == (1, "")
    assert err == (
        "starkiln: part 1 of 10 rows failed: ArithmeticError: the stage has a bug "
        "(a bug: please report it, with what --debug shows)\n"
    )
    assert not (tmp_path / "run" / "current").exists()
    assert sorted(path.name for path in (tmp_path / "run").iterdir()) == ["generations", "lock", "logs"]


@pytest.mark.parametrize("pause", [0.0, 5.0])
def test_after_a_killed_run_no_worker_is_left_and_the_next_run_starts_cleanly(start, tmp_path, settings, pause):
    process = start(settings, "take_a_moment")
    with process:
        busy(tmp_path, process)
        workers = psutil.Process(process.pid).children(recursive=True)
        os.kill(process.pid, signal.SIGKILL)
    run_dir = tmp_path / "run"
    assert {"generations", "lock", "logs", "scratch"} == {path.name for path in run_dir.iterdir()}
    assert [path.name for path in (run_dir / "generations").iterdir()] == ["000001.partial"]
    if pause:
        psutil.wait_procs(workers, timeout=pause)
        assert still_running(workers) == []
    assert ended(start(settings, "pass_through"))[0::2] == (0, "")
    assert [path.name for path in (run_dir / "generations").iterdir()] == ["000001"]
    assert not (run_dir / "scratch").exists()
    assert not list(run_dir.rglob("*.tmp"))
    assert still_running(workers) == []
