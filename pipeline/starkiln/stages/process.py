"""The whole chain for the rows of a table: ingest, fit, derive, summarise."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa

from starkiln.flags import BY_NAME
from starkiln.inference.audit import AuditSums, combined, no_stars
from starkiln.settings import Settings
from starkiln.stages.audit import audit
from starkiln.stages.choose import choose
from starkiln.stages.derive import derive
from starkiln.stages.fit import fit
from starkiln.stages.ingest import ingest
from starkiln.stages.model import FitModel
from starkiln.stages.stars import Stars
from starkiln.stages.summarise import kept_draws, mode_points, summarise
from starkiln.tables.columns import catalogue_schema, draws_schema, output_fields
from starkiln.tables.hashes import row_hashes


@dataclass(frozen=True)
class PartTables:
    """What a part leaves: catalogue rows, rejected rows, draws if asked for, and what its stars say of zero points."""

    catalogue: pa.Table
    rejected: pa.Table
    draws: pa.Table | None
    audit: AuditSums | None = None


def process_part(table: pa.Table, settings: Settings, model: FitModel) -> PartTables:
    """Fit the rows of a table that can be fitted, and set the others aside with the reason.

    Parameters
    ----------
    table
        The used columns with ``_input_file``, ``_input_row`` and ``_duplicate`` (0 unique, 1 first copy, 2 later).
    """
    ingested = ingest(table, settings, model)
    columns, draws, audited = fit_columns(ingested.stars, model, settings)
    if len(ingested.stars):
        columns["row_hash"] = row_hashes(table, settings)[ingested.is_kept]
        first_copy = ingested.kept["_duplicate"].to_numpy() == 1
        columns["flags"] |= np.where(first_copy, BY_NAME["duplicate_id"].value, 0).astype(np.int32)
    id_field, carry_fields = output_fields(table.schema, settings)
    catalogue = _table(catalogue_schema(settings, id_field, carry_fields), ingested.kept, columns)
    kept = None
    if settings.sampling.keep_draws:
        kept = _table(draws_schema(settings, id_field), ingested.kept, draws)
    return PartTables(catalogue, ingested.rejected, kept, audited)


def fit_columns(
    stars: Stars, model: FitModel, settings: Settings
) -> tuple[dict[str, np.ndarray], dict[str, np.ndarray], AuditSums]:
    """Return the fitted columns and the kept draws of every star, in the order of the stars, and the audit's sums."""
    columns: dict[str, np.ndarray] = {}
    draws: dict[str, np.ndarray] = {}
    if model.rival is None:
        return columns, draws, _fit_rows(np.arange(len(stars)), stars, model, settings, columns, draws)
    is_blackbody, ln_ratio = choose(stars, model, settings)
    audited = _fit_rows(np.flatnonzero(~is_blackbody), stars, model, settings, columns, draws)
    rivals = _fit_rows(np.flatnonzero(is_blackbody), stars, model.rival, settings, columns, draws)
    columns["ln_evidence_ratio"] = ln_ratio
    return columns, draws, combined(audited, rivals)


def _fit_rows(
    rows: np.ndarray,
    stars: Stars,
    model: FitModel,
    settings: Settings,
    columns: dict[str, np.ndarray],
    draws: dict[str, np.ndarray],
) -> AuditSums:
    """Fit the stars of some rows with one model, put their values at those rows, and return the audit's sums."""
    chosen = stars.at(rows)
    audited = no_stars(len(model.passbands))
    for fitted in fit(chosen, model, settings):
        places = fitted.draws.stars
        some = chosen.at(places)
        derived = derive(some, fitted.draws, model, settings, fitted.block.factor_scale)
        mode = mode_points(fitted, derived, model)
        audited = combined(audited, audit(fitted, mode, model))
        _place(columns, rows[places], len(stars), summarise(some, fitted, derived, mode, model, settings))
        if settings.sampling.keep_draws:
            _place(draws, rows[places], len(stars), kept_draws(some, derived, settings))
    return audited


def _place(target: dict[str, Any], rows: np.ndarray, n: int, values: dict[str, Any]) -> None:
    for name, column in values.items():
        if name not in target:
            target[name] = np.zeros((n, *column.shape[1:]), column.dtype)
        target[name][rows] = column


def _table(schema: pa.Schema, kept: pa.Table, columns: dict[str, np.ndarray]) -> pa.Table:
    """Return a table of the schema: the input's own columns from ``kept``, the rest from ``columns``."""
    arrays = []
    for field in schema:
        if field.name in kept.column_names and field.name not in columns:
            arrays.append(kept[field.name].combine_chunks().cast(field.type))
        elif field.name not in columns:
            arrays.append(pa.nulls(0, field.type))
        else:
            arrays.append(_array(columns[field.name], field.type))
    return pa.table(arrays, schema=schema)


def _array(values: np.ndarray, kind: pa.DataType) -> pa.Array:
    """Return an Arrow array of a type; NaN becomes null."""
    if pa.types.is_fixed_size_list(kind):
        flat = pa.array(values.ravel(), kind.value_type)
        missing = pa.array(np.isnan(values).all(axis=1))
        return pa.FixedSizeListArray.from_arrays(flat, kind.list_size, mask=missing)
    if values.dtype.kind == "f":
        return pa.array(values.astype(kind.to_pandas_dtype()), kind, mask=np.isnan(values))
    return pa.array(values, kind)
