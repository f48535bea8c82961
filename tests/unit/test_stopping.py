import os
import signal

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
