"""Reading what a run left: the catalogue as an astropy Table, its units and its descriptions."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Literal

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
from astropy.table import Column, MaskedColumn, Table
from astropy.units import UnitBase

from starkiln.errors import InputError, nearest
from starkiln.tables.columns import Column as Described
from starkiln.tables.discovery import find_files
from starkiln.tables.votable import known_unit

Kind = Literal["catalogue", "rejected", "draws", "index"]


def read(run_dir: str | Path, table: Kind = "catalogue", columns: Sequence[str] | None = None) -> Table:
    """Return a table of a run, rows in input order, with units and descriptions.

    Integers stay integers and exact next to nulls. A column with nulls is masked; in a float column the data
    under the mask are NaN.

    Parameters
    ----------
    run_dir
        The run directory, one generation of it, or a folder or file of its tables.
    table
        Which table of a run directory.
    columns
        Only these, in this order.

    Raises
    ------
    InputError
        If there is no such table or column, or a file cannot be read.
    """
    paths = _files(Path(run_dir), table)
    schema = _schema(paths[0])
    names = list(columns) if columns is not None else schema.names
    for name in names:
        if name not in schema.names:
            raise InputError(f"{paths[0]}: no column {name!r}{nearest(name, schema.names)}")
    data = pa.concat_tables([_read_file(path, names) for path in paths])
    return Table([_column(data[name], schema.field(name)) for name in names])


def units(path: str | Path) -> dict[str, UnitBase]:
    """Return the unit of each column that has one, of a run directory, a folder or a file.

    Raises
    ------
    InputError
        If there is no table, or its file cannot be read.
    """
    found = {field.name: Described.of(field).unit for field in _schema(_files(Path(path), "catalogue")[0])}
    known = {name: known_unit(unit) for name, unit in found.items() if unit}
    return {name: unit for name, unit in known.items() if unit is not None}


def descriptions(path: str | Path) -> dict[str, str]:
    """Return the description of each column that has one, of a run directory, a folder or a file.

    Raises
    ------
    InputError
        If there is no table, or its file cannot be read.
    """
    schema = _schema(_files(Path(path), "catalogue")[0])
    return {field.name: text for field in schema if (text := Described.of(field).description)}


def _files(path: Path, table: str) -> list[Path]:
    """Return the files of a table, whatever of the run directory the path names."""
    for folder in (path / "current" / table, path / table):
        if folder.is_dir():
            return find_files(str(folder))[1]
    if (path / "generations").is_dir():
        raise InputError(f"{path}: no {table} has been published yet: `starkiln run` publishes when every row is done")
    return find_files(str(path))[1]


def _schema(path: Path) -> pa.Schema:
    try:
        return pq.read_schema(path)
    except (OSError, pa.ArrowException) as problem:
        raise InputError(f"{path} is no whole Parquet file ({str(problem)[:120]})") from problem


def _read_file(path: Path, columns: list[str]) -> pa.Table:
    try:
        with pq.ParquetFile(path, pre_buffer=False, page_checksum_verification=True) as file:
            return file.read(columns=columns, use_threads=False).select(columns).replace_schema_metadata(None)
    except (OSError, pa.ArrowException) as problem:
        raise InputError(f"{path} is damaged ({str(problem)[:120]})") from problem


def _column(values: pa.ChunkedArray, field: pa.Field) -> Column | MaskedColumn:
    described = Described.of(field)
    unit = known_unit(described.unit) if described.unit else None
    common = {"name": field.name, "unit": unit, "description": described.description}
    if described.ucd:
        common["meta"] = {"ucd": described.ucd}
    data = _numpy(values)
    if not values.null_count:
        return Column(data, **common)
    mask = pc.is_null(values).to_numpy().reshape(-1, *[1] * (data.ndim - 1))
    return MaskedColumn(data, mask=np.broadcast_to(mask, data.shape), **common)


def _numpy(values: pa.ChunkedArray) -> np.ndarray:
    """Return an array of the exact type; a null becomes NaN, NaT, an empty string, False or 0."""
    kind = values.type
    if pa.types.is_fixed_size_list(kind):
        lists = np.full((len(values), kind.list_size), np.nan, kind.value_type.to_pandas_dtype())
        lists[pc.is_valid(values).to_numpy()] = pc.list_flatten(values).to_numpy().reshape(-1, kind.list_size)
        return lists
    if pa.types.is_string(kind):
        return np.array(values.fill_null("").to_pylist(), dtype=str)
    if pa.types.is_floating(kind):
        return np.array(values.fill_null(np.nan).to_numpy())
    if pa.types.is_timestamp(kind):
        return np.array(values.to_numpy())
    filler = pa.scalar(False if pa.types.is_boolean(kind) else 0, kind)
    return np.array(values.fill_null(filler).to_numpy())
