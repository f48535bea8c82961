"""Closing a generation: parts are packed into files, and the index says where each row went."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from starkiln.engine.buckets import BUCKET_ROWS, Buckets
from starkiln.engine.disk import disk_trouble, remove_folder
from starkiln.engine.records import Plan
from starkiln.settings import Settings
from starkiln.tables.columns import (
    catalogue_schema,
    draws_schema,
    index_schema,
    output_fields,
    rejected_schema,
)
from starkiln.tables.write import PackedFile, Packer, pack, read_groups

Shelf = tuple[str, str]
"""A table and one of its folders ("." for the table's own): what is packed in one row of files."""

_RECORD = np.dtype([("id_hash", "<i8"), ("row_hash", "<i8"), ("shelf", "<i4"), ("row", "<i8")])


def close_generation(
    plan: Plan,
    settings: Settings,
    input_schema: pa.Schema,
    parts: Path,
    target: Path,
    scratch: Path,
    check: Callable[[], None],
) -> dict[str, list[PackedFile]]:
    """Pack parts into the tables of a generation, and write its index; the parts stay.

    Parameters
    ----------
    plan
        The plan, all of whose parts are in place.
    settings
        The settings.
    input_schema
        Schema of the input tables, which says how ids and carried columns are stored.
    parts
        The folder of the parts.
    target
        The folder of the generation; what an earlier attempt left there is removed.
    scratch
        A folder for temporary files.
    check
        Called between files; may raise to stop.

    Returns
    -------
    The files of each table, in order.
    """
    _make_empty(target)
    id_field, carry_fields = output_fields(input_schema, settings)
    schemas = {
        "catalogue": catalogue_schema(settings, id_field, carry_fields),
        "rejected": rejected_schema(id_field),
    }
    if settings.sampling.keep_draws:
        schemas["draws"] = draws_schema(settings, id_field)
    shelves = _shelves(plan, list(schemas))
    files: dict[str, list[PackedFile]] = defaultdict(list)
    for (table, folder), numbers in shelves.items():
        check()
        place = target / table / folder
        with disk_trouble(place):
            place.mkdir(parents=True, exist_ok=True)
        paths = [part_path(parts, table, number) for number in numbers]
        files[table] += pack(paths, place, schemas[table], settings.output.rows_per_file)
    index = target / "index"
    _make_empty(index)
    files["index"] = _write_index(plan, shelves, settings.output.rows_per_file, parts, index, scratch, check)
    return dict(files)


def _make_empty(folder: Path) -> None:
    with disk_trouble(folder):
        remove_folder(folder)
        folder.mkdir()


def part_path(parts: Path, table: str, number: int) -> Path:
    """Return where a part's rows of one table are kept until they are packed."""
    return parts / table / f"part-{number:06d}.parquet"


def _shelves(plan: Plan, tables: list[str]) -> dict[Shelf, list[int]]:
    """Return the parts that make up each shelf, in order; rejected rows are all in one folder."""
    shelves: dict[Shelf, list[int]] = defaultdict(list)
    for table in tables:
        for unit in plan.units:
            folder = "." if table == "rejected" else unit.folder
            shelves[table, folder] += range(unit.first_part, unit.first_part + len(unit.part_rows))
    return dict(shelves)


def _write_index(
    plan: Plan,
    shelves: dict[Shelf, list[int]],
    rows_per_file: int,
    parts: Path,
    target: Path,
    scratch: Path,
    check: Callable[[], None],
) -> list[PackedFile]:
    """Write the index sorted by the hash of the id, with the rows' places in the packed files."""
    remove_folder(scratch / "index")
    buckets = Buckets(scratch / "index", plan.selected, _RECORD)
    names = list(shelves)
    for table in ("catalogue", "rejected"):
        for shelf, (name, folder) in enumerate(names):
            if name == table:
                _collect(parts, table, shelf, shelves[name, folder], buckets)
                check()
    widths = {"file": max(len(_file_name(shelf, plan.selected // rows_per_file)) for shelf in names)}
    with Packer(target, index_schema(), BUCKET_ROWS, widths) as packer:
        for records in buckets.drain():
            if len(records):
                packer.add(_index_table(np.sort(records, order="id_hash"), names, rows_per_file))
            check()
    return packer.files


def _collect(parts: Path, table: str, shelf: int, numbers: list[int], buckets: Buckets) -> None:
    rows_before = 0
    for number in numbers:
        for entries in read_groups(part_path(parts, "index", number)):
            here = entries.filter(pa.compute.equal(entries["file"], table))
            buckets.add(
                id_hash=here["id_hash"].to_numpy(),
                row_hash=here["row_hash"].to_numpy(),
                shelf=np.full(here.num_rows, shelf),
                row=here["row"].to_numpy() + rows_before,
            )
        rows_before += pq.read_metadata(part_path(parts, table, number)).num_rows


def _index_table(records: np.ndarray, names: list[Shelf], rows_per_file: int) -> pa.Table:
    number, row = np.divmod(records["row"], rows_per_file)
    places, which = np.unique(np.stack([records["shelf"], number]), axis=1, return_inverse=True)
    paths = [_file_name(names[shelf], number) for shelf, number in places.T]
    file = pa.DictionaryArray.from_arrays(which.astype(np.int32), paths).cast(pa.string())
    return pa.table(
        {"id_hash": records["id_hash"], "row_hash": records["row_hash"], "file": file, "row": row},
        schema=index_schema(),
    )


def _file_name(shelf: Shelf, number: int) -> str:
    return (Path(*shelf) / f"part-{number:06d}.parquet").as_posix()
