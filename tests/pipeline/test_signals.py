"""Stopping a run whose workers are busy: as a scheduler of jobs does, and as Ctrl-C on a terminal does."""

import os
import signal
import subprocess
import sys
import time

import psutil
import pytest

from pipeline_survey import write
from small_survey import settings_for, stars
from starkiln.settings import dump_toml

RUN = """
import sys
from fake_stages import stages, take_long
from starkiln import cli
from starkiln.engine import run
if __name__ == "__main__":
    run.SMALL_RUN_ROWS = 0
    run.fitting_stages = lambda: stages(take_long)
    cli.main()
"""
STOPPED = "starkiln: stopped by {}: nothing was published; run again to start over\n"


@pytest.fixture
def started_run(tmp_path):
    """A run with two workers, just started, in a process group of its own."""
    folder = write(tmp_path / "survey", a=stars(100))
    settings = settings_for(folder, tmp_path / "run", compute__workers=2, compute__rows_per_part=10)
    (tmp_path / "run.toml").write_text(dump_toml(settings))
    (tmp_path / "main.py").write_text(RUN)
    process = subprocess.Popen(
        [sys.executable, tmp_path / "main.py", "run", tmp_path / "run.toml"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
        env=os.environ | {"PYTHONPATH": os.pathsep.join(sys.path)},
    )
    with process:
        yield process
        process.kill()


def wait_until(process, happens):
    deadline = time.monotonic() + 60
    while not happens():
        assert process.poll() is None, process.stderr.read()
        assert time.monotonic() < deadline
        time.sleep(0.02)


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
    assert err == STOPPED.format("SIGINT")


@pytest.mark.parametrize(
    ("number", "to_group"), [(signal.SIGTERM, False), (signal.SIGTERM, True), (signal.SIGINT, True)]
)
def test_a_stopped_run_leaves_nothing_running_and_nothing_behind(busy_run, tmp_path, number, to_group):
    children = psutil.Process(busy_run.pid).children(recursive=True)
    assert len(children) >= 2
    if to_group:
        os.killpg(busy_run.pid, number)
    else:
        busy_run.send_signal(number)
    out, err = busy_run.communicate(timeout=20)
    assert (out, err) == ("", STOPPED.format(signal.Signals(number).name))
    assert busy_run.returncode == 5
    psutil.wait_procs(children, timeout=5)
    assert [child for child in children if child.is_running() and child.status() != psutil.STATUS_ZOMBIE] == []
    assert sorted(path.name for path in (tmp_path / "run").iterdir()) == ["generations", "lock", "logs"]
    assert list((tmp_path / "run" / "generations").iterdir()) == []


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
    assert (started_run.returncode, out, err) == (5, "", STOPPED.format("SIGTERM"))


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
        assert process.communicate(timeout=60)[1] == STOPPED.format("SIGTERM")
    assert process.returncode == 5
    assert not (tmp_path / "run" / "current").exists()
