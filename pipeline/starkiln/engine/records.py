"""The records that the parts of the engine hand to each other, and the promises they make."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Protocol

from starkiln.tables.write import WrittenFile


@dataclass(frozen=True)
class SetAside:
    """A row of a part that no stage can do: its place in the part, the reason in a few words, and the detail."""

    row: int
    reason: str
    detail: str


@dataclass(frozen=True)
class RowCounts:
    """What became of the selected rows of an input beside earlier results.

    Attributes
    ----------
    new, changed
        To be fitted: the id was not there, or its row was another.
    kept
        Their results are taken over.
    failed, retried
        Rows that a fault had set aside: left so, and tried again.
    duplicate, without_id
        Later copies of an id, and rows without one.
    gone
        Ids of the published generation that are no longer there.
    """

    new: int = 0
    changed: int = 0
    kept: int = 0
    failed: int = 0
    retried: int = 0
    duplicate: int = 0
    without_id: int = 0
    gone: int = 0


@dataclass(frozen=True)
class EarlierFile:
    """A file of earlier results, with its twin of draws if there is one; ``table`` is "catalogue" or "rejected"."""

    path: Path
    draws: Path | None
    table: str


@dataclass(frozen=True)
class Unit:
    """Row groups that one task reads once and cuts into parts.

    Attributes
    ----------
    number
        Counted from 0 in input order.
    folder
        Where its rows go below the catalogue: "." or, in a hive layout, the input's partition folders.
    pieces
        The (file, row group) pairs, in input order.
    first_row, last_row
        The rows it spans, counted through all files; the last one is not included.
    selected
        Rows that pass the filters.
    first_part
        The number of its first part.
    part_rows
        Rows of each of its parts.
    reused
        Selected rows whose results are taken from earlier ones.
    """

    number: int
    folder: str
    pieces: tuple[tuple[int, int], ...]
    first_row: int
    last_row: int
    selected: int
    first_part: int
    part_rows: tuple[int, ...]
    reused: int = 0


@dataclass(frozen=True, kw_only=True)
class Plan:
    """What a run will do.

    Attributes
    ----------
    read, selected
        Rows in the input, and rows that pass the filters.
    units
        The work, in input order.
    stamps
        Size in bytes and modification time in nanoseconds of each input file.
    rows
        What becomes of the selected rows.
    why
        Why nothing earlier can be taken over, in words; empty where it can, or where there is nothing.
    earlier
        The files of earlier results; notes count from this list.
    content
        A digest of all that was selected, in order.
    notes
        The files of notes about rows, with their SHA-256.
    """

    read: int
    selected: int
    units: tuple[Unit, ...]
    stamps: tuple[tuple[int, int], ...]
    rows: RowCounts = field(default_factory=RowCounts)
    why: str = ""
    earlier: tuple[EarlierFile, ...] = ()
    content: str = ""
    notes: tuple[tuple[str, str], ...] = ()

    @property
    def parts(self) -> int:
        """The number of parts."""
        return sum(len(unit.part_rows) for unit in self.units)

    @property
    def duplicates(self) -> int:
        """Selected rows whose id has come before."""
        return self.rows.duplicate


@dataclass(frozen=True)
class PlannedFile:
    """What is known of an input file whose rows have been hashed.

    Attributes
    ----------
    key
        Digest of all that decides its hashes.
    name
        Its name, for people.
    rows, selected, without_id
        Rows in it, rows that pass the filters, and those of them without an id.
    groups
        Selected rows of each row group.
    content
        Digest of its selected rows, in order.
    bytes, sha256
        Size and digest of the file of hashes.
    """

    key: str
    name: str
    rows: int
    selected: int
    groups: tuple[int, ...]
    without_id: int
    content: str
    bytes: int
    sha256: str


class Checkpoints(Protocol):
    """Where planning notes the files it has done."""

    def planned_file(self, key: str) -> PlannedFile | None:
        """Return what is known of a file, None if nothing."""

    def add_planned_file(self, file: PlannedFile) -> None:
        """Note a file."""


@dataclass(frozen=True)
class PartFile:
    """A file of a part that is in place."""

    rows: int
    bytes: int
    sha256: str


@dataclass(frozen=True)
class DonePart:
    """A part whose files are in place, by table, with its share of the run's counts."""

    number: int
    rows: int
    fitted: int
    files: dict[str, PartFile]
    reasons: dict[str, int]
    flags: dict[str, int]
    audit: bytes
    seconds: dict[str, float]
    peak_memory: int
    host: str


@dataclass(frozen=True)
class Build:
    """A generation in the making.

    ``state`` is "building", "publishing", "published", or "earlier": given up, its results of use to a later one.
    """

    number: int
    plan_key: str
    fit_key: str
    refit_all: bool
    retry_failed: bool
    plan_sha256: str
    parts: int
    state: str


@dataclass(frozen=True)
class Attempt:
    """A try at the rows first to last (not included) of a part.

    ``outcome`` is "done", "raised", "slow", "died" or "environment".
    """

    part: int
    first: int
    last: int
    outcome: str
    error: str = ""
    host: str = ""
    trace: str = ""


@dataclass(frozen=True)
class Part:
    """The rows of one part, cut from the input and waiting in a file.

    ``fits`` of them are to be fitted, the others taken over; ``set_aside`` are known to be beyond any stage.
    """

    number: int
    rows: int
    path: Path
    fits: int
    set_aside: tuple[SetAside, ...] = ()


@dataclass(frozen=True)
class Cut:
    """The parts of a unit, and the seconds it took to read them."""

    parts: tuple[Part, ...]
    seconds: float
    peak_memory: int


@dataclass(frozen=True)
class Fitted:
    """What became of the rows first to last (not included) of a part.

    Attributes
    ----------
    fitted
        Rows that went through the stages.
    written
        The files, by table name ("catalogue", "rejected", "index" and, if kept, "draws"); not yet in place.
    reasons, flags
        Rejected rows by reason, and catalogue rows by flag.
    audit
        What the rows' stars say of the zero points, packed.
    seconds
        Time by stage.
    """

    number: int
    first: int
    last: int
    fitted: int
    written: dict[str, WrittenFile]
    reasons: dict[str, int]
    flags: dict[str, int]
    audit: bytes
    seconds: dict[str, float]
    peak_memory: int
    host: str

    @property
    def rows(self) -> int:
        """The number of rows."""
        return self.last - self.first


@dataclass(frozen=True)
class Guard:
    """Where a task leaves the mark that it has begun, and the seconds after which it is hung."""

    mark: Path
    limit_s: float


@dataclass(frozen=True)
class Identity:
    """What a worker must agree on: digests of the package and of the libraries, and a nonce in the run's folder."""

    method: str
    libraries: str
    nonce: str
    nonce_file: Path


class StartedBefore(Exception):
    """A task had begun before, and did not come to an end: it was "slow", or its worker "died"."""

    def __init__(self, kind: str, trace: str = "") -> None:
        super().__init__(kind, trace)
        self.kind = kind
        self.trace = trace


class WorkerDisagrees(Exception):
    """A worker is not of this run's version, or does not see its folder."""

    def __init__(self, address: str, text: str) -> None:
        super().__init__(address, text)
        self.address = address
        self.text = text


class WorkSink(Protocol):
    """What is told of work as it goes on."""

    def cut_done(self, cut: Cut) -> None:
        """Take note of a unit that has been cut."""

    def part_done(self, fitted: Fitted) -> None:
        """Put a part's files in place, then write it down."""

    def attempt(self, attempt: Attempt) -> None:
        """Take note of a try that failed or succeeded."""

    def row_set_aside(self, part: int, row: SetAside) -> None:
        """Write down a row that no stage can do."""


class Stop(Protocol):
    """Whether, and how soon, a run has to end."""

    def check(self, within: float = 0.0) -> None:
        """Raise RunStopped if the run has to end, or will within so many seconds."""

    def requested(self) -> str | None:
        """Return what asks for the end: a signal's name, "the time limit", or nothing."""

    def has_time_for(self, seconds: float) -> bool:
        """Return whether so many seconds are left; never once an end is asked for."""

    def grace_left(self) -> float:
        """Return the seconds until what runs is abandoned: infinite while no end is asked for."""
