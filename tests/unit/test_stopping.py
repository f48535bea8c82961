import math
import os
import signal
import threading
import time

import pytest

from starkiln.engine.stopping import GRACE_SECONDS, RunStopped, StopFlag, parse_limit, process_started
from starkiln.errors import SettingsError


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_is_noted_and_raised_at_the_next_check(number):
    with StopFlag() as stop:
        stop.check()
        os.kill(os.getpid(), number)
        with pytest.raises(RunStopped, match=signal.Signals(number).name) as caught:
            stop.check()
    assert caught.value.exit_code == 5


def test_a_second_interrupt_does_not_wait():
    with StopFlag():
        os.kill(os.getpid(), signal.SIGINT)
        with pytest.raises(KeyboardInterrupt):
            os.kill(os.getpid(), signal.SIGINT)


def test_the_handlers_from_before_come_back():
    before = [signal.getsignal(number) for number in (signal.SIGTERM, signal.SIGINT)]
    with StopFlag():
        assert signal.getsignal(signal.SIGTERM) not in before
    assert [signal.getsignal(number) for number in (signal.SIGTERM, signal.SIGINT)] == before


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_ends_a_block_that_does_not_look(number):
    reached = []

    def compute(stop):
        with stop.at_once():
            os.kill(os.getpid(), number)
            reached.append("behind the signal")

    with StopFlag() as stop:
        with pytest.raises(RunStopped, match=signal.Signals(number).name):
            compute(stop)
        with pytest.raises(RunStopped):
            stop.check()
    assert reached == []


def test_a_signal_from_before_ends_a_block_before_it_begins():
    reached = []
    with StopFlag() as stop:
        os.kill(os.getpid(), signal.SIGTERM)
        with pytest.raises(RunStopped), stop.at_once():
            reached.append("inside")
    assert reached == []


def test_behind_the_block_a_signal_is_only_noted():
    with StopFlag() as stop:
        with stop.at_once():
            pass
        os.kill(os.getpid(), signal.SIGTERM)
        with pytest.raises(RunStopped):
            stop.check()


def test_an_error_of_the_block_is_its_own():
    with StopFlag() as stop, pytest.raises(KeyError), stop.at_once():
        raise KeyError


def test_a_check_may_wait_for_a_signal_that_is_on_its_way():
    with StopFlag() as stop:
        stop.check(within=0.05)
        sender = threading.Timer(0.2, os.kill, (os.getpid(), signal.SIGTERM))
        sender.start()
        with pytest.raises(RunStopped):
            stop.check(within=60.0)
        sender.join()


@pytest.mark.parametrize(
    ("text", "seconds"), [("6h", 21600), ("90m", 5400), ("1h30m", 5400), ("45s", 45), ("0.5h", 1800), ("1d", 86400)]
)
def test_a_length_of_time_in_words_is_so_many_seconds(text, seconds):
    assert parse_limit(text) == seconds


@pytest.mark.parametrize("text", ["", "6", "h", "six hours", "0s", "-3m", "1h 30m", "1h30", "inf"])
def test_what_is_no_length_of_time_is_refused(text):
    with pytest.raises(SettingsError, match="write it as 6h, 90m, 1h30m or 45s"):
        parse_limit(text)


def test_a_process_began_before_now_and_not_before_the_machine():
    assert 0 < process_started() <= time.monotonic()


def test_a_limit_counts_from_the_start_that_is_given():
    with StopFlag(100.0, time.monotonic() - 60.0) as stop:
        assert stop.has_time_for(30.0)
        assert not stop.has_time_for(50.0)
        assert stop.requested() is None
        assert stop.grace_left() == math.inf
        stop.check()
    with StopFlag(100.0, time.monotonic() - 101.0) as stop:
        assert stop.requested() == "the time limit"
        assert not stop.has_time_for(0.0)
        assert stop.grace_left() <= 0
        stop.check_signal()
        with pytest.raises(RunStopped, match="stopped by the time limit"):
            stop.check()


def test_a_signal_leaves_a_grace_that_the_limit_may_cut_short():
    with StopFlag() as stop:
        assert stop.has_time_for(1e9)
        os.kill(os.getpid(), signal.SIGTERM)
        assert stop.requested() == "SIGTERM"
        assert not stop.has_time_for(0.0)
        assert 0.9 * GRACE_SECONDS < stop.grace_left() <= GRACE_SECONDS
        with pytest.raises(RunStopped):
            stop.check_signal()
    with StopFlag(100.0, time.monotonic() - 99.0) as stop:
        os.kill(os.getpid(), signal.SIGTERM)
        assert stop.grace_left() <= 1.0


def test_another_terminate_does_not_prolong_the_grace():
    with StopFlag() as stop:
        os.kill(os.getpid(), signal.SIGTERM)
        first = stop.grace_left()
        time.sleep(0.01)
        os.kill(os.getpid(), signal.SIGTERM)
        assert stop.grace_left() < first


def test_the_end_of_the_time_ends_a_block_that_does_not_look():
    with StopFlag(0.2, time.monotonic()) as stop, pytest.raises(RunStopped, match="the time limit"), stop.at_once():
        time.sleep(60)
    assert time.monotonic() < stop.deadline + 30
    assert signal.getitimer(signal.ITIMER_REAL)[0] == 0.0
