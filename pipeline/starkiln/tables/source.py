"""The input tables: checking every footer, and streaming the rows that pass the filters."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterator, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass, field
from itertools import accumulate, groupby
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.dataset as ds
import pyarrow.parquet as pq
from pyarrow.fs import LocalFileSystem

from starkiln.errors import EnvironmentTrouble, InputError, nearest
from starkiln.settings import Settings
from starkiln.tables.checks import Use, column_problem, column_uses, field_unit, handed_out_type, same_unit
from starkiln.tables.discovery import PartitionValue, find_files, partition_values
from starkiln.tables.filters import RowFilter
from starkiln.tables.votable import header_units

FOOTER_THREADS = 8

BUFFER_BYTES = 1 << 20
"""Read at a time from each column, so that one huge row group does not fill the memory."""


@dataclass(frozen=True)
class SourceFile:
    """One input file.

    Attributes
    ----------
    path
        Where it is.
    name
        Its path relative to the folder of the tables, with forward slashes.
    rows, row_group_rows
        Rows in all, and of each row group.
    partition
        Values that the folders `key=value` above it stand for.
    """

    path: Path
    name: str
    rows: int
    row_group_rows: tuple[int, ...]
    partition: Mapping[str, PartitionValue] = field(default_factory=dict)


@dataclass(frozen=True)
class BadFile:
    """A file that cannot be used, and why."""

    name: str
    reason: str

    def __str__(self) -> str:
        return f"{self.name}: {self.reason}"


@dataclass(frozen=True)
class Source:
    """The input tables, all footers checked.

    Attributes
    ----------
    files
        In order of their names.
    schema
        The columns that the settings use, as they are handed out: dictionaries decoded, strings as `string`,
        decimals as float64; units and descriptions as field metadata.
    skipped
        Files left out with on_bad_file = "skip".
    """

    files: tuple[SourceFile, ...]
    schema: pa.Schema
    skipped: tuple[BadFile, ...] = ()

    @property
    def rows(self) -> int:
        """Rows of all files."""
        return sum(file.rows for file in self.files)


@dataclass(frozen=True)
class SourceBatch:
    """Rows of one file that pass the filters, in input order.

    Attributes
    ----------
    file_index
        The file, as an index into `Source.files`.
    table
        The columns asked for, then `_input_file` and `_input_row`.
    read, filtered
        Rows looked at, and those of them that the filters turned away; a pruned row group counts as both.
    """

    file_index: int
    table: pa.Table
    read: int
    filtered: int


@dataclass(frozen=True)
class _Footer:
    """The end of a file: its columns, units of a VOTable header among the metadata, and its row groups."""

    schema: pa.Schema
    row_group_rows: tuple[int, ...]


def open_source(settings: Settings) -> Source:
    """Find the input files and check the footer of each against the settings and the files before it.

    Raises
    ------
    InputError
        If there is no file; if files cannot be used (all are listed) and `on_bad_file` is "stop"; if there
        is no row; if `where` or `only` do not fit the columns.
    """
    root, paths = find_files(settings.input.tables)
    with ThreadPoolExecutor(FOOTER_THREADS) as threads:
        footers = list(threads.map(_read_footer, paths))
    columns = _Columns(column_uses(settings))
    files, bad = [], []
    for path, footer, partition in zip(paths, footers, partition_values(root, paths), strict=True):
        name = path.relative_to(root).as_posix()
        problems = [footer] if isinstance(footer, str) else columns.add(name, footer.schema, partition)
        if isinstance(footer, str) or problems:
            bad.append(BadFile(name, "; ".join(problems)))
        else:
            groups = footer.row_group_rows
            files.append(SourceFile(path, name, sum(groups), groups, partition))
    if bad and (settings.input.on_bad_file == "stop" or not files):
        raise InputError(_bad_files_text(bad, len(paths), settings.input.tables))
    source = Source(tuple(files), columns.schema(), tuple(bad))
    if not source.rows:
        raise InputError(f"input.tables: no row in the {len(files)} files of {settings.input.tables}")
    RowFilter(settings, source.schema)
    return source


def _read_footer(path: Path) -> _Footer | str:
    """Return a file's footer, or what is wrong with the file."""
    try:
        metadata = pq.read_metadata(path)
        schema = _with_units(metadata.schema.to_arrow_schema(), header_units(metadata.metadata))
    except (OSError, ValueError, pa.ArrowException) as problem:
        if not path.exists():
            return "is a broken link, or has vanished"
        if not _begins_as_parquet(path):
            return "is no Parquet file: starkiln.write_parquet(Table.read(...), ...) makes one of FITS, VOTable or CSV"
        return f"is no whole Parquet file ({_first_line(problem)}): write it again"
    return _Footer(
        schema, tuple(metadata.row_group(group).num_rows for group in range(metadata.num_row_groups))
    )


def _begins_as_parquet(path: Path) -> bool:
    try:
        with path.open("rb") as file:
            return file.read(4) == b"PAR1"
    except OSError:
        return True


def _with_units(schema: pa.Schema, units: Mapping[str, str]) -> pa.Schema:
    """Return the schema with units from a VOTable header where a field has none of its own."""
    return pa.schema(
        [
            field if field_unit(field) or field.name not in units else _with_unit(field, units[field.name])
            for field in schema
        ]
    )


def _with_unit(field: pa.Field, unit: str) -> pa.Field:
    return field.with_metadata((field.metadata or {}) | {b"unit": unit.encode()})


def _mask_problem(column: str, schema: pa.Schema) -> str | None:
    """Tell of a mask in a column of its own: beneath it are no nulls but filler, often 0."""
    places = schema.get_all_field_indices(f"{column}.mask")
    if not places or not pa.types.is_boolean(schema.field(places[0]).type):
        return None
    return f"column {column!r} has its nulls in '{column}.mask', by astropy's writer: use starkiln.write_parquet"


class _Columns:
    """The used columns as the files so far have them; a file that differs cannot be used."""

    def __init__(self, uses: Mapping[str, list[Use]]) -> None:
        self._uses = uses
        self._agreed: dict[str, pa.Field] = {}
        self._from: dict[str, str] = {}
        self._last: pa.Schema | None = None

    def add(self, name: str, schema: pa.Schema, partition: Mapping[str, PartitionValue]) -> list[str]:
        """Return what keeps a file from being used; if nothing does, its columns join those agreed on."""
        schema = _with_partition(schema, partition)
        if self._last is not None and schema.equals(self._last, check_metadata=True):
            return []
        problems = [text for column in self._uses if (text := self._problem(column, schema))]
        if not problems:
            self._last = schema
            for column in self._uses:
                self._agree(schema.field(column), name)
        return problems

    def _problem(self, column: str, schema: pa.Schema) -> str | None:
        places = schema.get_all_field_indices(column)
        if len(places) != 1:
            where = ", ".join(dict.fromkeys(use.key for use in self._uses[column]))
            if places:
                return f"has {len(places)} columns {column!r} ({where})"
            return f"has no column {column!r}{nearest(column, schema.names)} ({where})"
        found = schema.field(places[0])
        return _mask_problem(column, schema) or column_problem(found, self._uses[column]) or self._drift(found)

    def _drift(self, found: pa.Field) -> str | None:
        agreed = self._agreed.get(found.name)
        if agreed is None or pa.types.is_null(found.type):
            return None
        kind = handed_out_type(found.type)
        if not pa.types.is_null(agreed.type) and kind != agreed.type:
            return f"column {found.name!r} holds {kind}, but {agreed.type} in {self._from[found.name]}"
        unit, agreed_unit = field_unit(found), field_unit(agreed)
        if unit and agreed_unit and not same_unit(unit, agreed_unit):
            return f"column {found.name!r} is in {unit!r}, but in {agreed_unit!r} in {self._from[found.name]}"
        return None

    def _agree(self, found: pa.Field, name: str) -> None:
        agreed = self._agreed.get(found.name)
        if agreed is None or pa.types.is_null(agreed.type):
            metadata = {
                key: text for key, text in (found.metadata or {}).items() if not key.startswith(b"PARQUET:")
            }
            self._agreed[found.name] = pa.field(
                found.name, handed_out_type(found.type), metadata=metadata or None
            )
            self._from[found.name] = name
        elif field_unit(found) and not field_unit(agreed):
            self._agreed[found.name] = _with_unit(agreed, str(field_unit(found)))

    def schema(self) -> pa.Schema:
        """Return the columns agreed on.

        Raises
        ------
        InputError
            If no file gives a column a type.
        """
        untyped = [name for name, field in self._agreed.items() if pa.types.is_null(field.type)]
        if untyped:
            raise InputError(
                f"column {', '.join(map(repr, untyped))} has no value in any file, and the type null: "
                "remove it from the settings, or give it a type in the tables"
            )
        return pa.schema(list(self._agreed.values()))


def _with_partition(schema: pa.Schema, partition: Mapping[str, PartitionValue]) -> pa.Schema:
    """Return the schema with the partition's columns; a column of the file's own comes first."""
    for key, value in partition.items():
        if key not in schema.names:
            schema = schema.append(pa.field(key, pa.scalar(value).type))
    return schema


def _bad_files_text(bad: Sequence[BadFile], total: int, tables: str) -> str:
    """Return a text with every bad file, those with the same reason together."""
    by_reason = defaultdict(list)
    for file in bad:
        by_reason[file.reason].append(file.name)
    lines = [
        f"  {'each of them' if len(names) == total > 1 else ', '.join(names)}: {reason}"
        for reason, names in by_reason.items()
    ]
    return "\n".join([f"{len(bad)} of {total} input files of {tables} cannot be used:", *lines])


def read_rows(
    source: Source,
    settings: Settings,
    pieces: Sequence[tuple[int, int]],
    columns: Sequence[str],
    batch_rows: int,
) -> Iterator[SourceBatch]:
    """Stream the rows of row groups that pass `where` and `only`, in the order of the pieces.

    Row groups that their statistics rule out are not read. Memory holds about one batch.

    Parameters
    ----------
    source
        The input tables.
    settings
        Hold the filters.
    pieces
        (index of the file, row group) pairs; those of one file side by side.
    columns
        Columns to hand out.
    batch_rows
        Most rows of a batch, before filtering.

    Raises
    ------
    EnvironmentTrouble
        If a file cannot be read.
    InputError
        If a file's contents are damaged.
    """
    rows = RowFilter(settings, source.schema)
    for file_index, group_pieces in groupby(pieces, key=lambda piece: piece[0]):
        groups = [row_group for _, row_group in group_pieces]
        yield from _read_file(source, file_index, groups, list(columns), batch_rows, rows)


def _read_file(
    source: Source, file_index: int, groups: list[int], columns: list[str], batch_rows: int, rows: RowFilter
) -> Iterator[SourceBatch]:
    origin = source.files[file_index]
    wanted = list(dict.fromkeys([*columns, *rows.columns()]))
    first_row = [0, *accumulate(origin.row_group_rows)]
    with (
        _read_trouble(origin),
        pq.ParquetFile(
            origin.path, pre_buffer=False, buffer_size=BUFFER_BYTES, page_checksum_verification=True
        ) as file,
    ):
        stored = [name for name in wanted if name in file.schema_arrow.names]
        kept_groups = _unpruned(source, file_index, file.schema_arrow, rows)
        for group in groups:
            if group not in kept_groups:
                count = origin.row_group_rows[group]
                table = _handed_out(pa.table({}), source, origin, columns, 0, 0)
                yield SourceBatch(file_index, table, count, count)
                continue
            row = first_row[group]
            for batch in file.iter_batches(batch_rows, row_groups=[group], columns=stored, use_threads=False):
                read = pa.Table.from_batches([batch])
                table = rows.keep(_handed_out(read, source, origin, wanted, row, batch.num_rows))
                table = table.select([*columns, "_input_file", "_input_row"])
                yield SourceBatch(file_index, table, batch.num_rows, batch.num_rows - table.num_rows)
                row += batch.num_rows


def _handed_out(
    read: pa.Table, source: Source, origin: SourceFile, columns: Sequence[str], first_row: int, count: int
) -> pa.Table:
    """Return `count` rows in the source's types, with the partition's values and the origin of each row."""
    fields = [source.schema.field(name) for name in columns]
    arrays = [
        _decoded(read[field.name], field.type)
        if field.name in read.column_names
        else pa.repeat(pa.scalar(origin.partition.get(field.name), field.type), count)
        for field in fields
    ]
    fields += [pa.field("_input_file", pa.string()), pa.field("_input_row", pa.int64())]
    arrays += [
        pa.repeat(pa.scalar(origin.name), count),
        pa.array(np.arange(first_row, first_row + count, dtype=np.int64)),
    ]
    return pa.table(arrays, schema=pa.schema(fields))


def _decoded(column: pa.ChunkedArray, kind: pa.DataType) -> pa.ChunkedArray:
    if pa.types.is_dictionary(column.type):
        column = column.cast(column.type.value_type)
    return column.cast(kind)


def _unpruned(source: Source, file_index: int, stored: pa.Schema, rows: RowFilter) -> set[int]:
    """Return the row groups of a file that may hold rows which pass the filters."""
    origin = source.files[file_index]
    everything = set(range(len(origin.row_group_rows)))
    expression = rows.pruning()
    if expression is None:
        return everything
    fields = [source.schema.field(name) for name in rows.columns()]
    if any(field.name in stored.names and stored.field(field.name).type != field.type for field in fields):
        return everything
    fragment = ds.ParquetFileFormat().make_fragment(
        str(origin.path),
        LocalFileSystem(),
        partition_expression=_partition_expression(
            origin, source.schema, set(rows.columns()) - set(stored.names)
        ),
    )
    return {group.id for group in fragment.subset(expression, schema=pa.schema(fields)).row_groups}


def _partition_expression(origin: SourceFile, schema: pa.Schema, keys: set[str]) -> pc.Expression:
    """Return what the folders above a file say of all its rows."""
    expression = pc.scalar(True)
    for key in sorted(keys):
        value = pa.scalar(origin.partition[key], schema.field(key).type)
        expression &= pc.field(key) == pc.scalar(value) if value.is_valid else pc.field(key).is_null()
    return expression


@contextmanager
def _read_trouble(origin: SourceFile) -> Iterator[None]:
    """Tell trouble with the disk, which passes, from damage to the file, which does not."""
    try:
        yield
    except OSError as problem:
        if problem.errno is not None:
            raise EnvironmentTrouble(
                f"input file {origin.path}: {problem.strerror}; run again when it is back"
            ) from problem
        raise InputError(_damage_text(origin, problem)) from problem
    except pa.ArrowException as problem:
        raise InputError(_damage_text(origin, problem)) from problem


def _damage_text(origin: SourceFile, problem: Exception) -> str:
    return f"input file {origin.path} is damaged ({_first_line(problem)}): write it again"


def _first_line(problem: Exception) -> str:
    """Return the beginning of what Arrow says, which can run over many lines."""
    return str(problem).partition("\n")[0][:120]
