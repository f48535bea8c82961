"""How far a run has come, told to whoever waits: a bar on a terminal, else a line a minute."""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Protocol

SECONDS_BETWEEN_LINES = 60.0


class Progress(Protocol):
    """Is told what a run does."""

    def begin(self, what: str, rows: int) -> None:
        """Note that a step of so many rows begins."""

    def advance(self, rows: int) -> None:
        """Note that so many more rows are done."""


class Silence:
    """Tells nothing."""

    def begin(self, what: str, rows: int) -> None:
        """Tell nothing."""

    def advance(self, rows: int) -> None:
        """Tell nothing."""


class Both:
    """Hands on to two."""

    def __init__(self, first: Progress, second: Progress) -> None:
        self._told = (first, second)

    def begin(self, what: str, rows: int) -> None:
        """Tell both."""
        for told in self._told:
            told.begin(what, rows)

    def advance(self, rows: int) -> None:
        """Tell both."""
        for told in self._told:
            told.advance(rows)


class Lines:
    """Writes a line to standard error about once a minute."""

    def __init__(self) -> None:
        self._what, self._rows, self._done = "", 0, 0
        self._started = self._last_line = time.monotonic()

    def begin(self, what: str, rows: int) -> None:
        """Note that a step of so many rows begins."""
        self._what, self._rows, self._done = what, rows, 0
        self._started = time.monotonic()

    def advance(self, rows: int) -> None:
        """Count the rows, and write a line if the last one is long enough ago."""
        self._done += rows
        now = time.monotonic()
        if now - self._last_line >= SECONDS_BETWEEN_LINES and self._done and now > self._started:
            self._last_line = now
            rate = self._done / (now - self._started)
            left = (self._rows - self._done) / rate / 60
            print(
                f"starkiln: {self._what}: {self._done} of {self._rows} rows, {rate:.3g} a second, "
                f"{left:.1f} minutes left",
                file=sys.stderr,
                flush=True,
            )


class Bar:
    """Draws a bar on the terminal that standard error is."""

    def __init__(self, bar: object) -> None:
        self._bar = bar
        self._task: object = None

    def begin(self, what: str, rows: int) -> None:
        """Replace the bar by a new one."""
        if self._task is not None:
            self._bar.remove_task(self._task)  # type: ignore[attr-defined]
        self._task = self._bar.add_task(what, total=rows)  # type: ignore[attr-defined]

    def advance(self, rows: int) -> None:
        """Move the bar on."""
        self._bar.advance(self._task, rows)  # type: ignore[attr-defined]


@contextmanager
def open_progress(quiet: bool) -> Iterator[Progress]:
    """Choose how progress is told: not at all, as a bar if standard error is a terminal, else as lines."""
    if quiet:
        yield Silence()
    elif not sys.stderr.isatty():
        yield Lines()
    else:
        from rich import progress
        from rich.console import Console

        columns = (
            progress.TextColumn("{task.description}"),
            progress.BarColumn(),
            progress.MofNCompleteColumn(),
            progress.TimeRemainingColumn(),
        )
        with progress.Progress(*columns, console=Console(stderr=True), transient=True) as bar:
            yield Bar(bar)
