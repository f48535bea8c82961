"""Stopping a run whose workers are busy: as a scheduler of jobs does, and as Ctrl-C on a terminal does."""

import json
import os
import signal
import subprocess
import sys
import time

import psutil
import pytest

from pipeline_survey import write
from real_runs import MAIN, ended, start_run, still_running, wait_until
from small_survey import settings_for, stars
from starkiln.settings import dump_toml

STOPPED = "starkiln: stopped by {}{}; run again to go on\n"
OF_PARTS = ": 0 of 10 parts are done"
IMPATIENT = MAIN.replace("    cli.main()", "    stopping.GRACE_SECONDS = 2.0\n    cli.main()")


@pytest.fixture
def settings(tmp_path):
    """Settings of a run of ten parts with two workers."""
    folder = write(tmp_path / "survey", a=stars(100))
    return settings_for(folder, tmp_path / "run", compute__workers=2, compute__rows_per_part=10)


@pytest.fixture
def started_run(tmp_path, settings):
    """A run of half a minute a part, just started, in a process group of its own."""
    process = start_run(tmp_path, settings, "take_long", main=IMPATIENT)
    with process:
        yield process
        process.kill()


@pytest.fixture
def busy_run(started_run, tmp_path):
    """The run when both workers are in the middle of a part."""
    wait_until(started_run, lambda: list((tmp_path / "run").glob("scratch/*.arrow")))
    time.sleep(1)
    return started_run


@pytest.mark.parametrize("delay", [0.1, 0.3])
def test_ctrl_c_while_workers_start_makes_no_noise(started_run, delay):
    process = psutil.Process(started_run.pid)
    # The first child is Python's resource tracker.
    wait_until(started_run, lambda: len(process.children()) >= 2)
    time.sleep(delay)
    os.killpg(started_run.pid, signal.SIGINT)
    out, err = started_run.communicate(timeout=20)
    assert (started_run.returncode, out) == (5, "")
    assert err == STOPPED.format("SIGINT", OF_PARTS)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("number", "to_group"), [(signal.SIGTERM, False), (signal.SIGTERM, True), (signal.SIGINT, True)]
)
def test_a_stopped_run_leaves_nothing_running_and_the_next_one_goes_on(busy_run, tmp_path, settings, number, to_group):
    children = psutil.Process(busy_run.pid).children(recursive=True)
    assert len(children) >= 2
    if to_group:
        os.killpg(busy_run.pid, number)
    else:
        busy_run.send_signal(number)
    out, err = busy_run.communicate(timeout=20)
    assert (out, err) == ("", STOPPED.format(signal.Signals(number).name, OF_PARTS))
    assert busy_run.returncode == 5
    psutil.wait_procs(children, timeout=5)
    assert still_running(children) == []
    run_dir = tmp_path / "run"
    assert sorted(path.name for path in run_dir.iterdir()) == [
        "generations",
        "ledger.sqlite",
        "lock",
        "logs",
        "planning",
        "progress.json",
    ]
    assert [path.name for path in (run_dir / "generations").iterdir()] == ["000001.partial"]
    assert ended(start_run(tmp_path, settings, "pass_through"))[0::2] == (0, "")
    assert [path.name for path in (run_dir / "generations").iterdir()] == ["000001"]


@pytest.mark.slow
def test_parts_that_come_to_their_end_in_time_are_kept(tmp_path, settings):
    process = start_run(tmp_path, settings, "take_a_moment")
    with process:
        wait_until(process, lambda: list((tmp_path / "run").glob("generations/*.partial/parts/catalogue/part-*")))
        process.terminate()
        code, out, err = ended(process)
    assert (code, out) == (5, "")
    done = int(err.removeprefix("starkiln: stopped by SIGTERM: ").partition(" of 10 parts are done")[0])
    assert 2 <= done < 10
    again = start_run(tmp_path, settings, "take_a_moment")
    assert ended(again)[0::2] == (0, "")
    events = [json.loads(line) for line in max((tmp_path / "run" / "logs").iterdir()).read_text().splitlines()]
    assert [event["done"] for event in events if event["event"] == "resume"] == [done]
    assert sum(event["event"] == "part" for event in events) == 10 - done


@pytest.mark.parametrize("delay", [0.2, 0.6])
def test_workers_that_are_signalled_first_while_they_start_are_not_the_news(started_run, delay):
    process = psutil.Process(started_run.pid)
    wait_until(started_run, lambda: len(process.children()) >= 2)
    time.sleep(delay)
    for child in process.children(recursive=True):
        child.terminate()
    time.sleep(0.3)
    started_run.terminate()
    out, err = started_run.communicate(timeout=30)
    assert (started_run.returncode, out, err) == (5, "", STOPPED.format("SIGTERM", OF_PARTS))


def test_a_signal_before_the_run_has_begun_ends_with_5_too(tmp_path):
    """The settings are a pipe that nobody writes to, so the command waits inside."""
    os.mkfifo(tmp_path / "run.toml")
    process = subprocess.Popen(
        [sys.executable, "-m", "starkiln", "run", tmp_path / "run.toml"], stderr=subprocess.PIPE, text=True
    )
    with process, (tmp_path / "run.toml").open("w") as pipe:
        process.terminate()
        pipe.write(dump_toml(settings_for(write(tmp_path / "survey", a=stars(3)), tmp_path / "run")))
        pipe.close()
        assert process.communicate(timeout=60)[1] == STOPPED.format("SIGTERM", "")
    assert process.returncode == 5
    assert not (tmp_path / "run" / "current").exists()
