"""The plan of a run: which rows are selected, which ids repeat, and how rows are dealt into parts.

The ids are streamed once. Memory is flat in the number of rows: what is remembered of a row goes to
files in the scratch folder, bucketed by the hash of its id, and is joined bucket by bucket.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path, PurePosixPath

import numpy as np
from numpy.typing import NDArray

from starkiln.engine.buckets import Buckets
from starkiln.engine.disk import disk_trouble
from starkiln.engine.repeats import RECORD, id_digests, mark_repeats, write_marks
from starkiln.errors import EnvironmentTrouble, InputError
from starkiln.settings import Settings
from starkiln.tables.source import Source, SourceBatch, read_rows

BATCH_ROWS = 65_536
SMALLEST_PART = 250
"""Parts are made smaller than asked for to keep all workers busy, but not smaller than this."""


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
    """

    number: int
    folder: str
    pieces: tuple[tuple[int, int], ...]
    first_row: int
    last_row: int
    selected: int
    first_part: int
    part_rows: tuple[int, ...]


@dataclass(frozen=True)
class Plan:
    """What a run will do.

    Attributes
    ----------
    read, selected
        Rows in the input, and rows that pass the filters.
    duplicates
        Selected rows whose id has come before.
    units
        The work, in input order.
    stamps
        Size in bytes and modification time in nanoseconds of each input file.
    """

    read: int
    selected: int
    duplicates: int
    units: tuple[Unit, ...]
    stamps: tuple[tuple[int, int], ...]

    @property
    def parts(self) -> int:
        """The number of parts."""
        return sum(len(unit.part_rows) for unit in self.units)


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
    scratch: Path,
    between_batches: Callable[[int], None] = lambda rows: None,
) -> Plan:
    """Stream the ids, find those that repeat, and deal the selected rows into parts.

    Parameters
    ----------
    source
        The input tables.
    settings
        The settings.
    workers
        How many workers to keep busy.
    scratch
        Receives the buckets and the marks of repeated ids.
    between_batches
        Called with the number of rows read after each batch, and with 0 after each bucket; may raise to stop.

    Raises
    ------
    InputError
        If the filters leave no row.
    """
    stamps = tuple(file_stamp(file.path) for file in source.files)
    pieces, piece_rows = _pieces(source)
    starts = np.concatenate([[0], np.cumsum(piece_rows)]).astype(np.int64)
    selected = np.zeros(len(pieces), np.int64)
    buckets = Buckets(scratch / "ids", int(starts[-1]), RECORD)
    for batch in read_rows(source, settings, pieces, [settings.input.id], BATCH_ROWS):
        positions = row_positions(source, batch)
        selected += np.bincount(np.searchsorted(starts, positions, side="right") - 1, minlength=len(pieces))
        digests, has_id = id_digests(batch.table[settings.input.id])
        buckets.add(id_hash=digests[has_id, 0], more_hash=digests[has_id, 1], row=positions[has_id])
        between_batches(batch.read)
    if not selected.sum():
        raise InputError(
            f"input.where and input.only leave none of the {starts[-1]} rows of {settings.input.tables}: loosen them"
        )
    duplicates = 0
    folder = scratch / "marks"
    with disk_trouble(folder):
        folder.mkdir()
    for number, records in enumerate(buckets.drain()):
        marks = mark_repeats(np.stack([records["id_hash"], records["more_hash"]], axis=1), records["row"])
        duplicates += int((marks & 1).sum())
        if len(marks):
            write_marks(marks, folder, number)
        between_batches(0)
    part_rows = rows_per_part(int(selected.sum()), workers, settings.compute.rows_per_part)
    folders = _folders(source, pieces, settings.output.layout)
    units = tuple(_deal(pieces, folders, starts, selected, part_rows))
    return Plan(int(starts[-1]), int(selected.sum()), duplicates, units, stamps)


def file_stamp(path: Path) -> tuple[int, int]:
    """Return the size and the modification time in nanoseconds of a file.

    Raises
    ------
    EnvironmentTrouble
        If it is gone or cannot be read.
    """
    try:
        status = os.stat(path)
    except OSError as error:
        raise EnvironmentTrouble(f"input file {path}: {error.strerror}; run again when it is back") from error
    return status.st_size, status.st_mtime_ns


def _pieces(source: Source) -> tuple[list[tuple[int, int]], list[int]]:
    pieces, rows = [], []
    for file_index, file in enumerate(source.files):
        for row_group, group_rows in enumerate(file.row_group_rows):
            pieces.append((file_index, row_group))
            rows.append(group_rows)
    return pieces, rows


def _deal(
    pieces: list[tuple[int, int]],
    folders: list[str],
    starts: NDArray[np.int64],
    selected: NDArray[np.int64],
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
        )
        first_piece, rows = piece + 1, 0
        number, first_part = number + 1, first_part + len(part_rows)


def _folders(source: Source, pieces: list[tuple[int, int]], layout: str) -> list[str]:
    if layout == "flat":
        return ["."] * len(pieces)
    return [str(PurePosixPath(source.files[file].name).parent) for file, _ in pieces]


def rows_per_part(rows: int, workers: int, most: int) -> int:
    """Return the rows of a part: `most`, or fewer where that would leave workers without work."""
    return min(most, max(SMALLEST_PART, -(-rows // (4 * workers))))


def even_parts(rows: int, rows_per_part: int) -> tuple[int, ...]:
    """Divide rows into the fewest parts of at most `rows_per_part`, as evenly as can be."""
    count = -(-rows // rows_per_part)
    return tuple(rows * (part + 1) // count - rows * part // count for part in range(count))
