"""The tasks of a run, as plain functions of paths and small records, so that any process can do them."""

from __future__ import annotations

import socket
import time
import uuid
from collections import Counter
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from starkiln.engine.audits import pack_audit, packed_together
from starkiln.engine.closing import part_path
from starkiln.engine.disk import disk_trouble
from starkiln.engine.guard import guarded
from starkiln.engine.job import Job, SavedJob, open_job
from starkiln.engine.kept import fault_rows, kept_tables, merged, were_fitted
from starkiln.engine.plan import BATCH_ROWS, file_stamp, row_positions
from starkiln.engine.records import Cut, Fitted, Guard, Part, SetAside, Unit
from starkiln.engine.resources import peak_memory
from starkiln.engine.rownotes import note_columns, read_notes
from starkiln.errors import EnvironmentTrouble
from starkiln.flags import FLAGS
from starkiln.settings import Settings
from starkiln.tables.columns import catalogue_schema, draws_schema, index_schema, output_fields
from starkiln.tables.hashes import id_hashes, row_hashes
from starkiln.tables.source import read_rows
from starkiln.tables.write import WrittenFile, read_groups, write_part

Tables = dict[str, pa.Table]


def cut_unit(
    job: Job | SavedJob, unit: Unit, wanted: frozenset[int], set_aside: Mapping[int, tuple[SetAside, ...]]
) -> Cut:
    """Read the row groups of a unit once, and write the rows of each part that is wanted to a file of its own.

    Parameters
    ----------
    wanted
        Numbers of parts; rows of others are passed over.
    set_aside
        The rows of each part that are known to be beyond any stage.

    Raises
    ------
    EnvironmentTrouble
        If an input file is not as it was when the run was planned.
    """
    started = time.perf_counter()
    job = open_job(job)
    _check_stamps(job, unit)
    rows = _RowFeed(_noted_batches(job, unit), unit)
    parts = []
    for number, count in enumerate(unit.part_rows, start=unit.first_part):
        pieces = rows.take(count)
        if number in wanted:
            path = job.scratch / f"part-{number:06d}.{uuid.uuid4().hex}.arrow"
            parts.append(Part(number, count, path, _write_cut(path, pieces), set_aside.get(number, ())))
        else:
            for _ in pieces:
                pass
    _check_stamps(job, unit)
    pa.default_memory_pool().release_unused()
    return Cut(tuple(parts), time.perf_counter() - started, peak_memory())


def _check_stamps(job: Job, unit: Unit) -> None:
    for index in sorted({file for file, _ in unit.pieces}):
        path = job.source.files[index].path
        if file_stamp(path) != job.stamps[index]:
            raise EnvironmentTrouble(f"input file {path} has changed since the run was planned; run again")


def _noted_batches(job: Job, unit: Unit) -> Iterator[pa.Table]:
    columns = job.settings.used_columns()
    notes = read_notes(job.notes, unit.first_row, unit.last_row)
    for batch in read_rows(job.source, job.settings, list(unit.pieces), columns, BATCH_ROWS):
        table = batch.table
        for name, values in note_columns(notes, row_positions(job.source, batch)).items():
            table = table.append_column(name, pa.array(values))
        yield table


class _RowFeed:
    """Hands out the rows of batches in the numbers asked for."""

    def __init__(self, batches: Iterator[pa.Table], unit: Unit) -> None:
        self._batches = batches
        self._unit = unit
        self._rest: pa.Table | None = None

    def take(self, count: int) -> Iterator[pa.Table]:
        """Yield the next rows, in as many tables as it takes."""
        while count:
            if self._rest is None or not self._rest.num_rows:
                self._rest = next(self._batches, None)
                if self._rest is None:
                    first, last = self._unit.first_row, self._unit.last_row - 1
                    raise EnvironmentTrouble(f"fewer rows than planned in rows {first} to {last}: run again")
                continue
            head, self._rest = self._rest.slice(0, count), self._rest.slice(min(count, self._rest.num_rows))
            count -= head.num_rows
            yield head


def _write_cut(path: Path, pieces: Iterator[pa.Table]) -> int:
    """Write the rows of a part, and return how many of them are to be fitted."""
    fits, writer = 0, None
    with disk_trouble(path), pa.OSFile(str(path), "wb") as sink:
        for piece in pieces:
            writer = writer or pa.ipc.new_file(sink, piece.schema)
            writer.write_table(piece)
            fits += int(np.count_nonzero(piece["_source"].to_numpy() < 0))
        if writer is not None:
            writer.close()
    return fits


def fit_rows(job: Job | SavedJob, part: Part, first: int, last: int, guard: Guard) -> Fitted:
    """Make the output tables of the rows first to last (not included) of a part, and write them.

    The files of a whole part get temporary names beside their places; those of some of its rows are pieces, for
    `assemble_part`.

    Raises
    ------
    StartedBefore
        If the task has begun before, and was cut off.
    """
    job = open_job(job)
    seconds: dict[str, float] = {}
    with guarded(guard):
        table = _read_cut(part, first, last)
        fresh = table["_source"].to_numpy() < 0
        with _timed(seconds, "process"):
            tables, audit = process_rows(job, table.filter(pa.array(fresh)))
        with _timed(seconds, "keep"):
            tables = _with_kept(job, table, fresh, tables)
        return _written(job, part, (first, last), tables, int(fresh.sum()), pack_audit(audit), seconds)


def set_row_aside(job: Job | SavedJob, part: Part, row: SetAside) -> Fitted:
    """Write a row that no stage can do as a piece of its part, rejected for a fault; no stage is called."""
    job = open_job(job)
    table = _read_cut(part, row.row, row.row + 1)
    id_field, carry_fields = output_fields(table.schema, job.settings)
    reason, detail = pa.array([row.reason], pa.string()), pa.array([row.detail], pa.string())
    tables = {
        "catalogue": catalogue_schema(job.settings, id_field, carry_fields).empty_table(),
        "rejected": fault_rows(table, reason, detail, job.settings),
    }
    if job.settings.sampling.keep_draws:
        tables["draws"] = draws_schema(job.settings, id_field).empty_table()
    tables["index"] = index_rows(table, tables["catalogue"], tables["rejected"], job.settings)
    return _written(job, part, (row.row, row.row + 1), tables, 0, b"", {})


def assemble_part(job: Job | SavedJob, part: Part, pieces: tuple[Fitted, ...]) -> Fitted:
    """Write the files of a part from those of its pieces, which stay.

    Parameters
    ----------
    pieces
        In the order of their rows; together they are the part.

    Raises
    ------
    ValueError
        If rows are missing between pieces, or are there twice.
    """
    job = open_job(job)
    edges = [0, *(piece.last for piece in pieces)]
    if edges[-1] != part.rows or any(piece.first != edge for piece, edge in zip(pieces, edges, strict=False)):
        raise ValueError(f"the pieces of part {part.number} do not make its {part.rows} rows: {edges}")
    tables = {name: _joined(name, pieces) for name in pieces[0].written}
    seconds: Counter[str] = Counter()
    for piece in pieces:
        seconds.update(piece.seconds)
    fitted, audit = sum(piece.fitted for piece in pieces), packed_together(piece.audit for piece in pieces)
    return _written(job, part, (0, part.rows), tables, fitted, audit, dict(seconds))


def remove_pieces(pieces: Iterable[Fitted]) -> None:
    """Remove the files of pieces, as far as they are there."""
    for piece in pieces:
        for written in piece.written.values():
            with disk_trouble(written.tmp_path):
                written.tmp_path.unlink(missing_ok=True)


def process_rows(job: Job, table: pa.Table) -> tuple[Tables, Any]:
    """Put cut rows through the stages, and return the output tables by name, and what the stars say of zero points.

    Raises
    ------
    RuntimeError
        If a row is in neither the catalogue nor the rejected rows, or in both.
    """
    made = job.stages.process_part(table.drop_columns(["_source", "_source_row"]), job.settings, job.model)
    tables = {"catalogue": made.catalogue, "rejected": made.rejected}
    if made.draws is not None:
        tables["draws"] = made.draws
    tables["index"] = index_rows(table, made.catalogue, made.rejected, job.settings)
    return tables, made.audit


def index_rows(table: pa.Table, catalogue: pa.Table, rejected: pa.Table, settings: Settings) -> pa.Table:
    """Return where each row that has an id went: to a row of the catalogue or of the rejected rows.

    Later copies of an id have no entry, so an id has one at most. Until the parts are packed, `file` is the
    table's name and `row` the row of this part.
    """
    kept = _in_catalogue(table, catalogue, rejected)
    hashes, has_id = id_hashes(table[settings.input.id])
    listed = has_id & (table["_duplicate"].to_numpy() != 2)
    row = np.where(kept, np.cumsum(kept), np.cumsum(~kept)) - 1
    return pa.table(
        {
            "id_hash": hashes[listed],
            "row_hash": row_hashes(table, settings)[listed],
            "file": np.where(kept, "catalogue", "rejected")[listed],
            "row": row[listed],
        },
        schema=index_schema(),
    )


def _in_catalogue(table: pa.Table, catalogue: pa.Table, rejected: pa.Table) -> NDArray[np.bool_]:
    """Return which of the cut rows are in the catalogue; the others were rejected."""
    kept = np.ones(table.num_rows, bool)
    kept[_places(table, rejected)] = False
    if kept.sum() != catalogue.num_rows or table.num_rows != catalogue.num_rows + rejected.num_rows:
        raise RuntimeError(f"{table.num_rows} rows went in, {catalogue.num_rows} + {rejected.num_rows} came out")
    return kept


def _places(table: pa.Table, rejected: pa.Table) -> list[int]:
    """Return the rows of the cut table that were rejected, found by input file and input row."""
    place = {key: row for row, key in enumerate(zip(*_origins(table, "_input_file", "_input_row"), strict=True))}
    return [place[key] for key in zip(*_origins(rejected, "input_file", "input_row"), strict=True)]


def _origins(table: pa.Table, file: str, row: str) -> tuple[list[str], list[int]]:
    return table[file].to_pylist(), table[row].to_pylist()


def _with_kept(job: Job, table: pa.Table, fresh: NDArray[np.bool_], made: Tables) -> Tables:
    """Return the tables of all cut rows from those of the fresh ones, and earlier results of the others."""
    if fresh.all():
        return made
    old = table.filter(pa.array(~fresh))
    kept = kept_tables(job, old)
    fitted = _in_catalogue(table.filter(pa.array(fresh)), made["catalogue"], made["rejected"])
    were = were_fitted(job, old)
    new_rows, old_rows = np.flatnonzero(fresh), np.flatnonzero(~fresh)
    tables = {
        name: merged(made[name], kept[name], new_rows[fitted], old_rows[were]) for name in kept if name != "rejected"
    }
    tables["rejected"] = merged(made["rejected"], kept["rejected"], new_rows[~fitted], old_rows[~were])
    tables["index"] = index_rows(table, tables["catalogue"], tables["rejected"], job.settings)
    return tables


def _read_cut(part: Part, first: int, last: int) -> pa.Table:
    with disk_trouble(part.path), pa.OSFile(str(part.path), "rb") as file:
        return pa.ipc.open_file(file).read_all().slice(first, last - first)


def _joined(name: str, pieces: Sequence[Fitted]) -> pa.Table:
    """Return a table of pieces as one, as one chunk like the table of a part that is fitted whole."""
    tables, before = [], {"catalogue": 0, "rejected": 0}
    for piece in pieces:
        table = pa.concat_tables(read_groups(piece.written[name].tmp_path))
        if name == "index":
            shift = [before[file] for file in table["file"].to_pylist()]
            row = pa.array(table["row"].to_numpy() + np.array(shift, np.int64))
            table = table.set_column(table.column_names.index("row"), table.field("row"), row)
            before = {file: rows + piece.written[file].rows for file, rows in before.items()}
        tables.append(table)
    return pa.concat_tables(tables).combine_chunks()


def _written(
    job: Job,
    part: Part,
    rows: tuple[int, int],
    tables: Tables,
    fitted: int,
    audit: bytes,
    seconds: dict[str, float],
) -> Fitted:
    """Write the tables of some rows of a part, or of all, and return what is told of them."""
    first, last = rows
    written: dict[str, WrittenFile] = {}
    with _timed(seconds, "write"):
        for name, table in tables.items():
            path = part_path(job.parts, name, part.number)
            if rows != (0, part.rows):
                path = path.with_name(f"piece-{part.number:06d}-{first:06d}-{last:06d}")
            written[name] = write_part(table, path)
    pa.default_memory_pool().release_unused()
    return Fitted(
        number=part.number,
        first=first,
        last=last,
        fitted=fitted,
        written=written,
        reasons=dict(Counter(tables["rejected"]["reason"].to_pylist())),
        flags=count_flags(tables["catalogue"]["flags"].to_numpy()),
        audit=audit,
        seconds=seconds,
        peak_memory=peak_memory(),
        host=socket.gethostname(),
    )


@contextmanager
def _timed(seconds: dict[str, float], stage: str) -> Iterator[None]:
    started = time.perf_counter()
    yield
    seconds[stage] = seconds.get(stage, 0.0) + time.perf_counter() - started


def count_flags(flags: np.ndarray) -> dict[str, int]:
    """Return how many rows have each flag set, by name, leaving out flags that no row has."""
    counts = {flag.name: int(np.count_nonzero(flags & flag.value)) for flag in FLAGS}
    return {name: count for name, count in counts.items() if count}
