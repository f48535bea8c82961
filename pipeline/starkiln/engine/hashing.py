"""Hashing the rows of one input file, whose records in a file of their own are a checkpoint of planning."""

from __future__ import annotations

import hashlib
import os
import uuid
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from starkiln.engine.disk import disk_trouble
from starkiln.engine.keys import digest, file_stamp, rows_key
from starkiln.engine.records import PlannedFile
from starkiln.engine.repeats import RECORD
from starkiln.errors import EnvironmentTrouble
from starkiln.settings import Settings
from starkiln.tables.hashes import id_digests, row_hashes
from starkiln.tables.source import Source, read_rows
from starkiln.tables.write import file_sha256, sync_folder

BATCH_ROWS = 65_536

CHUNK_RECORDS = 1_000_000
"""Records that are handed on at a time."""


def file_key(source: Source, index: int, settings: Settings) -> str:
    """Return a digest of all that decides the records of an input file, whatever other files there are."""
    return _file_key(source, index, rows_key(source, settings))


def _file_key(source: Source, index: int, rows: str) -> str:
    file = source.files[index]
    partition = sorted((key, str(value)) for key, value in file.partition.items())
    return digest([rows, file.path, file.name, *file_stamp(file.path), file.row_group_rows, partition])


def hash_file(
    source: Source, index: int, settings: Settings, folder: Path, between: Callable[[int], None]
) -> PlannedFile:
    """Stream the rows of an input file, and write a record of each one that is selected and has an id.

    Parameters
    ----------
    source
        The input tables.
    index
        The file, as an index into `source.files`.
    settings
        The settings.
    folder
        Receives the records as `<file key>.bin`, whole or not at all.
    between
        Called with the number of rows read after each batch; may raise to stop.

    Raises
    ------
    EnvironmentTrouble
        If the file changes while it is read, or the records cannot be written.
    """
    key, origin = file_key(source, index, settings), source.files[index]
    place = folder / f".{uuid.uuid4().hex}.tmp"
    try:
        with disk_trouble(place), place.open("wb") as records:
            seen = _Seen(settings, len(origin.row_group_rows))
            pieces = [(index, group) for group in range(len(origin.row_group_rows))]
            ends = np.cumsum(origin.row_group_rows)
            for batch in read_rows(source, settings, pieces, settings.used_columns(), BATCH_ROWS):
                records.write(seen.add(batch.table, ends))
                between(batch.read)
            records.flush()
            os.fsync(records.fileno())
        if file_key(source, index, settings) != key:
            raise EnvironmentTrouble(f"input file {origin.path} has changed while it was read; run again")
        size, sha256 = place.stat().st_size, seen.sha256.hexdigest()
        with disk_trouble(place):
            place.replace(folder / f"{key}.bin")
            sync_folder(folder)
    finally:
        place.unlink(missing_ok=True)
    return PlannedFile(
        key=key,
        name=origin.name,
        rows=origin.rows,
        selected=int(seen.groups.sum()),
        groups=tuple(seen.groups.tolist()),
        without_id=seen.without_id,
        content=seen.content(),
        bytes=size,
        sha256=sha256,
    )


class _Seen:
    """What the rows of a file add up to, whatever batches they come in."""

    def __init__(self, settings: Settings, groups: int) -> None:
        self._settings = settings
        self._all = hashlib.sha256()
        self._carried = Carried(settings.input.carry)
        self.groups = np.zeros(groups, np.int64)
        self.without_id = 0
        self.sha256 = hashlib.sha256()

    def add(self, table: pa.Table, ends: NDArray[np.int64]) -> bytes:
        """Take in selected rows, and return their records as bytes."""
        digests, has_id = id_digests(table[self._settings.input.id])
        records = np.empty(table.num_rows, RECORD)
        records["id_hash"], records["more_hash"] = digests.T
        records["row_hash"] = np.where(has_id, row_hashes(table, self._settings), 0)
        records["row"] = table["_input_row"].to_numpy()
        self._all.update(records.tobytes())
        self._carried.add(table)
        group = np.searchsorted(ends, records["row"], side="right")
        self.groups += np.bincount(group, minlength=len(self.groups))
        self.without_id += int(np.count_nonzero(~has_id))
        written = records[has_id].tobytes()
        self.sha256.update(written)
        return written

    def content(self) -> str:
        """Return a digest of the rows with their carried columns."""
        return hashlib.sha256(self._all.digest() + self._carried.digest()).hexdigest()


class Carried:
    """A digest of columns that does not hang on the batches they come in, nor on what lies under a null.

    Parameters
    ----------
    names
        The columns.
    """

    def __init__(self, names: list[str]) -> None:
        self._hashes = {name: [hashlib.sha256() for _ in range(3)] for name in names}

    def add(self, table: pa.Table) -> None:
        """Take in rows."""
        for name, (valid, lengths, values) in self._hashes.items():
            column = table[name].combine_chunks()
            valid.update(pc.is_valid(column).to_numpy(zero_copy_only=False).tobytes())
            if pa.types.is_string(column.type):
                column = column.cast(pa.large_binary()).fill_null(b"")
                lengths.update(pc.binary_length(column).to_numpy().tobytes())
                values.update(_bytes_of(column))
            else:
                values.update(_filled(column).tobytes())

    def digest(self) -> bytes:
        """Return the digest of all rows so far."""
        every = [part.digest() for parts in self._hashes.values() for part in parts]
        return hashlib.sha256(b"".join(every)).digest()


def _filled(column: pa.Array) -> NDArray[Any]:
    if pa.types.is_timestamp(column.type):
        column = column.cast(pa.int64())
    filler = pa.scalar(False if pa.types.is_boolean(column.type) else 0, column.type)
    values: NDArray[Any] = column.fill_null(filler).to_numpy(zero_copy_only=False)
    return values


def _bytes_of(column: pa.Array) -> bytes:
    """Return the bytes of a large binary array without nulls, one after the other."""
    _, offsets, data = column.buffers()
    if data is None:
        return b""
    first, last = np.frombuffer(offsets, np.int64)[[column.offset, column.offset + len(column)]]
    return bytes(memoryview(data)[first:last])


def is_whole(folder: Path, file: PlannedFile) -> bool:
    """Return whether the records of a file that was hashed earlier are there as they were written."""
    place = folder / f"{file.key}.bin"
    with disk_trouble(place):
        return place.is_file() and place.stat().st_size == file.bytes and file_sha256(place) == file.sha256


def read_records(folder: Path, file: PlannedFile) -> Iterator[NDArray[np.void]]:
    """Yield the records of a file, of rows counted within it, many at a time."""
    place = folder / f"{file.key}.bin"
    for first in range(0, file.bytes, CHUNK_RECORDS * RECORD.itemsize):
        with disk_trouble(place):
            yield np.fromfile(place, RECORD, CHUNK_RECORDS, offset=first)
