import io
import sys

import pytest

from starkiln.engine import progress


def tell(told):
    told.begin("planning", 10)
    told.advance(10)
    told.begin("fitting", 100)
    for _ in range(10):
        told.advance(10)


@pytest.fixture
def clock(monkeypatch):
    """A clock that goes on by twenty seconds each time it is read."""
    ticks = iter(range(0, 10_000, 20))
    monkeypatch.setattr(progress.time, "monotonic", lambda: float(next(ticks)))


def test_without_a_terminal_there_is_a_line_a_minute(clock, capsys):
    with progress.open_progress(quiet=False) as told:
        tell(told)
    out, err = capsys.readouterr()
    assert out == ""
    lines = err.splitlines()
    assert len(lines) == 4
    assert lines[1] == "starkiln: fitting: 40 of 100 rows, 0.5 a second, 2.0 minutes left"


def test_a_step_without_a_row_done_is_no_news(clock, capsys):
    with progress.open_progress(quiet=False) as told:
        told.begin("planning", 10)
        for _ in range(10):
            told.advance(0)
    assert capsys.readouterr().err == ""


def test_quiet_tells_nothing(clock, capsys):
    with progress.open_progress(quiet=True) as told:
        tell(told)
    assert capsys.readouterr() == ("", "")


class Terminal(io.StringIO):
    def isatty(self):
        return True


def test_a_terminal_gets_a_bar_on_standard_error(monkeypatch, capsys):
    terminal = Terminal()
    monkeypatch.setattr(sys, "stderr", terminal)
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.delenv("NO_COLOR", raising=False)
    with progress.open_progress(quiet=False) as told:
        tell(told)
    assert "fitting" in terminal.getvalue()
    assert "100/100" in terminal.getvalue()
    assert capsys.readouterr().out == ""


class Heard(list):
    def begin(self, what, rows):
        self.append((what, rows))

    def advance(self, rows):
        self.append(rows)


def test_two_are_told_the_same():
    first, second = Heard(), Heard()
    tell(progress.Both(first, second))
    assert first == second == [("planning", 10), 10, ("fitting", 100), *[10] * 10]
