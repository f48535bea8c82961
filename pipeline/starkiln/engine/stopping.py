"""Stopping a run before it is done: by a signal, or because its time is up."""

from __future__ import annotations

import math
import re
import signal
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType, TracebackType

import psutil

from starkiln.errors import SettingsError, StarkilnError

SIGNALS = (signal.SIGTERM, signal.SIGINT)
POLL_SECONDS = 0.02

GRACE_SECONDS = 20.0
"""What runs when a signal comes may take so long to come to its end."""

TIME_UP = "the time limit"

_LENGTHS_S = {"d": 86400.0, "h": 3600.0, "m": 60.0, "s": 1.0}


class RunStopped(StarkilnError):
    """A signal asked the run to stop, or its time is up."""

    exit_code = 5


class _AtOnce(BaseException):
    """Carries a signal out of a block that does not look at the flag."""


def parse_limit(text: str) -> float:
    """Return the seconds of a length of time such as "6h", "90m", "1h30m" or "45s".

    Raises
    ------
    SettingsError
        If it is none, or no time at all.
    """
    pairs = re.findall(r"(\d+(?:\.\d+)?)([dhms])", text)
    seconds = sum(float(number) * _LENGTHS_S[unit] for number, unit in pairs)
    if "".join(map("".join, pairs)) != text or seconds <= 0:
        raise SettingsError(f"--time-limit {text!r} is no length of time: write it as 6h, 90m, 1h30m or 45s")
    return seconds


def process_started() -> float:
    """Return when this process started, on the monotonic clock."""
    age = time.time() - psutil.Process().create_time()
    return time.monotonic() - max(age, 0.0)


class StopFlag:
    """Notes SIGTERM and SIGINT while it is entered, and the end of the time a run may take.

    A second SIGINT raises KeyboardInterrupt at once. Python lets only the main thread handle signals; elsewhere
    none is ever noted.

    Parameters
    ----------
    limit_s
        The seconds that the run may take; None for as long as it needs.
    started
        When those seconds began, on the monotonic clock; the start of this process unless given.
    """

    def __init__(self, limit_s: float | None = None, started: float | None = None) -> None:
        self._deadline = math.inf
        if limit_s is not None:
            self._deadline = (process_started() if started is None else started) + limit_s
        self._received: int | None = None
        self._abandon_at = math.inf
        self._at_once = False
        self._previous: dict[int, object] = {}

    def __enter__(self) -> StopFlag:
        if threading.current_thread() is threading.main_thread():
            for number in SIGNALS:
                self._previous[number] = signal.signal(number, self._note)
            if math.isfinite(self._deadline):
                self._previous[signal.SIGALRM] = signal.signal(signal.SIGALRM, self._time_up)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        for number, handler in self._previous.items():
            signal.signal(number, handler)  # type: ignore[arg-type]

    def _note(self, number: int, frame: FrameType | None) -> None:
        if self._received is not None and number == signal.SIGINT:
            raise KeyboardInterrupt
        if self._received is None:
            self._abandon_at = time.monotonic() + GRACE_SECONDS
        self._received = number
        if self._at_once:
            raise _AtOnce

    def _time_up(self, number: int, frame: FrameType | None) -> None:
        if self._at_once:
            raise _AtOnce

    @property
    def deadline(self) -> float:
        """When the time is up, on the monotonic clock; infinite without a limit."""
        return self._deadline

    @property
    def signalled(self) -> bool:
        """Whether a signal has come."""
        return self._received is not None

    def requested(self) -> str | None:
        """Return what asks for the end: a signal's name, "the time limit", or nothing."""
        if self._received is not None:
            return signal.Signals(self._received).name
        return TIME_UP if time.monotonic() >= self._deadline else None

    def has_time_for(self, seconds: float) -> bool:
        """Return whether so many seconds are left; never once an end is asked for."""
        return self._received is None and time.monotonic() + seconds < self._deadline

    def grace_left(self) -> float:
        """Return the seconds until what runs is abandoned: infinite while no end is asked for."""
        if self.requested() is None:
            return math.inf
        return min(self._abandon_at, self._deadline) - time.monotonic()

    @contextmanager
    def at_once(self) -> Iterator[None]:
        """Let a signal, or the end of the time, end the block when it comes: for what cannot look at the flag.

        Raises
        ------
        RunStopped
            If SIGTERM or SIGINT has been received, also before, or the time is up.
        """
        self.check()
        alarm = signal.SIGALRM in self._previous
        try:
            try:
                self._at_once = True
                if alarm:
                    signal.setitimer(signal.ITIMER_REAL, max(self._deadline - time.monotonic(), 1e-3))
                yield
            finally:
                self._at_once = False
                if alarm:
                    signal.setitimer(signal.ITIMER_REAL, 0.0)
        except _AtOnce:
            pass
        self.check()

    def check(self, within: float = 0.0) -> None:
        """Raise if the run has to end, or a signal comes within so many seconds.

        Raises
        ------
        RunStopped
            If SIGTERM or SIGINT has been received, or the time is up.
        """
        self._wait_for_signal(within)
        if (who := self.requested()) is not None:
            raise RunStopped(f"stopped by {who}; run again to go on")

    def check_signal(self, within: float = 0.0) -> None:
        """Raise if a signal has come, or comes within so many seconds, whatever the time.

        Raises
        ------
        RunStopped
            If SIGTERM or SIGINT has been received.
        """
        self._wait_for_signal(within)
        if self.signalled:
            self.check()

    def _wait_for_signal(self, within: float) -> None:
        until = time.monotonic() + within
        while self._received is None and time.monotonic() < until:
            time.sleep(POLL_SECONDS)
