"""The log of a run: one JSON line for each event."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, BinaryIO

LOGS_KEPT = 30


class EventLog:
    """Writes events to one open file without a buffer; a disk that takes no more does not stop the run here."""

    def __init__(self, file: BinaryIO) -> None:
        self._file = file

    def write(self, event: str, **fields: Any) -> None:
        """Append an event with the time it happened and its fields."""
        line = {"time": datetime.now(UTC).isoformat(timespec="milliseconds"), "event": event, **fields}
        with suppress(OSError):
            self._file.write((json.dumps(line, default=str) + "\n").encode())


@contextmanager
def open_log(run_dir: Path, start: datetime) -> Iterator[EventLog]:
    """Open the log of a run that starts now, and remove the oldest ones beyond the number kept."""
    folder = run_dir / "logs"
    folder.mkdir(exist_ok=True)
    path = folder / f"{start:%Y%m%dT%H%M%S}.{start.microsecond // 1000:03d}Z.jsonl"
    with path.open("wb", buffering=0) as file:
        for old in sorted(folder.glob("*.jsonl"))[:-LOGS_KEPT]:
            old.unlink()
        yield EventLog(file)
