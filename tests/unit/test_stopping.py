import os
import signal
import threading

import pytest

from starkiln.engine.stopping import RunStopped, StopFlag


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
