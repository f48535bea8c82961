"""The tasks of a run, as plain functions of paths and small records, so that any process can do them."""

from __future__ import annotations

import time
import uuid
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa

from starkiln.engine.closing import part_path
from starkiln.engine.disk import disk_trouble
from starkiln.engine.job import Job, SavedJob, open_job
from starkiln.engine.plan import BATCH_ROWS, Unit, file_stamp, row_positions
from starkiln.engine.repeats import copies, read_marks
from starkiln.engine.resources import peak_memory
from starkiln.errors import EnvironmentTrouble
from starkiln.flags import FLAGS
from starkiln.settings import Settings
from starkiln.tables.columns import index_schema
from starkiln.tables.hashes import id_hashes, row_hashes
from starkiln.tables.source import read_rows
from starkiln.tables.write import WrittenFile, write_part


@dataclass(frozen=True)
class Part:
    """The rows of one part, cut from the input and waiting in a file."""

    number: int
    rows: int
    path: Path


@dataclass(frozen=True)
class Cut:
    """The parts of a unit, and the seconds it took to read them."""

    parts: tuple[Part, ...]
    seconds: float
    peak_memory: int


@dataclass(frozen=True)
class Fitted:
    """What became of a part.

    Attributes
    ----------
    written
        The files, by table name ("catalogue", "rejected", "index" and, if kept, "draws"); not yet in place.
    reasons, flags
        Rejected rows by reason, and catalogue rows by flag.
    audit
        What the part's stars say of the zero points.
    seconds
        Time by stage.
    """

    number: int
    rows: int
    written: dict[str, WrittenFile]
    reasons: dict[str, int]
    flags: dict[str, int]
    audit: Any
    seconds: dict[str, float]
    peak_memory: int


def cut_unit(job: Job | SavedJob, unit: Unit) -> Cut:
    """Read the row groups of a unit once, and write the rows of each part to a file of its own.

    Raises
    ------
    EnvironmentTrouble
        If an input file is not as it was when the run was planned.
    """
    started = time.perf_counter()
    job = open_job(job)
    _check_stamps(job, unit)
    batches = _marked_batches(job, unit)
    parts = []
    for number, rows in enumerate(unit.part_rows, start=unit.first_part):
        path = job.scratch / f"part-{number:06d}.{uuid.uuid4().hex}.arrow"
        parts.append(Part(number, rows, path))
    _deal_rows(batches, parts, unit)
    _check_stamps(job, unit)
    pa.default_memory_pool().release_unused()
    return Cut(tuple(parts), time.perf_counter() - started, peak_memory())


def _check_stamps(job: Job, unit: Unit) -> None:
    for index in sorted({file for file, _ in unit.pieces}):
        path = job.source.files[index].path
        if file_stamp(path) != job.stamps[index]:
            raise EnvironmentTrouble(f"input file {path} has changed since the run was planned; run again")


def _marked_batches(job: Job, unit: Unit) -> Iterator[pa.Table]:
    columns = job.settings.used_columns()
    marks = read_marks(job.scratch / "marks", unit.first_row, unit.last_row)
    for batch in read_rows(job.source, job.settings, list(unit.pieces), columns, BATCH_ROWS):
        rows = row_positions(job.source, batch)
        yield batch.table.append_column("_duplicate", pa.array(copies(marks, rows)))


def _deal_rows(batches: Iterator[pa.Table], parts: list[Part], unit: Unit) -> None:
    rest: pa.Table | None = None
    for part in parts:
        missing, writer = part.rows, None
        with disk_trouble(part.path), pa.OSFile(str(part.path), "wb") as sink:
            while missing:
                if rest is None or not rest.num_rows:
                    rest = next(batches, None)
                    if rest is None:
                        raise EnvironmentTrouble(
                            f"fewer rows than planned in rows {unit.first_row} to {unit.last_row}: run again"
                        )
                    continue
                head, rest = rest.slice(0, missing), rest.slice(min(missing, rest.num_rows))
                writer = writer or pa.ipc.new_file(sink, head.schema)
                writer.write_table(head)
                missing -= head.num_rows
            if writer is not None:
                writer.close()


def fit_part(job: Job | SavedJob, part: Part) -> Fitted:
    """Make the output tables of a part and write them under temporary names beside their places."""
    job = open_job(job)
    with disk_trouble(part.path), pa.OSFile(str(part.path), "rb") as file:
        table = pa.ipc.open_file(file).read_all()
    started = time.perf_counter()
    tables, audit = process_rows(job, table)
    processed = time.perf_counter()
    written = {name: write_part(made, part_path(job.parts, name, part.number)) for name, made in tables.items()}
    finished = time.perf_counter()
    summary = Fitted(
        number=part.number,
        rows=part.rows,
        written=written,
        reasons=dict(Counter(tables["rejected"]["reason"].to_pylist())),
        flags=count_flags(tables["catalogue"]["flags"].to_numpy()),
        audit=audit,
        seconds={"process": processed - started, "write": finished - processed},
        peak_memory=peak_memory(),
    )
    del table, tables
    pa.default_memory_pool().release_unused()
    return summary


def process_rows(job: Job, table: pa.Table) -> tuple[dict[str, pa.Table], Any]:
    """Process cut rows, and return the output tables by name, and what the stars say of the zero points.

    Raises
    ------
    RuntimeError
        If a row is in neither the catalogue nor the rejected rows, or in both.
    """
    made = job.stages.process_part(table, job.settings, job.model)
    index = index_rows(table, made.catalogue, made.rejected, job.settings)
    tables = {"catalogue": made.catalogue, "rejected": made.rejected, "index": index}
    if made.draws is not None:
        tables["draws"] = made.draws
    return tables, made.audit


def index_rows(table: pa.Table, catalogue: pa.Table, rejected: pa.Table, settings: Settings) -> pa.Table:
    """Return where each row that has an id went: to a row of the catalogue or of the rejected rows.

    Later copies of an id have no entry, so an id has one at most. Until the parts are packed, `file` is the
    table's name and `row` the row of this part.
    """
    kept = np.ones(table.num_rows, bool)
    kept[_places(table, rejected)] = False
    if kept.sum() != catalogue.num_rows or table.num_rows != catalogue.num_rows + rejected.num_rows:
        raise RuntimeError(f"{table.num_rows} rows went in, {catalogue.num_rows} + {rejected.num_rows} came out")
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


def _places(table: pa.Table, rejected: pa.Table) -> list[int]:
    """Return the rows of the cut table that were rejected, found by input file and input row."""
    place = {key: row for row, key in enumerate(zip(*_origins(table, "_input_file", "_input_row"), strict=True))}
    return [place[key] for key in zip(*_origins(rejected, "input_file", "input_row"), strict=True)]


def _origins(table: pa.Table, file: str, row: str) -> tuple[list[str], list[int]]:
    return table[file].to_pylist(), table[row].to_pylist()


def count_flags(flags: np.ndarray) -> dict[str, int]:
    """Return how many rows have each flag set, by name, leaving out flags that no row has."""
    counts = {flag.name: int(np.count_nonzero(flags & flag.value)) for flag in FLAGS}
    return {name: count for name, count in counts.items() if count}
