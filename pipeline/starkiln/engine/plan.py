"""The plan of a run: which rows are selected, what of them there is already, and how the rest is dealt into parts.

The rows are streamed once, file by file; each file's hashes are a checkpoint. Memory is flat in the number of rows:
what is remembered of a row goes to files in the scratch folder, bucketed by the hash of its id, and is joined bucket
by bucket with what is known of earlier results.
"""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Callable, Iterator, Sequence
from dataclasses import asdict, dataclass, replace
from itertools import accumulate
from pathlib import Path, PurePosixPath
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starkiln.engine.buckets import Buckets
from starkiln.engine.disk import disk_trouble
from starkiln.engine.earlier import Earlier, EarlierSource, index_records, index_size
from starkiln.engine.hashing import BATCH_ROWS, file_key, hash_file, is_whole, read_records
from starkiln.engine.join import OLD, join_bucket
from starkiln.engine.keys import content_key, file_stamp
from starkiln.engine.records import Checkpoints, EarlierFile, Plan, PlannedFile, RowCounts, Unit
from starkiln.engine.repeats import RECORD
from starkiln.engine.rownotes import write_notes
from starkiln.engine.stopping import RunStopped
from starkiln.errors import InputError
from starkiln.settings import Settings
from starkiln.tables.source import Source, SourceBatch
from starkiln.tables.write import file_sha256, sync_folder

__all__ = [
    "BATCH_ROWS",
    "Plan",
    "Unit",
    "even_parts",
    "file_stamp",
    "first_rows",
    "load_plan",
    "make_plan",
    "row_positions",
    "rows_per_part",
    "save_plan",
]

SMALLEST_PART = 250
"""Parts are made smaller than asked for to keep all workers busy, but not smaller than this."""

LARGEST_PART = 50_000
"""Where most rows are taken over, parts are made larger than asked for, but not larger than this."""

SECONDS_PER_ROW = 4e-6
"""What hashing a row takes, to tell whether there is time for one file more."""

NOTES = "notes"


def first_rows(source: Source) -> NDArray[np.int64]:
    """Return the number of rows before each file, and after the last one."""
    return np.concatenate([[0], np.cumsum([file.rows for file in source.files])]).astype(np.int64)


def row_positions(source: Source, batch: SourceBatch) -> NDArray[np.int64]:
    """Return each row's place, counted through all files."""
    start = first_rows(source)[batch.file_index]
    return start + batch.table["_input_row"].to_numpy()


def make_plan(
    source: Source,
    settings: Settings,
    workers: int,
    *,
    folder: Path,
    planning: Path,
    scratch: Path,
    checkpoints: Checkpoints,
    earlier: Earlier,
    retry_failed: bool = False,
    between: Callable[[int], None] = lambda rows: None,
    may_begin: Callable[[float], bool] = lambda seconds: True,
    on_file: Callable[[PlannedFile, bool], None] = lambda file, fresh: None,
) -> Plan:
    """Hash the rows, compare them with earlier results, and deal them into parts.

    Parameters
    ----------
    source
        The input tables.
    settings
        The settings.
    workers
        How many workers to keep busy.
    folder
        Receives the notes about rows in `notes/`; made if need be.
    planning
        Holds the hashes of each input file; made if need be.
    scratch
        Receives the buckets.
    checkpoints
        Know the files that have been hashed already.
    earlier
        The results to take rows from.
    retry_failed
        Whether rows that a fault had set aside are tried again.
    between
        Called with the number of rows read after each batch, and with 0 after each bucket; may raise to stop.
    may_begin
        Told the seconds that a file will take about; says whether there is time for it.
    on_file
        Told each file that is done, and whether it was hashed just now.

    Raises
    ------
    InputError
        If the filters leave no row.
    RunStopped
        If there is no time for the next file.
    """
    stamps = tuple(file_stamp(file.path) for file in source.files)
    with disk_trouble(planning):
        planning.mkdir(parents=True, exist_ok=True)
        for stale in planning.glob(".*.tmp"):
            stale.unlink()
    files = []
    for index in range(len(source.files)):
        file, fresh = _planned(source, index, settings, planning, checkpoints, between, may_begin)
        on_file(file, fresh)
        files.append(file)
    pieces = [
        (index, group) for index, origin in enumerate(source.files) for group in range(len(origin.row_group_rows))
    ]
    starts = np.array([0, *accumulate(rows for origin in source.files for rows in origin.row_group_rows)], np.int64)
    selected = np.array([count for file in files for count in file.groups], np.int64)
    if not selected.sum():
        raise InputError(
            f"input.where and input.only leave none of the {starts[-1]} rows of {settings.input.tables}: loosen them"
        )
    firsts = first_rows(source)[:-1]
    joined = _join(files, firsts, planning, scratch, earlier, retry_failed=retry_failed, between=between)
    reused, notes = _write_notes(joined, folder / NOTES, starts)
    part_rows = rows_per_part(
        int(selected.sum()), int((selected - reused).sum()), workers, settings.compute.rows_per_part
    )
    folders = _folders(source, pieces, settings.output.layout)
    return Plan(
        read=int(starts[-1]),
        selected=int(selected.sum()),
        units=tuple(_deal(pieces, folders, starts, selected, reused, part_rows)),
        stamps=stamps,
        rows=replace(joined.rows, without_id=sum(file.without_id for file in files)),
        why=earlier.why,
        earlier=joined.used,
        content=content_key(files, source, settings),
        notes=notes,
    )


def _planned(
    source: Source,
    index: int,
    settings: Settings,
    planning: Path,
    checkpoints: Checkpoints,
    between: Callable[[int], None],
    may_begin: Callable[[float], bool],
) -> tuple[PlannedFile, bool]:
    """Return what is known of an input file, which is hashed unless it has been, and whether it was just now."""
    rows = source.files[index].rows
    known = checkpoints.planned_file(file_key(source, index, settings))
    if known is not None and is_whole(planning, known):
        between(rows)
        return known, False
    if not may_begin(SECONDS_PER_ROW * rows):
        raise RunStopped(f"stopped: {index} of {len(source.files)} input files are read; run again to go on")
    file = hash_file(source, index, settings, planning, between)
    checkpoints.add_planned_file(file)
    return file, True


@dataclass(frozen=True)
class _Joined:
    """The rows of an input beside earlier results.

    Attributes
    ----------
    rows
        What becomes of them; those without an id are left out.
    listed, taken
        The files of earlier results, and whether rows are taken from each.
    drafts
        Files of notes, whose sources count from `listed`.
    """

    rows: RowCounts
    listed: tuple[EarlierFile, ...]
    taken: NDArray[np.bool_]
    drafts: tuple[Path, ...]

    @property
    def used(self) -> tuple[EarlierFile, ...]:
        """The files that rows are taken from."""
        return tuple(file for file, taken in zip(self.listed, self.taken, strict=True) if taken)


def _join(
    files: Sequence[PlannedFile],
    first_rows: NDArray[np.int64],
    planning: Path,
    scratch: Path,
    earlier: Earlier,
    *,
    retry_failed: bool,
    between: Callable[[int], None],
) -> _Joined:
    """Compare the rows of all files with earlier results, bucket by bucket."""
    rows = max(sum(file.selected for file in files), sum(map(index_size, earlier.sources)))
    new, old = Buckets(scratch / "new", rows, RECORD), Buckets(scratch / "old", rows, OLD)
    for file, first_row in zip(files, first_rows, strict=True):
        for records in read_records(planning, file):
            records["row"] += first_row
            new.add(**_fields(records))
    listed = _add_earlier(earlier.sources, old)
    counts, taken, drafts = RowCounts(), np.zeros(len(listed), bool), []
    for number, (ours, theirs) in enumerate(zip(new.drain(), old.drain(), strict=True)):
        notes, here = join_bucket(ours, theirs, retry_failed=retry_failed)
        counts = _sum(counts, here)
        taken[notes["source"][notes["source"] >= 0]] = True
        if len(notes):
            drafts.append(scratch / f"notes-{number:06d}.npy")
            with disk_trouble(drafts[-1]):
                np.save(drafts[-1], notes)
        between(0)
    return _Joined(counts, tuple(listed), taken, tuple(drafts))


def _write_notes(
    joined: _Joined, folder: Path, starts: NDArray[np.int64]
) -> tuple[NDArray[np.int64], tuple[tuple[str, str], ...]]:
    """Write the notes, whose sources count from the files used; return the rows reused in each piece, and the files.

    Parameters
    ----------
    joined
        Holds the drafts, which are removed.
    folder
        Receives the files; made if need be.
    starts
        The first row of each piece, and the row after the last one.
    """
    with disk_trouble(folder):
        folder.mkdir(parents=True, exist_ok=True)
        for stale in folder.iterdir():
            stale.unlink()
    number_used = np.cumsum(joined.taken) - 1
    reused, written = np.zeros(len(starts) - 1, np.int64), []
    for number, draft in enumerate(joined.drafts):
        with disk_trouble(draft):
            notes = np.load(draft, allow_pickle=False)
            draft.unlink()
        sourced = notes["source"] >= 0
        notes["source"][sourced] = number_used[notes["source"][sourced]]
        place = np.searchsorted(starts, notes["row"][sourced], side="right") - 1
        reused += np.bincount(place, minlength=len(reused))
        written.append(write_notes(notes, folder, number))
    return reused, tuple(written)


def _add_earlier(sources: Sequence[EarlierSource], old: Buckets) -> list[EarlierFile]:
    """Fill buckets with what is known of earlier results, and return the files that their numbers stand for."""
    listed: list[EarlierFile] = []
    for source in sources:
        for records in index_records(source, len(listed)):
            old.add(**_fields(records))
        listed += source.files
    return listed


def _fields(records: NDArray[np.void]) -> dict[str, NDArray[Any]]:
    return {name: records[name] for name in records.dtype.names or ()}


def _sum(first: RowCounts, second: RowCounts) -> RowCounts:
    return RowCounts(**{name: count + getattr(second, name) for name, count in asdict(first).items()})


def _deal(
    pieces: list[tuple[int, int]],
    folders: list[str],
    starts: NDArray[np.int64],
    selected: NDArray[np.int64],
    reused: NDArray[np.int64],
    rows_per_part: int,
) -> Iterator[Unit]:
    """Gather pieces of one folder until they hold a part's worth of selected rows, divided evenly."""
    first_piece, rows, number, first_part = 0, 0, 0, 0
    for piece in range(len(pieces)):
        rows += int(selected[piece])
        last_of_folder = folders[piece + 1 : piece + 2] != [folders[piece]]
        if rows == 0 or (rows < rows_per_part and not last_of_folder):
            continue
        part_rows = even_parts(rows, rows_per_part)
        yield Unit(
            number=number,
            folder=folders[piece],
            pieces=tuple(pieces[p] for p in range(first_piece, piece + 1) if selected[p]),
            first_row=int(starts[first_piece]),
            last_row=int(starts[piece + 1]),
            selected=rows,
            first_part=first_part,
            part_rows=part_rows,
            reused=int(reused[first_piece : piece + 1].sum()),
        )
        first_piece, rows = piece + 1, 0
        number, first_part = number + 1, first_part + len(part_rows)


def _folders(source: Source, pieces: list[tuple[int, int]], layout: str) -> list[str]:
    if layout == "flat":
        return ["."] * len(pieces)
    return [str(PurePosixPath(source.files[file].name).parent) for file, _ in pieces]


def rows_per_part(selected: int, to_fit: int, workers: int, most: int) -> int:
    """Return the rows of a part.

    Parts hold `most` rows to fit: more rows in all where most of them are taken over, fewer where that would leave
    workers without work.

    Parameters
    ----------
    selected, to_fit
        Rows in all, and those of them that are to be fitted.
    workers
        How many workers to keep busy.
    most
        The rows of a part that are asked for.
    """
    spread = max(SMALLEST_PART, -(-selected // (4 * workers)))
    return min(spread, max(most, min(LARGEST_PART, most * selected // max(1, to_fit))))


def even_parts(rows: int, rows_per_part: int) -> tuple[int, ...]:
    """Divide rows into the fewest parts of at most `rows_per_part`, as evenly as can be."""
    count = -(-rows // rows_per_part)
    return tuple(rows * (part + 1) // count - rows * part // count for part in range(count))


def save_plan(plan: Plan, folder: Path) -> str:
    """Write a plan, whose notes are there already, into a folder, and return its SHA-256."""
    data = json.dumps(asdict(plan), default=str).encode()
    path = folder / "plan.json"
    with disk_trouble(path):
        with path.open("wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        sync_folder(folder / NOTES)
        sync_folder(folder)
    return hashlib.sha256(data).hexdigest()


def load_plan(folder: Path, sha256: str) -> Plan | None:
    """Return the plan that `save_plan` wrote; None if it, its notes or earlier results are no longer what they were."""
    try:
        data = (folder / "plan.json").read_bytes()
    except FileNotFoundError:
        return None
    if hashlib.sha256(data).hexdigest() != sha256:
        return None
    plan = _plan(json.loads(data))
    notes = [(folder / NOTES / name, digest) for name, digest in plan.notes]
    earlier = [path for file in plan.earlier for path in (file.path, file.draws) if path is not None]
    if not all(path.is_file() for path in [*earlier, *(path for path, _ in notes)]):
        return None
    return plan if all(file_sha256(path) == digest for path, digest in notes) else None


def _plan(data: dict[str, Any]) -> Plan:
    earlier = [
        EarlierFile(Path(file["path"]), file["draws"] and Path(file["draws"]), file["table"])
        for file in data["earlier"]
    ]
    units = [
        Unit(**unit | {"pieces": tuple(map(tuple, unit["pieces"])), "part_rows": tuple(unit["part_rows"])})
        for unit in data["units"]
    ]
    changed = {
        "units": tuple(units),
        "stamps": tuple(map(tuple, data["stamps"])),
        "rows": RowCounts(**data["rows"]),
        "earlier": tuple(earlier),
        "notes": tuple(map(tuple, data["notes"])),
    }
    return Plan(**data | changed)
