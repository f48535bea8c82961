"""Rows whose results are taken over from earlier ones, and their place among rows that are fitted."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import accumulate
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from starkiln.engine.job import Job
from starkiln.errors import EnvironmentTrouble
from starkiln.flags import BY_NAME
from starkiln.settings import Settings
from starkiln.tables.columns import catalogue_schema, draws_schema, fitted_columns, output_fields, rejected_schema
from starkiln.tables.hashes import canonical_ids
from starkiln.tables.write import group_sizes, read_groups

DUPLICATE_ID = BY_NAME["duplicate_id"].value


def read_places(path: Path, rows: NDArray[np.int64]) -> pa.Table:
    """Return some rows, at least one, of a file this package wrote, in the order given.

    Only the row groups that hold one of them are read, page checksums verified.

    Raises
    ------
    EnvironmentTrouble
        If the file is gone or damaged, or has no such row.
    """
    edges = np.array([0, *accumulate(group_sizes(path))])
    if not 0 <= rows.min() <= rows.max() < edges[-1]:
        raise EnvironmentTrouble(f"{path}: row {rows.max()} of {edges[-1]} is wanted; run with --refit-all")
    wanted, place = np.unique(rows, return_inverse=True)
    group_of = np.searchsorted(edges, wanted, side="right") - 1
    groups = np.unique(group_of).tolist()
    found = [
        table.take(pa.array(wanted[group_of == group] - edges[group]))
        for group, table in zip(groups, read_groups(path, groups), strict=True)
    ]
    return pa.concat_tables(found).take(pa.array(place))


def kept_tables(job: Job, table: pa.Table) -> dict[str, pa.Table]:
    """Return what earlier results hold of rows: the catalogue's, the rejected ones, and draws if they are kept.

    The id, the carried columns, the origin and whether the id is repeated come from the new input; everything else is
    as it was, bit for bit.

    Parameters
    ----------
    table
        Cut rows that all have a `_source`. Each table has those of them that are there, in this order.

    Raises
    ------
    EnvironmentTrouble
        If a file of earlier results cannot be read, or a row is not where it should be.
    """
    fitted = pa.array(were_fitted(job, table))
    kept, failed = table.filter(fitted), table.filter(pc.invert(fitted))
    tables = {"catalogue": _catalogue(job, kept), "rejected": _rejected(job, failed)}
    if job.settings.sampling.keep_draws:
        tables["draws"] = _draws(job, kept)
    return tables


def were_fitted(job: Job, table: pa.Table) -> NDArray[np.bool_]:
    """Return which of the rows, which all have a `_source`, have their results in a catalogue."""
    in_catalogue = np.array([file.table == "catalogue" for file in job.earlier], bool)
    return in_catalogue[table["_source"].to_numpy()]


def fault_rows(table: pa.Table, reasons: pa.Array, details: pa.Array, settings: Settings) -> pa.Table:
    """Return cut rows as rejected ones whose fault is no fault of their data."""
    schema = rejected_schema(output_fields(table.schema, settings)[0])
    kind = pa.repeat(pa.scalar("fault"), table.num_rows)
    origin = table.select([settings.input.id, "_input_file", "_input_row"])
    return pa.table([*origin.columns, reasons, details, kind], names=schema.names).cast(schema)


def merged(fresh: pa.Table, kept: pa.Table, fresh_rows: NDArray[np.int64], kept_rows: NDArray[np.int64]) -> pa.Table:
    """Return the rows of two tables of one schema, ordered by the places given for each of them."""
    order = np.argsort(np.concatenate([fresh_rows, kept_rows]))
    return pa.concat_tables([fresh, kept.cast(fresh.schema)]).take(pa.array(order)).combine_chunks()


def _catalogue(job: Job, kept: pa.Table) -> pa.Table:
    settings = job.settings
    id_field, carry_fields = output_fields(kept.schema, settings)
    fitted = pa.schema([column.field() for column in fitted_columns(settings)])
    old = _collect(kept, [file.path for file in job.earlier], fitted, settings)
    is_first = kept["_duplicate"].to_numpy() == 1
    flags = (old["flags"].to_numpy() & ~DUPLICATE_ID) | np.where(is_first, DUPLICATE_ID, 0)
    columns = dict(zip(fitted.names, old.columns, strict=True)) | {"flags": pa.array(flags, pa.int32())}
    columns |= {field.name: kept[field.name] for field in (id_field, *carry_fields)}
    schema = catalogue_schema(settings, id_field, carry_fields)
    return pa.table([columns[name] for name in schema.names], schema=schema)


def _draws(job: Job, kept: pa.Table) -> pa.Table:
    settings = job.settings
    schema = draws_schema(settings, output_fields(kept.schema, settings)[0])
    old = _collect(kept, [file.draws for file in job.earlier], pa.schema(list(schema)[1:]), settings)
    return pa.table([kept[settings.input.id], *old.columns], schema=schema)


def _rejected(job: Job, failed: pa.Table) -> pa.Table:
    texts = pa.schema([("reason", pa.string()), ("detail", pa.string())])
    old = _collect(failed, [file.path for file in job.earlier], texts, job.settings)
    return fault_rows(failed, old["reason"], old["detail"], job.settings)


def _collect(table: pa.Table, paths: Sequence[Path | None], schema: pa.Schema, settings: Settings) -> pa.Table:
    """Return the columns of a schema at the `_source` and `_source_row` of each row."""
    sources, rows = table["_source"].to_numpy(), table["_source_row"].to_numpy()
    found, places = [schema.empty_table()], [np.zeros(0, np.int64)]
    for source in np.unique(sources):
        here = np.flatnonzero(sources == source)
        path = paths[source]
        assert path is not None
        piece = read_places(path, rows[here])
        # The id is the first column of every table of results.
        if canonical_ids(piece.column(0)) != canonical_ids(table[settings.input.id].take(pa.array(here))):
            raise EnvironmentTrouble(f"{path}: other rows are there than its index says; run with --refit-all")
        found.append(piece.select(schema.names).cast(schema))
        places.append(here)
    order = np.argsort(np.concatenate(places))
    return pa.concat_tables(found).take(pa.array(order))
