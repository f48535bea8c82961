"""Stopping a run by a signal: the first one is noted and acted upon at the next safe point."""

from __future__ import annotations

import signal
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType, TracebackType

from starkiln.errors import StarkilnError

SIGNALS = (signal.SIGTERM, signal.SIGINT)
POLL_SECONDS = 0.02


class RunStopped(StarkilnError):
    """A signal asked the run to stop."""

    exit_code = 5


class _AtOnce(BaseException):
    """Carries a signal out of a block that does not look at the flag."""


class StopFlag:
    """Notes SIGTERM and SIGINT while it is entered; a second SIGINT raises KeyboardInterrupt at once.

    Python lets only the main thread handle signals; elsewhere the flag is never set.
    """

    def __init__(self) -> None:
        self._received: int | None = None
        self._at_once = False
        self._previous: dict[int, object] = {}

    def __enter__(self) -> StopFlag:
        if threading.current_thread() is threading.main_thread():
            for number in SIGNALS:
                self._previous[number] = signal.signal(number, self._note)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        for number, handler in self._previous.items():
            signal.signal(number, handler)  # type: ignore[arg-type]

    def _note(self, number: int, frame: FrameType | None) -> None:
        if self._received is not None and number == signal.SIGINT:
            raise KeyboardInterrupt
        self._received = number
        if self._at_once:
            raise _AtOnce

    @contextmanager
    def at_once(self) -> Iterator[None]:
        """Let a signal end the block when it comes: for long computations, which cannot look at the flag.

        Raises
        ------
        RunStopped
            If SIGTERM or SIGINT has been received, also before.
        """
        self.check()
        try:
            try:
                self._at_once = True
                yield
            finally:
                self._at_once = False
        except _AtOnce:
            pass
        self.check()

    def check(self, within: float = 0.0) -> None:
        """Raise if a signal has come, or comes within so many seconds.

        Raises
        ------
        RunStopped
            If SIGTERM or SIGINT has been received.
        """
        until = time.monotonic() + within
        while self._received is None and time.monotonic() < until:
            time.sleep(POLL_SECONDS)
        if self._received is not None:
            name = signal.Signals(self._received).name
            raise RunStopped(f"stopped by {name}: nothing was published; run again to start over")
