"""Where the work of a run is kept, so that it is never lost: files of parts in place, then a line in the ledger."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from starkiln.engine.audits import trimmed
from starkiln.engine.bench import Bench
from starkiln.engine.closing import part_path
from starkiln.engine.disk import disk_trouble
from starkiln.engine.events import EventLog
from starkiln.engine.ledger import Ledger
from starkiln.engine.records import Attempt, Cut, DonePart, Fitted, PartFile, SetAside
from starkiln.engine.tally import Tally
from starkiln.tables.write import file_sha256, publish


def part_tables(draws: bool) -> tuple[str, ...]:
    """Return the tables that each part has a file of."""
    return ("catalogue", "rejected", "index", *["draws"] * draws)


def make_part_folders(parts: Path, draws: bool) -> None:
    """Make the folders of the parts' files, where they are not there yet."""
    for table in part_tables(draws):
        with disk_trouble(parts):
            (parts / table).mkdir(parents=True, exist_ok=True)


def sound_parts(
    parts: Path, ledger: Ledger, number: int, log: EventLog, between: Callable[[], None] = lambda: None
) -> dict[int, DonePart]:
    """Return the parts of a build whose files are as the ledger says, and strike the others out.

    Parameters
    ----------
    parts
        The folder of the parts' files.
    ledger
        The ledger.
    number
        The build.
    log
        Is told of parts that are struck out.
    between
        Called between parts; may raise to stop.
    """
    sound = {}
    for part, done in ledger.done_parts(number).items():
        between()
        wrong = [table for table, file in done.files.items() if not _as_written(part_path(parts, table, part), file)]
        if wrong:
            ledger.forget_part(number, part)
            log.write("recover", build=number, part=part, damaged=wrong)
        else:
            sound[part] = done
    return sound


def _as_written(path: Path, file: PartFile) -> bool:
    try:
        return path.stat().st_size == file.bytes and file_sha256(path) == file.sha256
    except FileNotFoundError:
        return False


class PartStore:
    """Keeps what the workers of a build hand over, counts it, and tells of it.

    Parameters
    ----------
    parts
        The folder of the parts' files.
    number
        The build.
    tally
        The sums over the parts done so far.
    bench
        Ledger, notice board and log.
    """

    def __init__(self, parts: Path, number: int, tally: Tally, bench: Bench) -> None:
        self._parts = parts
        self._number = number
        self._tally = tally
        self._bench = bench

    def cut_done(self, cut: Cut) -> None:
        """Count a unit that has been cut."""
        self._tally.add_cut(cut)

    def part_done(self, fitted: Fitted) -> None:
        """Put a part's files in place, then write it down."""
        files = {}
        for table, written in fitted.written.items():
            publish(written, part_path(self._parts, table, fitted.number))
            files[table] = PartFile(written.rows, written.size, written.sha256)
        part = DonePart(
            number=fitted.number,
            rows=fitted.rows,
            fitted=fitted.fitted,
            files=files,
            reasons=fitted.reasons,
            flags=fitted.flags,
            audit=trimmed(fitted.audit, self._tally.audit),
            seconds=fitted.seconds,
            peak_memory=fitted.peak_memory,
            host=fitted.host,
        )
        self._bench.ledger.add_part(self._number, part)
        self._tally.add_part(part)
        self._bench.gains.parts += 1
        self._bench.progress.advance(fitted.rows)
        self._bench.board.note(parts={"done": self._tally.parts})
        digests = {name: file.sha256 for name, file in files.items()}
        self._bench.log.write("part", number=part.number, rows=part.rows, sha256=digests)

    def attempt(self, attempt: Attempt) -> None:
        """Write down a try at some rows; one that failed goes to the log as well."""
        self._bench.ledger.add_attempt(self._number, attempt)
        if attempt.outcome != "done":
            told = {"outcome": attempt.outcome, "error": attempt.error, "host": attempt.host, "trace": attempt.trace}
            self._bench.log.write("attempt", part=attempt.part, first=attempt.first, last=attempt.last, **told)

    def row_set_aside(self, part: int, row: SetAside) -> None:
        """Write down a row that no stage can do."""
        self._bench.ledger.add_set_aside(self._number, part, row)
        self._tally.set_aside += 1
        self._bench.board.note(rows={"set_aside": self._tally.set_aside})
        self._bench.log.write("set_aside", part=part, row=row.row, reason=row.reason, detail=row.detail)
