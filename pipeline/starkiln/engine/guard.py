"""The mark that a task has begun, and the end of a task that hangs."""

from __future__ import annotations

import faulthandler
import json
import os
import socket
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from starkiln.engine.disk import disk_trouble
from starkiln.engine.records import Guard, StartedBefore

MOST_TRACE = 20_000
"""Characters of a trace that are kept."""


@contextmanager
def guarded(guard: Guard) -> Iterator[None]:
    """Mark a task as begun while it lasts, and end this process if it lasts too long.

    A process that dies within leaves the mark behind, so that whoever is given the task next knows which one was at
    work. The limit ends even code that never returns to Python; where each thread then was is written beside the mark.

    Parameters
    ----------
    guard
        The mark, in a folder that is there, and the limit.

    Raises
    ------
    StartedBefore
        If the mark is there already; it stays. The kind is "slow" if the limit ended the process, else "died".
    EnvironmentTrouble
        If the mark cannot be made.
    """
    _leave_mark(guard)
    try:
        with disk_trouble(guard.mark):
            file = trace_path(guard.mark).open("w")
        with file:
            faulthandler.dump_traceback_later(guard.limit_s, exit=True, file=file)
            try:
                yield
            finally:
                faulthandler.cancel_dump_traceback_later()
    finally:
        remove_mark(guard.mark)


def trace_path(mark: Path) -> Path:
    """Return where a task that hangs leaves its trace."""
    return mark.with_name(f"{mark.name}.trace")


def read_trace(mark: Path) -> str:
    """Return the trace that a hung task left beside its mark, empty if it did not hang."""
    try:
        return trace_path(mark).read_text(errors="replace")[:MOST_TRACE]
    except FileNotFoundError:
        return ""


def remove_mark(mark: Path) -> None:
    """Remove a mark and its trace, as far as they are there."""
    for path in (mark, trace_path(mark)):
        with suppress(OSError):
            path.unlink()


def _leave_mark(guard: Guard) -> None:
    facts = {"start": time.time(), "limit_s": guard.limit_s, "host": socket.gethostname(), "pid": os.getpid()}
    with disk_trouble(guard.mark):
        try:
            file = guard.mark.open("x")
        except FileExistsError:
            trace = read_trace(guard.mark)
            raise StartedBefore("slow" if trace else "died", trace) from None
        with file:
            json.dump(facts, file)
