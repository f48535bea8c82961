"""A small invented survey: settings and tables for tests."""

from __future__ import annotations

import copy
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa

from starkiln.settings import Settings, build_settings

BANDS = ("panstarrs_g", "panstarrs_r", "panstarrs_i")


def band(label: str, **keys: Any) -> dict[str, Any]:
    """The settings of one band whose columns are called <label> and <label>_error."""
    return {"passband": label, "value": label, "error": f"{label}_error", "unit": "nJy"} | keys


def settings_for(tables: str | Path, output: str | Path = "/results/run", **changes: Any) -> Settings:
    """Settings for three bands in nJy and a parallax; `input__carry=["ra"]` sets input.carry."""
    data: dict[str, Any] = {
        "run": {"name": "tamarin", "output": str(output)},
        "input": {
            "tables": str(tables),
            "id": "star_id",
            "parallax": {"value": "parallax", "error": "parallax_error", "unit": "mas"},
            "photometry": [band(label) for label in BANDS],
        },
    }
    for dotted, value in changes.items():
        *parents, key = dotted.split("__")
        section = data
        for parent in parents:
            section = section.setdefault(parent, {})
        if value is None:
            del section[key]
        else:
            section[key] = copy.deepcopy(value)
    return build_settings(data)


def stars(rows: int, first_id: int = 1) -> pa.Table:
    """A table of invented stars with the columns that `settings_for` names, and ra and dec."""
    random = np.random.default_rng(first_id)
    columns: dict[str, Any] = {
        "star_id": np.arange(first_id, first_id + rows),
        "ra": random.uniform(0, 360, rows),
        "dec": random.uniform(-90, 90, rows),
        "parallax": random.normal(5, 1, rows),
        "parallax_error": np.full(rows, 0.1),
    }
    for label in BANDS:
        columns[label] = random.lognormal(10, 1, rows).astype(np.float32)
        columns[f"{label}_error"] = columns[label] * np.float32(0.02)
    return pa.table(columns)


def with_column(table: pa.Table, name: str, values: Any, metadata: dict[str, str] | None = None) -> pa.Table:
    """The table with a column replaced or added."""
    array = values if isinstance(values, pa.Array | pa.ChunkedArray) else pa.array(values)
    field = pa.field(name, array.type, metadata=metadata)
    if name in table.column_names:
        return table.set_column(table.column_names.index(name), field, array)
    return table.append_column(field, array)


def read_in(table: pa.Table) -> pa.Table:
    """The table as it comes out of the input: with the origin of each row."""
    origin = {"_input_file": ["stars.parquet"] * len(table), "_input_row": np.arange(len(table))}
    for name, values in origin.items():
        table = table.append_column(
            name, pa.array(values, pa.string() if name == "_input_file" else pa.int64())
        )
    return table
