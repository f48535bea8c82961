"""Writing Parquet so that a name holds either a whole, verified file or nothing."""

from __future__ import annotations

import hashlib
import os
import uuid
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq

from starkiln.errors import EnvironmentTrouble
from starkiln.tables.votable import stored_widths, string_widths, with_header

ROW_GROUP_ROWS = 50_000
ROW_GROUP_BYTES = 32_000_000
"""Most rows of a row group, and most bytes of its fixed-width values, whatever the parts were."""

_READ_FAILURES = (OSError, pa.ArrowInvalid)


@dataclass(frozen=True)
class WrittenFile:
    """A verified temporary file that waits for its name.

    Attributes
    ----------
    tmp_path
        Where it lies; a hidden name that no reader of the folder takes.
    rows, size
        Number of rows, and of bytes.
    sha256
        Digest of the file's bytes, in hexadecimal.
    """

    tmp_path: Path
    rows: int
    size: int
    sha256: str


@dataclass(frozen=True)
class PackedFile:
    """A published file of a packed table."""

    path: Path
    rows: int
    sha256: str


def write_part(table: pa.Table, path: Path) -> WrittenFile:
    """Write a table to a hidden temporary file beside `path`, flush it to disk and verify it.

    Raises
    ------
    EnvironmentTrouble
        If the disk refuses the file or gives it back otherwise than written.
    """
    schema = with_header(table.schema, string_widths(table))
    tmp_path = _temporary_name(path)
    with _disk_trouble(path), _removed_on_failure(tmp_path):
        with _open_writer(tmp_path, schema) as writer:
            writer.write_table(table.replace_schema_metadata(schema.metadata), row_group_size=group_rows(schema))
        return _finish(tmp_path, table.num_rows)


def publish(written: WrittenFile, final_path: Path) -> None:
    """Give a written file its name by one rename, replacing what had it, and make the rename durable.

    Raises
    ------
    EnvironmentTrouble
        If the file is gone or the disk refuses the rename.
    """
    with _disk_trouble(final_path):
        os.replace(written.tmp_path, final_path)
        sync_folder(final_path.parent)


def sync_folder(folder: Path) -> None:
    """Flush a folder's entries to disk."""
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def file_sha256(path: Path) -> str:
    """Return the SHA-256 digest of a file's bytes, in hexadecimal."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


class Packer:
    """Packs tables, in the order they come, into part-000000.parquet, part-000001.parquet ... of a folder.

    The bytes depend on the rows and their order only, not on how the rows were cut into tables. Memory holds
    one row group. Use as a context manager: leaving it by an exception publishes nothing more.

    Parameters
    ----------
    folder
        Where the files go; must exist.
    schema
        Schema of every table added.
    rows_per_file
        Rows of every file but the last.
    widths
        Characters each string column needs over all tables to come (see `string_widths`).
    """

    def __init__(
        self, folder: Path, schema: pa.Schema, rows_per_file: int, widths: dict[str, int] | None = None
    ) -> None:
        self.folder = folder
        self.schema = with_header(schema, widths or {})
        self.rows_per_file = rows_per_file
        self.files: list[PackedFile] = []
        self._group_rows = group_rows(schema)
        self._waiting: list[pa.Table] = []
        self._waiting_rows = 0
        self._file_rows = 0
        self._tmp_path: Path | None = None
        self._writer: pq.ParquetWriter | None = None

    def __enter__(self) -> Packer:
        return self

    def __exit__(self, kind: type[BaseException] | None, *_: object) -> None:
        if kind is None:
            self.close()
        else:
            self._abandon()

    def add(self, table: pa.Table) -> None:
        """Append the rows of a table.

        Raises
        ------
        EnvironmentTrouble
            If the disk refuses a file.
        """
        while table.num_rows:
            room = self._group_room()
            piece, table = table.slice(0, room), table.slice(room)
            self._waiting.append(piece.select(self.schema.names).cast(self.schema))
            self._waiting_rows += piece.num_rows
            if piece.num_rows == room:
                self._write_group()

    def close(self) -> list[PackedFile]:
        """Write what waits and publish the last file; without any row, publish one empty file."""
        if self._waiting_rows or not (self.files or self._file_rows):
            self._write_group()
        if self._file_rows or not self.files:
            self._publish_file()
        return self.files

    def _group_room(self) -> int:
        """Return the rows still to come before the row group or the file is full."""
        return min(self._group_rows, self.rows_per_file - self._file_rows) - self._waiting_rows

    def _write_group(self) -> None:
        # One contiguous chunk a group: page boundaries would otherwise follow the chunks, so the parts.
        group = pa.concat_tables(self._waiting or [self.schema.empty_table()]).combine_chunks()
        with self._abandoned_on_failure():
            if self._writer is None:
                self._tmp_path = _temporary_name(self._next_path())
                self._writer = _open_writer(self._tmp_path, self.schema)
            self._writer.write_table(group, row_group_size=self._group_rows)
        self._waiting, self._waiting_rows = [], 0
        self._file_rows += group.num_rows
        if self._file_rows == self.rows_per_file:
            self._publish_file()

    def _publish_file(self) -> None:
        assert self._writer is not None
        assert self._tmp_path is not None
        path = self._next_path()
        with self._abandoned_on_failure():
            self._writer.close()
            written = _finish(self._tmp_path, self._file_rows)
            publish(written, path)
        self.files.append(PackedFile(path, written.rows, written.sha256))
        self._writer = self._tmp_path = None
        self._file_rows = 0

    def _next_path(self) -> Path:
        return self.folder / f"part-{len(self.files):06d}.parquet"

    @contextmanager
    def _abandoned_on_failure(self) -> Iterator[None]:
        try:
            with _disk_trouble(self._next_path()):
                yield
        except BaseException:
            self._abandon()
            raise

    def _abandon(self) -> None:
        if self._writer is not None and self._tmp_path is not None:
            with _removed(self._tmp_path):
                self._writer.close()
        self._writer = self._tmp_path = None


def group_rows(schema: pa.Schema) -> int:
    """Return the rows of a row group of a schema: fewer the wider its rows are."""
    row_bytes = sum(_value_bytes(field.type) for field in schema)
    return max(1, min(ROW_GROUP_ROWS, ROW_GROUP_BYTES // max(1, row_bytes)))


def _value_bytes(kind: pa.DataType) -> int:
    if pa.types.is_fixed_size_list(kind):
        return kind.list_size * _value_bytes(kind.value_type)
    return 8 if pa.types.is_string(kind) or pa.types.is_boolean(kind) else kind.bit_width // 8


def pack(paths: Sequence[Path], folder: Path, schema: pa.Schema, rows_per_file: int) -> list[PackedFile]:
    """Stream part files, in order, into files of `rows_per_file` rows; no part at all gives one empty file.

    Parameters
    ----------
    paths
        Files of `write_part`.
    folder
        Where part-000000.parquet and so on go; must exist.
    schema
        Schema of the packed files.
    rows_per_file
        Rows of every file but the last.

    Raises
    ------
    EnvironmentTrouble
        If a part cannot be read or the disk refuses a file.
    """
    widths: dict[str, int] = {}
    for path in paths:
        with _disk_trouble(path, _READ_FAILURES):
            for name, width in stored_widths(pq.read_schema(path)).items():
                widths[name] = max(width, widths.get(name, 0))
    with Packer(folder, schema, rows_per_file, widths) as packer:
        for path in paths:
            for table in read_groups(path):
                packer.add(table)
    return packer.files


def read_groups(path: Path, groups: Sequence[int] | None = None) -> Iterator[pa.Table]:
    """Yield row groups, all unless some are asked for, of a file this package wrote, page checksums verified.

    Raises
    ------
    EnvironmentTrouble
        If the file is gone or damaged.
    """
    with (
        _disk_trouble(path, _READ_FAILURES),
        pq.ParquetFile(path, pre_buffer=False, page_checksum_verification=True) as file,
    ):
        for group in range(file.num_row_groups) if groups is None else groups:
            yield file.read_row_group(group, use_threads=False)


def group_sizes(path: Path) -> list[int]:
    """Return the rows of each row group of a file.

    Raises
    ------
    EnvironmentTrouble
        If the file is gone or damaged.
    """
    with _disk_trouble(path, _READ_FAILURES):
        metadata = pq.read_metadata(path)
        return [metadata.row_group(group).num_rows for group in range(metadata.num_row_groups)]


def _open_writer(path: Path, schema: pa.Schema) -> pq.ParquetWriter:
    """Open a writer: zstd, page checksums, floats as split byte streams, everything else as dictionaries."""
    floats = [_leaf(field) for field in schema if _is_float(field.type)]
    others = [_leaf(field) for field in schema if not _is_float(field.type)]
    return pq.ParquetWriter(
        path,
        schema,
        compression="zstd",
        use_dictionary=others,
        column_encoding=dict.fromkeys(floats, "BYTE_STREAM_SPLIT"),
        write_page_checksum=True,
    )


def _leaf(field: pa.Field) -> str:
    """Return the Parquet path of a field's values."""
    return f"{field.name}.list.element" if pa.types.is_fixed_size_list(field.type) else field.name


def _is_float(kind: pa.DataType) -> bool:
    value = kind.value_type if pa.types.is_fixed_size_list(kind) else kind
    return pa.types.is_float32(value) or pa.types.is_float64(value)


def _temporary_name(path: Path) -> Path:
    return path.with_name(f".{path.name}.{uuid.uuid4().hex}.tmp")


def _finish(tmp_path: Path, rows: int) -> WrittenFile:
    """Flush a closed file to disk, and read its footer and bytes back."""
    descriptor = os.open(tmp_path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
    found = pq.read_metadata(tmp_path).num_rows
    if found != rows:
        raise EnvironmentTrouble(f"{tmp_path}: {rows} rows were written but {found} are in the file; check the disk")
    return WrittenFile(tmp_path, rows, tmp_path.stat().st_size, file_sha256(tmp_path))


@contextmanager
def _removed(tmp_path: Path) -> Iterator[None]:
    try:
        yield
    finally:
        tmp_path.unlink(missing_ok=True)


@contextmanager
def _removed_on_failure(tmp_path: Path) -> Iterator[None]:
    try:
        yield
    except BaseException:
        tmp_path.unlink(missing_ok=True)
        raise


@contextmanager
def _disk_trouble(path: Path, kinds: tuple[type[Exception], ...] = (OSError,)) -> Iterator[None]:
    """Turn failures of the disk into EnvironmentTrouble that names the file."""
    try:
        yield
    except kinds as problem:
        reason = getattr(problem, "strerror", None) or problem
        raise EnvironmentTrouble(f"{path}: {reason}; mend it and run again") from problem
