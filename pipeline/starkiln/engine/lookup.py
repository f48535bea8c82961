"""Rows of a published generation found by their id, through its index; reads only."""

from __future__ import annotations

import json
import tomllib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from starkiln.engine.keys import ROWS_VERSION
from starkiln.errors import EnvironmentTrouble, SettingsError, StarkilnError
from starkiln.tables.discovery import find_files
from starkiln.tables.hashes import id_hashes
from starkiln.tables.write import read_groups

StarId = int | str
Outcome = Literal["catalogue", "rejected"]


@dataclass(frozen=True)
class Generation:
    """A published generation: its folder, its run.json, and the column and the type of its ids."""

    folder: Path
    facts: dict[str, Any]
    id_field: pa.Field

    @property
    def name(self) -> str:
        """The number, as its folder has it."""
        return self.folder.name


@dataclass(frozen=True)
class StoredRow:
    """A row of a generation.

    Attributes
    ----------
    outcome
        The table it is in.
    file, row
        Where: the file, relative to the generation, and the row in it.
    values
        By column, as Python has them; None for null.
    units, descriptions
        Of the columns that have one.
    row_hash
        Of the input values it was made from; None where that is not kept.
    """

    outcome: Outcome
    file: str
    row: int
    values: dict[str, Any]
    units: dict[str, str]
    descriptions: dict[str, str]
    row_hash: int | None


def open_generation(run_dir: Path) -> Generation:
    """Return the generation that a run directory has published, or the one whose folder is given.

    Raises
    ------
    SettingsError
        If there is none.
    """
    folder = run_dir / "current" if (run_dir / "current").is_dir() else run_dir
    # Once resolved, a later run that publishes does not mix generations.
    folder = folder.resolve()
    path = folder / "run.json"
    if not path.is_file():
        raise SettingsError(f"{run_dir} holds no published catalogue: name the run.output of a finished run")
    try:
        facts: dict[str, Any] = json.loads(path.read_text())
        files = find_files(str(folder / "catalogue"))[1]
        id_column = _id_column(folder, files[0])
        return Generation(folder, facts, pq.read_schema(files[0]).field(id_column))
    except (OSError, ValueError, KeyError, pa.ArrowException, StarkilnError) as error:
        raise EnvironmentTrouble(f"cannot read the generation {folder} ({str(error)[:120]}): mend it") from error


def _id_column(folder: Path, catalogue: Path) -> str:
    try:
        return str(tomllib.loads((folder / "settings.toml").read_text())["input"]["id"])
    except (OSError, ValueError, KeyError):
        return str(pq.read_schema(catalogue).names[0])


def parse_id(text: str, id_field: pa.Field) -> StarId:
    """Return an id in the type of the id column.

    Raises
    ------
    SettingsError
        If the column cannot hold it.
    """
    if not pa.types.is_integer(id_field.type):
        return text
    try:
        number = int(text.replace("_", " "))  # to Python 1_000 is a number
        pa.scalar(number, id_field.type)
    except (ValueError, OverflowError, pa.ArrowException):
        raise SettingsError(
            f"the ids of this run, column {id_field.name!r}, are integers ({id_field.type}), which {text!r} is not"
        ) from None
    return number


def find_row(generation: Generation, star_id: StarId) -> StoredRow | None:
    """Return the row of a generation that has an id, None if none has."""
    wanted = pa.array([star_id], generation.id_field.type)
    for file, row, row_hash in _index_entries(generation, wanted):
        found = _stored_row(generation, file, row, row_hash)
        if found.values.get(generation.id_field.name) == star_id:
            return found
    if generation.facts.get("hashes", {}).get("rows") == ROWS_VERSION:
        return None
    return _by_scan(generation, star_id)


def _index_entries(generation: Generation, wanted: pa.Array) -> Iterator[tuple[str, int, int]]:
    """Yield file, row and row hash of the entries of an id's hash: more than one only if two ids share it."""
    (id_hash,), _ = id_hashes(wanted)
    folder = generation.folder / "index"
    for path in sorted(folder.glob("*.parquet")):
        for table in read_groups(path, groups_that_may_hold(path, "id_hash", int(id_hash))):
            here = table.filter(pc.equal(table["id_hash"], pa.scalar(int(id_hash), pa.int64())))
            yield from zip(*(here[name].to_pylist() for name in ("file", "row", "row_hash")), strict=True)


def groups_that_may_hold(path: Path, column: str, value: StarId) -> list[int]:
    """Return the row groups of a file whose statistics do not rule an integer out; all for a string."""
    metadata = _metadata(path)
    leaves = [metadata.schema.column(place).path for place in range(len(metadata.schema))]
    place = leaves.index(column) if column in leaves else None
    groups = range(metadata.num_row_groups)
    if place is None or not isinstance(value, int):
        return list(groups)
    bounds = [metadata.row_group(group).column(place).statistics for group in groups]
    return [
        group
        for group, found in zip(groups, bounds, strict=True)
        if found is None or not found.has_min_max or found.min <= value <= found.max
    ]


def _by_scan(generation: Generation, star_id: StarId) -> StoredRow | None:
    """Look an id up in the tables themselves, for a generation whose index was made by another version."""
    name = generation.id_field.name
    for table in ("catalogue", "rejected"):
        for path in sorted((generation.folder / table).rglob("*.parquet")):
            first = 0
            for group in read_groups(path):
                place = pc.index(group[name], pa.scalar(star_id, group.schema.field(name).type)).as_py()
                if place >= 0:
                    return _stored_row(generation, path.relative_to(generation.folder).as_posix(), first + place, None)
                first += group.num_rows
    return None


def _stored_row(generation: Generation, file: str, row: int, row_hash: int | None) -> StoredRow:
    path = generation.folder / file
    table, schema = one_row(path, row), _metadata(path).schema.to_arrow_schema()
    values = {name: table[name][0].as_py() for name in table.column_names}
    texts = {name: schema.field(name).metadata or {} for name in schema.names}
    return StoredRow(
        outcome="rejected" if file.startswith("rejected/") else "catalogue",
        file=file,
        row=row,
        values=values,
        units={name: text[b"unit"].decode() for name, text in texts.items() if b"unit" in text},
        descriptions={name: text[b"description"].decode() for name, text in texts.items() if b"description" in text},
        row_hash=values.get("row_hash", row_hash),
    )


def one_row(path: Path, row: int) -> pa.Table:
    """Return a row of a file that this package wrote."""
    first, metadata = 0, _metadata(path)
    for group in range(metadata.num_row_groups):
        rows = metadata.row_group(group).num_rows
        if row < first + rows:
            (table,) = read_groups(path, [group])
            return table.slice(row - first, 1)
        first += rows
    raise EnvironmentTrouble(f"{path} has {first} rows, and row {row} is asked for: the generation is damaged")


def _metadata(path: Path) -> pq.FileMetaData:
    try:
        return pq.read_metadata(path)
    except (OSError, pa.ArrowException) as error:
        raise EnvironmentTrouble(f"{path} is gone or damaged ({str(error)[:120]})") from error


def unknown(generation: Generation, star_id: StarId) -> str:
    """Return what to say of an id that is in neither table: a near one that is, or what the ids look like."""
    name, counts = generation.id_field.name, generation.facts.get("counts", {})
    example = _first_id(generation)
    start = f"no star of this run has {name} = {star_id!r}"
    if isinstance(star_id, str):
        for near in dict.fromkeys([star_id.strip(), star_id.strip().upper(), star_id.strip().lower()]):
            if near != star_id and find_row(generation, near) is not None:
                return f"{start} (did you mean {near!r}?)"
    rows = counts.get("selected")
    among = f" among its {rows} rows" if rows is not None else ""
    return f"{start}{among}; its ids look like {example!r}. Rows that input.where leaves out are in no table of a run"


def _first_id(generation: Generation) -> StarId | None:
    for path in sorted((generation.folder / "catalogue").rglob("*.parquet")):
        for group in read_groups(path):
            if group.num_rows:
                found: StarId = group[generation.id_field.name][0].as_py()
                return found
    return None
