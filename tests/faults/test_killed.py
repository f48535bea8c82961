"""Processes that are killed in the middle of their work."""

import json
import os
import signal
import sqlite3

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


def events(run_dir):
    """What the newest log of a run directory tells."""
    lines = max((run_dir / "logs").iterdir()).read_text().splitlines()
    return [json.loads(line)["event"] for line in lines]


def busy(tmp_path, process):
    """Wait until a part is done and others are being fitted."""
    wait_until(process, lambda: list((tmp_path / "run").glob("logs/*")) and "part" in events(tmp_path / "run"))


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


def set_aside(run_dir):
    with sqlite3.connect(run_dir / "ledger.sqlite") as ledger:
        return ledger.execute("SELECT * FROM set_aside").fetchall()


@pytest.mark.parametrize("whole_group", [False, True])
@pytest.mark.parametrize("pause", [0.0, 5.0])
def test_after_a_killed_run_no_worker_is_left_and_the_next_run_goes_on(start, tmp_path, settings, pause, whole_group):
    process = start(settings, "take_a_moment")
    with process:
        busy(tmp_path, process)
        workers = psutil.Process(process.pid).children(recursive=True)
        (os.killpg if whole_group else os.kill)(process.pid, signal.SIGKILL)
    run_dir = tmp_path / "run"
    assert {"ledger.sqlite", "scratch"} <= {path.name for path in run_dir.iterdir()}
    assert [path.name for path in (run_dir / "generations").iterdir()] == ["000001.partial"]
    if pause:
        psutil.wait_procs(workers, timeout=pause)
        assert still_running(workers) == []
    assert ended(start(settings, "pass_through"))[0::2] == (0, "")
    assert [path.name for path in (run_dir / "generations").iterdir()] == ["000001"]
    assert not (run_dir / "scratch").exists()
    assert not (run_dir / "planning").exists()
    assert not list(run_dir.rglob("*.tmp"))
    assert still_running(workers) == []
    assert "resume" in events(run_dir)
    assert events(run_dir).count("part") < 10
    assert set_aside(run_dir) == []
