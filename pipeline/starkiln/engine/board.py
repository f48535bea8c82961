"""The notice board of a run: progress.json in the run directory, replaced every few seconds while the run lives."""

from __future__ import annotations

import json
import os
import socket
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

FILE_NAME = "progress.json"

SCHEMA = 1
"""Raised when a key goes or changes its meaning; new keys may come without."""

COUNTS = ("selected", "done", "new", "changed", "kept", "failed", "retried", "gone", "duplicate", "set_aside")
"""What is told of rows; in the order of what happens to them."""


class Board:
    """Keeps progress.json up to date; a disk that takes no more does not stop the run here.

    It is a `Progress`: steps are begun and advanced as for a bar. Rows that are done while fitting count as done for
    the whole run.
    """

    def __init__(self, path: Path, name: str, start: datetime) -> None:
        self._path = path
        self._lock = threading.Lock()
        self._step_began = time.monotonic()
        self._facts: dict[str, Any] = {
            "schema": SCHEMA,
            "name": name,
            "host": socket.gethostname(),
            "pid": os.getpid(),
            "start": start.isoformat(timespec="milliseconds"),
            "updated": _now(),
            "moved": _now(),
            "state": "starting",
            "exit_code": None,
            "message": "",
            "build": None,
            "published": None,
            "why": "",
            "step": {"rows": 0, "done": 0},
            "rows": dict.fromkeys(COUNTS, 0),
            "parts": {"total": 0, "done": 0},
            "files": {"total": 0, "planned": 0},
            "workers": 0,
            "rate": None,
            "seconds_left": None,
            "deadline": None,
        }

    def begin(self, what: str, rows: int) -> None:
        """Note that a step of so many rows begins, and tell so at once."""
        with self._lock:
            self._step_began = time.monotonic()
            self._facts |= {"state": what, "step": {"rows": rows, "done": 0}, "moved": _now()}
        self.write()

    def advance(self, rows: int) -> None:
        """Note that so many more rows are done."""
        with self._lock:
            self._facts["step"]["done"] += rows
            if self._facts["state"] == "fitting":
                self._facts["rows"]["done"] += rows
            self._facts["moved"] = _now()

    def note(self, **facts: Any) -> None:
        """Note facts under their keys; those of rows, parts and files join what is there.

        Raises
        ------
        KeyError
            If progress.json has no such key.
        """
        with self._lock:
            for key, value in facts.items():
                before = self._facts[key]
                unknown = set(value) - set(before) if isinstance(before, dict) else set()
                if unknown:
                    raise KeyError(f"{key}: {', '.join(sorted(unknown))}")
                self._facts[key] = before | value if isinstance(before, dict) else value

    def end(self, exit_code: int | None, message: str) -> None:
        """Note how the run has ended, and tell so at once."""
        with self._lock:
            self._facts |= {"state": "ended", "exit_code": exit_code, "message": message}
        self.write()

    @property
    def ended(self) -> bool:
        """Whether the end has been noted."""
        return self._facts["state"] == "ended"

    def write(self) -> None:
        """Replace the file, so that a reader sees the old one or the new one."""
        with self._lock, suppress(OSError):
            self._facts["updated"] = _now()
            self._facts |= self._pace()
            fresh = self._path.with_name(f".{self._path.name}.tmp")
            fresh.write_text(json.dumps(self._facts, indent=1) + "\n")
            fresh.replace(self._path)

    def _pace(self) -> dict[str, float | None]:
        rows, done = self._facts["step"]["rows"], self._facts["step"]["done"]
        spent = time.monotonic() - self._step_began
        if self.ended or not done or spent <= 0:
            return {"rate": None, "seconds_left": None}
        rate = done / spent
        return {"rate": float(f"{rate:.4g}"), "seconds_left": round(max(0, rows - done) / rate, 1)}


@contextmanager
def open_board(run_dir: Path, name: str, start: datetime, seconds: float = 3.0) -> Iterator[Board]:
    """Keep a notice board in a run directory, whose lock must be held, and note the end of the run.

    Parameters
    ----------
    run_dir
        The run directory.
    name
        The run's.
    start
        When it began.
    seconds
        Between one writing and the next.
    """
    board = Board(run_dir / FILE_NAME, name, start)
    board.write()
    left = threading.Event()
    ticking = threading.Thread(target=_tick, args=(board, left, seconds), name="progress.json", daemon=True)
    ticking.start()
    try:
        yield board
    except BaseException as error:
        if not board.ended:
            board.end(None, str(error) or type(error).__name__)
        raise
    finally:
        left.set()
        ticking.join()
        board.write()


def _tick(board: Board, left: threading.Event, seconds: float) -> None:
    while not left.wait(seconds):
        board.write()


def _now() -> str:
    return datetime.now(UTC).isoformat(timespec="milliseconds")
