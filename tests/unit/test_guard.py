"""The mark of a task that has begun, and the end of one that hangs: in processes of their own."""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from starkiln.engine.guard import guarded, read_trace, remove_mark, trace_path
from starkiln.engine.records import Guard, StartedBefore
from starkiln.errors import EnvironmentTrouble

TESTS = Path(__file__).parents[1]

SCRIPT = """
import sys, time
from pathlib import Path
sys.path.insert(0, {tests!r})
import fake_stages
from starkiln.engine.guard import guarded
from starkiln.engine.records import Guard

def stuck():
    {what}

with guarded(Guard(Path(sys.argv[1]), float(sys.argv[2]))):
    stuck()
print("done")
"""


def process(mark, limit_s, what):
    script = SCRIPT.format(tests=str(TESTS), what=what)
    command = [sys.executable, "-c", script, str(mark), str(limit_s)]
    return subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


@pytest.fixture
def mark(tmp_path):
    return tmp_path / "fit-000001-0"


def test_a_mark_lasts_as_long_as_its_task(mark):
    with guarded(Guard(mark, 60.0)):
        facts = json.loads(mark.read_text())
        assert facts["pid"] == os.getpid()
        assert facts["limit_s"] == 60.0
        assert 0 <= time.time() - facts["start"] < 60
    assert not list(mark.parent.iterdir())


@pytest.mark.parametrize("error", [ArithmeticError("a bug"), OSError(28, "No space left"), KeyboardInterrupt()])
def test_an_error_goes_on_as_it_is_and_no_mark_stays(mark, error):
    with pytest.raises(type(error)) as caught, guarded(Guard(mark, 60.0)):
        raise error
    assert caught.value is error
    assert not list(mark.parent.iterdir())


def test_a_limit_that_is_over_after_the_task_ends_nothing(mark):
    with guarded(Guard(mark, 0.3)):
        pass
    time.sleep(0.6)


@pytest.mark.parametrize("what", ["time.sleep(1e6)", "fake_stages._endless()(1.0)"])
def test_a_task_that_hangs_ends_its_process_and_tells_where(mark, what):
    ended = process(mark, 4.0, what)
    output, errors = ended.communicate(timeout=60)
    assert (ended.returncode, output, errors) == (1, "", "")
    with pytest.raises(StartedBefore) as caught, guarded(Guard(mark, 60.0)):
        raise AssertionError("it began again")
    assert caught.value.kind == "slow"
    assert "in stuck" in caught.value.trace
    assert mark.exists()


def test_a_task_whose_process_is_killed_leaves_its_mark(mark):
    worker = process(mark, 60.0, "time.sleep(1e6)")
    until = time.monotonic() + 60
    while not trace_path(mark).exists():
        assert time.monotonic() < until
        time.sleep(0.05)
    worker.send_signal(signal.SIGKILL)
    worker.communicate(timeout=60)
    for _ in range(2):
        with pytest.raises(StartedBefore) as caught, guarded(Guard(mark, 60.0)):
            raise AssertionError("it began again")
        assert (caught.value.kind, caught.value.trace) == ("died", "")
    remove_mark(mark)
    with guarded(Guard(mark, 60.0)):
        assert mark.exists()


def test_marks_are_removed_as_far_as_they_are_there(mark):
    remove_mark(mark)
    trace_path(mark).write_text("Timeout")
    assert read_trace(mark) == "Timeout"
    remove_mark(mark)
    assert read_trace(mark) == ""


def test_a_mark_that_cannot_be_made_is_trouble(tmp_path):
    with (
        pytest.raises(EnvironmentTrouble, match=r"gone/mark: No such file or directory; mend it and run again"),
        guarded(Guard(tmp_path / "gone" / "mark", 60.0)),
    ):
        raise AssertionError("it began")


def test_a_trace_that_cannot_be_made_is_trouble_and_no_mark_stays(mark):
    trace_path(mark).mkdir()
    with pytest.raises(EnvironmentTrouble, match=r"Is a directory"), guarded(Guard(mark, 60.0)):
        raise AssertionError("it began")
    assert not mark.exists()
