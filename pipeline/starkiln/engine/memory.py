"""Fitting a table that is already in memory, in this process."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
from astropy.table import Table

from starkiln.engine.job import Stages, fitting_stages
from starkiln.engine.plan import even_parts
from starkiln.engine.repeats import copies, id_digests, mark_repeats
from starkiln.errors import InputError, nearest
from starkiln.settings import Settings, build_settings, load_settings
from starkiln.tables.checks import column_problem, column_uses, handed_out_type
from starkiln.tables.convert import array_of
from starkiln.tables.filters import RowFilter

TABLE_NAME = "table"
"""Stands for the input file in the rejected rows."""

_NOWHERE = {"run": {"name": "table", "output": "run"}, "input": {"tables": "table.parquet"}}


def fit_table(
    table: Table | pd.DataFrame | pa.Table,
    settings: Settings | Mapping[str, Any] | str | Path,
    *,
    stages: Stages | None = None,
) -> pd.DataFrame:
    """Fit the rows of a table in memory; no file is written and no other process started.

    Parameters
    ----------
    table
        The columns that the settings name. Units of an astropy Table are compared with the settings.
    settings
        Settings, the path of a settings file, or nested dictionaries like one. `run.name`, `run.output` and
        `input.tables` are not used, and dictionaries may leave them out.
    stages
        What is done to the rows; fits stars unless given.

    Returns
    -------
    The catalogue. The rejected rows are in its `.attrs["rejected"]`, a list of dictionaries.

    Raises
    ------
    SettingsError
        If the settings are wrong.
    InputError
        If a column is missing or does not hold what the settings say.
    """
    settings = _settings(settings)
    stages = stages or fitting_stages()
    rows = _selected(_arrow(table, list(column_uses(settings))), settings)
    model = stages.build_model(settings)
    catalogue, rejected, first = [], [], 0
    for count in even_parts(rows.num_rows, settings.compute.rows_per_part) or (0,):
        made = stages.process_part(rows.slice(first, count), settings, model)
        catalogue.append(made.catalogue)
        rejected.append(made.rejected)
        first += count
    frame = _frame(catalogue)
    # Plain records: a DataFrame among the attributes would break pandas.concat and to_parquet.
    frame.attrs["rejected"] = pa.concat_tables(rejected).to_pylist()
    return frame


def _settings(settings: Settings | Mapping[str, Any] | str | Path) -> Settings:
    if isinstance(settings, Settings):
        return settings
    if isinstance(settings, str | Path):
        return load_settings(settings)
    filled = {
        name: {**_NOWHERE.get(name, {}), **section} if isinstance(section, Mapping) else section
        for name, section in settings.items()
    }
    return build_settings({**_NOWHERE, **filled})


def _arrow(table: Table | pd.DataFrame | pa.Table, columns: list[str]) -> pa.Table:
    """Return the named columns as an Arrow table, units as field metadata."""
    names = table.column_names if isinstance(table, pa.Table) else list(table.columns)
    missing = [name for name in columns if name not in names]
    if missing:
        texts = (f"{name!r}{nearest(name, map(str, names))}" for name in missing)
        raise InputError(f"the table has no column {', '.join(texts)}, which the settings name")
    if isinstance(table, pa.Table):
        return table.select(columns)
    if isinstance(table, pd.DataFrame):
        return pa.Table.from_pandas(table[columns], preserve_index=False).replace_schema_metadata(None)
    arrays = [array_of(table[name]) for name in columns]
    fields = [
        pa.field(name, array.type, metadata={"unit": str(table[name].unit)} if table[name].unit else None)
        for name, array in zip(columns, arrays, strict=True)
    ]
    return pa.table(arrays, schema=pa.schema(fields))


def _selected(table: pa.Table, settings: Settings) -> pa.Table:
    """Return the rows that pass the filters, typed as from files, with their origin and copies marked."""
    uses = column_uses(settings)
    problems = [text for field in table.schema if (text := column_problem(field, uses[field.name]))]
    if problems:
        raise InputError("the table cannot be used: " + "; ".join(problems))
    schema = pa.schema([field.with_type(handed_out_type(field.type)) for field in table.schema])
    table = table.cast(schema)
    table = table.append_column("_input_file", pa.repeat(pa.scalar(TABLE_NAME), table.num_rows))
    table = table.append_column("_input_row", pa.array(np.arange(table.num_rows)))
    table = RowFilter(settings, schema).keep(table)
    rows = table["_input_row"].to_numpy()
    digests, has_id = id_digests(table[settings.input.id])
    copy = copies(mark_repeats(digests[has_id], rows[has_id]), rows)
    wanted = [*settings.used_columns(), "_input_file", "_input_row"]
    return table.select(wanted).append_column("_duplicate", pa.array(copy))


def _frame(tables: list[pa.Table]) -> pd.DataFrame:
    # Integers beside nulls stay exact: pandas would make them floats.
    return pa.concat_tables(tables).combine_chunks().to_pandas(integer_object_nulls=True)
