"""A table of astropy's as a Parquet file that a run can take."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pyarrow as pa
from astropy.table import Column, MaskedColumn, Table
from astropy.units import Quantity

from starkiln.errors import InputError
from starkiln.tables.columns import Column as Described
from starkiln.tables.write import publish, write_part


def write_parquet(table: Table, path: str | Path) -> None:
    """Write an astropy Table, read from FITS, VOTable, CSV or anything else, as an input table.

    Units, UCDs and descriptions go along as field metadata and in a VOTable header; masked values become
    nulls. (astropy's own Parquet writer puts masks into columns of their own and leaves filler beneath them,
    which a reader that does not know takes for data.) Folders are made, and a file of this name is replaced.

    Raises
    ------
    TypeError
        If it is no astropy Table.
    InputError
        If a column holds more than one number, text, truth or time in a row, or coordinates.
    EnvironmentTrouble
        If the disk refuses the file.
    """
    if not isinstance(table, Table):
        raise TypeError(
            f"write_parquet takes an astropy Table, not a {type(table).__name__}: Table.read(path) makes one of a "
            "file, Table.from_pandas(frame) one of a DataFrame"
        )
    path = Path(path)
    arrays, problems = [], []
    for name in table.colnames:
        try:
            arrays.append(array_of(table[name]))
        except (TypeError, ValueError, pa.ArrowException) as problem:
            problems.append(f"{name!r} ({str(problem)[:80]})")
    if problems:
        raise InputError(
            f"{path} is not written: it cannot hold column {', '.join(problems)}; "
            "choose columns with table[[...]], or take such a column apart"
        )
    fields = [_described(table, name, array.type).field() for name, array in zip(table.colnames, arrays, strict=True)]
    path.parent.mkdir(parents=True, exist_ok=True)
    publish(write_part(pa.table(arrays, schema=pa.schema(fields)), path), path)


def array_of(column: Column | MaskedColumn | Quantity) -> pa.Array:
    """Return a column of an astropy Table, which may be masked, hold bytes or be in another byte order.

    Raises
    ------
    TypeError, ValueError, pyarrow.ArrowException
        If its values are no numbers, texts, truths or times, one a row.
    """
    if not isinstance(column, Column | Quantity):
        raise TypeError(f"a {type(column).__name__}, not a plain column")
    bare = getattr(column, "unmasked", column)
    values = np.asarray(getattr(bare, "value", bare))
    if values.ndim != 1:
        raise ValueError(f"{values.shape[1:]} values in a row")
    mask = np.asarray(column.mask) if hasattr(column, "mask") else None
    if values.dtype.kind == "S":
        values = np.char.decode(values, "utf-8")
    if values.dtype.kind == "U":
        values = values.astype(object)
    return pa.array(values.astype(values.dtype.newbyteorder("=")), mask=mask)


def _described(table: Table, name: str, kind: pa.DataType) -> Described:
    info = table[name].info
    unit = None if info.unit is None else str(info.unit)
    return Described(name, kind, unit, (info.meta or {}).get("ucd"), info.description)
