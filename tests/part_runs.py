"""Runs by hand, part after part in this process, with plans that are worked out row by row in plain Python."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from fake_stages import NoModel, by_content, stages
from small_survey import settings_for
from starkiln.engine.closing import close_generation, part_path
from starkiln.engine.job import Job
from starkiln.engine.records import EarlierFile, Fitted, Guard, Part, Plan, SetAside, Unit
from starkiln.engine.rownotes import NOTE, write_notes
from starkiln.engine.tasks import assemble_part, cut_unit, fit_rows, set_row_aside
from starkiln.tables.hashes import canonical_ids, id_hashes, row_hashes
from starkiln.tables.source import Source, open_source, read_rows
from starkiln.tables.write import publish


@dataclass(frozen=True)
class PartRun:
    """A run that has been planned."""

    job: Job
    plan: Plan
    folder: Path

    def cut(self, unit: Unit, set_aside: Mapping[int, Sequence[SetAside]] | None = None) -> tuple[Part, ...]:
        known = {number: tuple(rows) for number, rows in (set_aside or {}).items()}
        return cut_unit(self.job, unit, frozenset(range(self.plan.parts)), known).parts

    def fit(self, part: Part, first: int = 0, last: int | None = None) -> Fitted:
        guard = Guard(self.folder / "started" / "mark", 60.0)
        return fit_rows(self.job, part, first, part.rows if last is None else last, guard)

    def finish(self, set_aside: Mapping[int, Sequence[SetAside]] | None = None) -> Path:
        """Do every part and return the folder of the generation."""
        for unit in self.plan.units:
            for part in self.cut(unit, set_aside):
                fitted = self.fit_around(part) if part.set_aside else self.fit(part)
                for table, written in fitted.written.items():
                    publish(written, part_path(self.job.parts, table, part.number))
        return self.close()

    def fit_around(self, part: Part) -> Fitted:
        pieces, first = [], 0
        for row in part.set_aside:
            if row.row > first:
                pieces.append(self.fit(part, first, row.row))
            pieces.append(set_row_aside(self.job, part, row))
            first = row.row + 1
        if first < part.rows:
            pieces.append(self.fit(part, first))
        return assemble_part(self.job, part, tuple(pieces))

    def close(self) -> Path:
        target, job = self.folder / "result", self.job
        close_generation(self.plan, job.settings, job.source.schema, job.parts, target, job.scratch, check=lambda: None)
        return target


def write_tables(folder: Path, tables: Mapping[str, pa.Table], row_group_size: int = 7) -> Path:
    """Write tables as files of a folder, which is returned."""
    for name, table in tables.items():
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        pq.write_table(table, path, row_group_size=row_group_size)
    return folder


def plan_run(
    folder: Path,
    tables: Path,
    process: Any = by_content,
    *,
    earlier: Sequence[Path] = (),
    part_rows: int = 4,
    **changes: Any,
) -> PartRun:
    """Plan a run, one unit a file, that takes over what it can from earlier generations, the first one first."""
    settings = settings_for(tables, folder / "run", **changes)
    source = open_source(settings)
    for name in ("scratch", "notes", "started", "parts/catalogue", "parts/rejected", "parts/index", "parts/draws"):
        (folder / name).mkdir(parents=True)
    rows = _selected_rows(source, settings)
    files, notes = _notes(rows, settings, earlier)
    if len(notes):
        write_notes(notes, folder / "notes", 0)
    units = _units(source, rows, part_rows, settings.output.layout)
    stamps = tuple((file.path.stat().st_size, file.path.stat().st_mtime_ns) for file in source.files)
    job = Job(
        source=source,
        settings=settings,
        stages=stages(process),
        model=NoModel(),
        stamps=stamps,
        scratch=folder / "scratch",
        parts=folder / "parts",
        notes=folder / "notes",
        earlier=files,
    )
    plan = Plan(read=source.rows, selected=rows.num_rows, units=units, stamps=stamps, earlier=files)
    return PartRun(job, plan, folder)


def rows_of(generation: Path, table: str) -> pa.Table:
    """Return all rows of a table of a generation, in order."""
    paths = sorted((generation / table).rglob("*.parquet"))
    return pa.concat_tables([pq.ParquetFile(path).read() for path in paths])


def bytes_of(generation: Path) -> dict[str, bytes]:
    """Return the contents of every file of a generation."""
    paths = sorted(path for path in generation.rglob("*") if path.is_file())
    return {path.relative_to(generation).as_posix(): path.read_bytes() for path in paths}


def _selected_rows(source: Source, settings: Any) -> pa.Table:
    """Return the selected rows, with their file and their place counted through all files."""
    first = np.concatenate([[0], np.cumsum([file.rows for file in source.files])])
    pieces = [(k, group) for k, file in enumerate(source.files) for group in range(len(file.row_group_rows))]
    tables = []
    for batch in read_rows(source, settings, pieces, settings.used_columns(), 100):
        place = first[batch.file_index] + batch.table["_input_row"].to_numpy()
        table = batch.table.append_column("file", pa.array(np.full(len(place), batch.file_index)))
        tables.append(table.append_column("place", pa.array(place)))
    return pa.concat_tables(tables)


def _units(source: Source, rows: pa.Table, most: int, layout: str) -> tuple[Unit, ...]:
    units, first_part, first_row = [], 0, 0
    for index, file in enumerate(source.files):
        selected = int(np.count_nonzero(rows["file"].to_numpy() == index))
        parts = tuple(min(most, selected - start) for start in range(0, selected, most))
        folder = "." if layout == "flat" else str(PurePosixPath(file.name).parent)
        pieces = tuple((index, group) for group in range(len(file.row_group_rows)))
        units.append(Unit(index, folder, pieces, first_row, first_row + file.rows, selected, first_part, parts))
        first_part, first_row = first_part + len(parts), first_row + file.rows
    return tuple(units)


def _notes(rows: pa.Table, settings: Any, earlier: Sequence[Path]) -> tuple[tuple[EarlierFile, ...], np.ndarray]:
    ids = canonical_ids(rows[settings.input.id])
    hashes, values = id_hashes(rows[settings.input.id])[0].tolist(), row_hashes(rows, settings).tolist()
    results = [_results(generation) for generation in earlier]
    files: list[EarlierFile] = []
    notes, seen = [], set()
    for row, star in enumerate(ids):
        if star is None:
            continue
        copy = 2 if star in seen else int(ids.count(star) > 1)
        seen.add(star)
        found = [result[hashes[row], values[row]] for result in results if (hashes[row], values[row]) in result]
        if copy < 2 and found:
            file, place = found[0]
            files += [file] * (file not in files)
            notes.append((rows["place"][row].as_py(), copy, files.index(file), place))
        elif copy:
            notes.append((rows["place"][row].as_py(), copy, -1, -1))
    return tuple(files), np.array(notes, NOTE)


def _results(generation: Path) -> dict[tuple[int, int], tuple[EarlierFile, int]]:
    """Return where the results of ids and rows are, but for rows that their data had rejected."""
    results = {}
    for entry in rows_of(generation, "index").to_pylist():
        table, _, name = entry["file"].partition("/")
        draws = generation / "draws" / name
        file = EarlierFile(generation / entry["file"], draws if draws.exists() else None, table)
        if table == "rejected" and pq.ParquetFile(file.path).read()["kind"][entry["row"]].as_py() == "data":
            continue
        results[entry["id_hash"], entry["row_hash"]] = file, entry["row"]
    return results
