"""The ledger of a run directory: what has been planned and fitted, kept so that a run stopped at any instant goes on.

One SQLite file, opened by the process that holds the run directory's lock and by nobody else: a rollback journal and
full syncing, so a statement that has returned is on disk. Published generations never need it.
"""

from __future__ import annotations

import json
import os
import shutil
import socket
import sqlite3
from collections import defaultdict
from collections.abc import Callable, Iterator, Mapping
from contextlib import closing, contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from starkiln.engine.records import Attempt, Build, Checkpoints, DonePart, PartFile, PlannedFile, SetAside
from starkiln.errors import EnvironmentTrouble
from starkiln.tables.write import sync_folder

FILE_NAME = "ledger.sqlite"

SCHEMA_VERSION = 1
"""Raised with every change of the tables, together with a step in MIGRATIONS."""

MIGRATIONS: dict[int, Callable[[sqlite3.Connection], None]] = {}
"""By version, what makes the tables of the next one of them."""

SECONDS_TO_WAIT = 60.0
"""For somebody who looks into the file with a tool of theirs."""

PARTS_OF_PACE = 200
"""How many of the newest parts tell how fast rows are fitted."""

SCHEMA = """
CREATE TABLE runs (
    id INTEGER PRIMARY KEY, start TEXT NOT NULL, "end" TEXT, host TEXT NOT NULL, pid INTEGER NOT NULL,
    versions TEXT NOT NULL, exit_code INTEGER, message TEXT
);
CREATE TABLE planned_files (
    file_key TEXT PRIMARY KEY, name TEXT NOT NULL, rows INTEGER NOT NULL, selected INTEGER NOT NULL,
    groups TEXT NOT NULL, without_id INTEGER NOT NULL, content TEXT NOT NULL, bytes INTEGER NOT NULL,
    sha256 TEXT NOT NULL, run INTEGER REFERENCES runs
);
CREATE TABLE builds (
    number INTEGER PRIMARY KEY AUTOINCREMENT, plan_key TEXT NOT NULL, fit_key TEXT NOT NULL,
    refit_all INTEGER NOT NULL, retry_failed INTEGER NOT NULL, plan_sha256 TEXT NOT NULL, parts INTEGER NOT NULL,
    state TEXT NOT NULL CHECK (state IN ('building', 'publishing', 'published', 'earlier')), created TEXT NOT NULL
);
CREATE TABLE parts (
    build INTEGER NOT NULL REFERENCES builds ON DELETE CASCADE, number INTEGER NOT NULL, rows INTEGER NOT NULL,
    fitted INTEGER NOT NULL, run INTEGER REFERENCES runs, host TEXT NOT NULL, finished TEXT NOT NULL,
    files TEXT NOT NULL, reasons TEXT NOT NULL, flags TEXT NOT NULL, audit BLOB NOT NULL, seconds TEXT NOT NULL,
    peak_memory INTEGER NOT NULL, PRIMARY KEY (build, number)
);
CREATE TABLE attempts (
    id INTEGER PRIMARY KEY, build INTEGER NOT NULL REFERENCES builds ON DELETE CASCADE, part INTEGER NOT NULL,
    first INTEGER NOT NULL, last INTEGER NOT NULL, run INTEGER REFERENCES runs, host TEXT NOT NULL,
    ended TEXT NOT NULL, outcome TEXT NOT NULL, error TEXT NOT NULL, trace TEXT NOT NULL
);
CREATE INDEX attempts_of_build ON attempts (build);
CREATE TABLE set_aside (
    build INTEGER NOT NULL REFERENCES builds ON DELETE CASCADE, part INTEGER NOT NULL, row INTEGER NOT NULL,
    reason TEXT NOT NULL, detail TEXT NOT NULL, PRIMARY KEY (build, part, row)
);
"""


@contextmanager
def open_ledger(run_dir: Path) -> Iterator[Ledger]:
    """Open the ledger of a run directory, whose lock must be held; make it, or bring it up to date, if need be.

    Parameters
    ----------
    run_dir
        The run directory.

    Raises
    ------
    EnvironmentTrouble
        If the file is damaged, cannot be written, or was made by a newer version.
    """
    path = run_dir / FILE_NAME
    with _told(path):
        connection = sqlite3.connect(path, timeout=SECONDS_TO_WAIT, isolation_level=None)
    with closing(connection):
        with _told(path):
            _make_ready(connection, path)
        yield Ledger(connection, path)


@contextmanager
def _told(path: Path) -> Iterator[None]:
    """Turn trouble with the file into EnvironmentTrouble that says what to do; a misuse of it stays a bug."""
    try:
        yield
    except (sqlite3.ProgrammingError, sqlite3.IntegrityError):
        raise
    except (sqlite3.Error, OSError) as error:
        reason = getattr(error, "strerror", None) or error
        raise EnvironmentTrouble(
            f"{path}: {reason}; mend it and run again, or move it away: only the unfinished part of the run is lost"
        ) from error


def _make_ready(connection: sqlite3.Connection, path: Path) -> None:
    for pragma in ("journal_mode = DELETE", "synchronous = FULL", "temp_store = MEMORY"):
        connection.execute(f"PRAGMA {pragma}")
    version = connection.execute("PRAGMA user_version").fetchone()[0]
    if version > SCHEMA_VERSION:
        raise EnvironmentTrouble(
            f"{path} has version {version}, made by a newer starkiln, and this one knows {SCHEMA_VERSION}: use the "
            "newer one, or move the file away: only the unfinished part of the run is lost"
        )
    if version == 0:
        with _transaction(connection, 1):
            for statement in SCHEMA.split(";"):
                connection.execute(statement)
    elif version < SCHEMA_VERSION:
        _migrate(connection, path, version)
    connection.execute("PRAGMA foreign_keys = ON")


def _migrate(connection: sqlite3.Connection, path: Path, version: int) -> None:
    """Keep a copy of the file as it is, then change its tables version by version."""
    copy = path.with_name(f"{path.name}.v{version}")
    fresh = copy.with_name(f".{copy.name}.tmp")
    shutil.copyfile(path, fresh)
    sync_folder(fresh)
    os.replace(fresh, copy)
    sync_folder(path.parent)
    for step in range(version, SCHEMA_VERSION):
        with _transaction(connection, step + 1):
            MIGRATIONS[step](connection)


@contextmanager
def _transaction(connection: sqlite3.Connection, version: int) -> Iterator[None]:
    """Change the tables to a version, wholly or not at all."""
    connection.execute("BEGIN IMMEDIATE")
    try:
        yield
        connection.execute(f"PRAGMA user_version = {version:d}")
        connection.execute("COMMIT")
    except BaseException:
        if connection.in_transaction:
            connection.execute("ROLLBACK")
        raise


class Ledger(Checkpoints):
    """An open ledger. What a method writes is on disk when it returns; trouble with the file is EnvironmentTrouble."""

    def __init__(self, connection: sqlite3.Connection, path: Path) -> None:
        self._connection = connection
        self._path = path
        self._run: int | None = None

    def begin_run(self, start: datetime, versions: Mapping[str, str]) -> None:
        """Note that a run has begun; what is noted from here on is its doing."""
        row = {
            "start": start.isoformat(timespec="milliseconds"),
            "host": socket.gethostname(),
            "pid": os.getpid(),
            "versions": json.dumps(dict(versions)),
        }
        self._insert("runs", row)
        self._run = self._rows("SELECT max(id) FROM runs")[0][0]

    def end_run(self, exit_code: int, message: str) -> None:
        """Note how the run has ended."""
        self._do(
            'UPDATE runs SET "end" = ?, exit_code = ?, message = ? WHERE id = ?', _now(), exit_code, message, self._run
        )

    def planned_file(self, key: str) -> PlannedFile | None:
        """Return what is known of an input file whose rows have been hashed, None if nothing."""
        rows = self._rows(
            "SELECT file_key, name, rows, selected, groups, without_id, content, bytes, sha256 "
            "FROM planned_files WHERE file_key = ?",
            key,
        )
        for file_key, name, all_rows, selected, groups, without_id, content, size, sha256 in rows:
            counts = tuple(json.loads(groups))
            return PlannedFile(file_key, name, all_rows, selected, counts, without_id, content, size, sha256)
        return None

    def add_planned_file(self, file: PlannedFile) -> None:
        """Note an input file whose hashes are on disk."""
        row = {
            "file_key": file.key,
            "name": file.name,
            "rows": file.rows,
            "selected": file.selected,
            "groups": json.dumps(file.groups),
            "without_id": file.without_id,
            "content": file.content,
            "bytes": file.bytes,
            "sha256": file.sha256,
            "run": self._run,
        }
        self._insert("planned_files", row)

    def forget_planning(self) -> None:
        """Forget all input files that have been hashed."""
        self._do("DELETE FROM planned_files")

    def builds(self) -> list[Build]:
        """Return every build, oldest first."""
        rows = self._rows(
            "SELECT number, plan_key, fit_key, refit_all, retry_failed, plan_sha256, parts, state "
            "FROM builds ORDER BY number"
        )
        return [
            Build(number, plan, fit, bool(refit), bool(retry), sha256, parts, state)
            for number, plan, fit, refit, retry, sha256, parts, state in rows
        ]

    def next_number(self) -> int:
        """Return a number above that of every build this ledger has known, dropped ones too."""
        rows = self._rows("SELECT seq FROM sqlite_sequence WHERE name = 'builds'")
        return rows[0][0] + 1 if rows else 1

    def begin_build(self, build: Build) -> None:
        """Note a build whose plan is on disk."""
        row = {
            "number": build.number,
            "plan_key": build.plan_key,
            "fit_key": build.fit_key,
            "refit_all": int(build.refit_all),
            "retry_failed": int(build.retry_failed),
            "plan_sha256": build.plan_sha256,
            "parts": build.parts,
            "state": build.state,
            "created": _now(),
        }
        self._insert("builds", row)

    def set_state(self, number: int, state: str) -> None:
        """Change the state of a build (see `records.Build`)."""
        self._do("UPDATE builds SET state = ? WHERE number = ?", state, number)

    def drop_build(self, number: int) -> None:
        """Forget a build with its parts, attempts and rows set aside; its number is not used again."""
        self._do("DELETE FROM builds WHERE number = ?", number)

    def done_parts(self, number: int) -> dict[int, DonePart]:
        """Return the parts of a build whose files are in place, by their number."""
        rows = self._rows(
            "SELECT number, rows, fitted, files, reasons, flags, audit, seconds, peak_memory, host "
            "FROM parts WHERE build = ? ORDER BY number",
            number,
        )
        return {row[0]: _done_part(*row) for row in rows}

    def add_part(self, number: int, part: DonePart) -> None:
        """Note a part of a build, all of whose files are in place; it replaces what was noted of that part."""
        row = {
            "build": number,
            "number": part.number,
            "rows": part.rows,
            "fitted": part.fitted,
            "run": self._run,
            "host": part.host,
            "finished": _now(),
            "files": json.dumps({table: vars(file) for table, file in part.files.items()}),
            "reasons": json.dumps(part.reasons),
            "flags": json.dumps(part.flags),
            "audit": part.audit,
            "seconds": json.dumps(part.seconds),
            "peak_memory": part.peak_memory,
        }
        self._insert("parts", row)

    def forget_part(self, number: int, part: int) -> None:
        """Forget a part of a build, which is then to be done again."""
        self._do("DELETE FROM parts WHERE build = ? AND number = ?", number, part)

    def set_aside(self, number: int) -> dict[int, tuple[SetAside, ...]]:
        """Return the rows of a build that no stage can do, by part and in order."""
        rows = self._rows("SELECT part, row, reason, detail FROM set_aside WHERE build = ? ORDER BY part, row", number)
        found: defaultdict[int, list[SetAside]] = defaultdict(list)
        for part, row, reason, detail in rows:
            found[part].append(SetAside(row, reason, detail))
        return {part: tuple(rows) for part, rows in found.items()}

    def add_set_aside(self, number: int, part: int, row: SetAside) -> None:
        """Note a row that no stage can do."""
        values = {"build": number, "part": part, "row": row.row, "reason": row.reason, "detail": row.detail}
        self._insert("set_aside", values)

    def add_attempt(self, number: int, attempt: Attempt) -> None:
        """Note a try at rows of a part."""
        row = {"build": number, **vars(attempt), "run": self._run, "ended": _now()}
        self._insert("attempts", row)

    def fit_rates(self) -> list[float]:
        """Return the seconds that a fitted row took, of each of the newest parts that had any, newest first."""
        rows = self._rows(
            f"SELECT seconds, fitted FROM parts WHERE fitted > 0 ORDER BY rowid DESC LIMIT {PARTS_OF_PACE:d}"
        )
        return [(sum(spent.values()) - spent.get("keep", 0.0)) / fitted for spent, fitted in _decoded(rows)]

    def _insert(self, table: str, row: Mapping[str, Any]) -> None:
        """Write a row, in place of one that has the same key."""
        names, marks = ", ".join(row), ", ".join("?" * len(row))
        verb = "INSERT" if table == "builds" else "INSERT OR REPLACE"
        self._do(f"{verb} INTO {table} ({names}) VALUES ({marks})", *row.values())

    def _do(self, statement: str, *values: Any) -> None:
        with _told(self._path):
            self._connection.execute(statement, values)

    def _rows(self, statement: str, *values: Any) -> list[Any]:
        with _told(self._path):
            return self._connection.execute(statement, values).fetchall()


def _decoded(rows: list[Any]) -> Iterator[tuple[dict[str, float], int]]:
    return ((json.loads(seconds), fitted) for seconds, fitted in rows)


def _done_part(
    number: int,
    rows: int,
    fitted: int,
    files: str,
    reasons: str,
    flags: str,
    audit: bytes,
    seconds: str,
    peak_memory: int,
    host: str,
) -> DonePart:
    found = {table: PartFile(**facts) for table, facts in json.loads(files).items()}
    counts = json.loads(reasons), json.loads(flags)
    return DonePart(number, rows, fitted, found, *counts, audit, json.loads(seconds), peak_memory, host)


def _now() -> str:
    return datetime.now(UTC).isoformat(timespec="milliseconds")
