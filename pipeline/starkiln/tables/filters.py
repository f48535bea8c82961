"""The filters of the input, as masks of rows and as expressions that prune row groups by their statistics."""

from __future__ import annotations

import datetime
from collections.abc import Callable
from functools import lru_cache, reduce
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from starkiln.errors import InputError, nearest
from starkiln.settings import Settings
from starkiln.tables.checks import handed_out_type, is_id

_COMPARE: dict[str, Callable[..., Any]] = {
    "=": pc.equal,
    "==": pc.equal,
    "!=": pc.not_equal,
    "<": pc.less,
    "<=": pc.less_equal,
    ">": pc.greater,
    ">=": pc.greater_equal,
}
_NEVER_PRUNES = ("!=", "not in")
"""Statistics leave out NaN, so they cannot tell that no row differs from a value."""


class RowFilter:
    """The rows that `input.where` and `input.only` keep.

    Parameters
    ----------
    settings
        Hold the filters.
    schema
        Types of the filtered columns, as the rows come.

    Raises
    ------
    InputError
        If a value of `where` cannot be compared with its column, or `only` cannot be used.
    """

    def __init__(self, settings: Settings, schema: pa.Schema) -> None:
        where = settings.input.where or []
        alternatives = [where] if where and isinstance(where[0][0], str) else where
        self._alternatives = [
            [
                (column, operator, _literal(column, value, operator, schema))
                for column, operator, value in conditions
            ]
            for conditions in alternatives
        ]
        self._id = settings.input.id
        self._only = _only_ids(settings, schema.field(self._id).type)

    def columns(self) -> list[str]:
        """Return the columns that the filters look at, none twice."""
        names = [column for conditions in self._alternatives for column, *_ in conditions]
        return list(dict.fromkeys([*names, *([self._id] if self._only is not None else [])]))

    def keep(self, table: pa.Table) -> pa.Table:
        """Return the rows of a table that pass; a comparison with null does not."""
        masks = []
        if self._alternatives:
            alternatives = [
                reduce(
                    pc.and_kleene,
                    (_test(table[column], operator, value) for column, operator, value in conditions),
                )
                for conditions in self._alternatives
            ]
            masks.append(reduce(pc.or_kleene, alternatives))
        if self._only is not None:
            masks.append(pc.is_in(table[self._id], value_set=self._only))
        return table.filter(reduce(pc.and_kleene, masks)) if masks else table

    def pruning(self) -> pc.Expression | None:
        """Return a condition that holds for every row that passes, or None if there is no useful one."""
        bounds = []
        if self._alternatives:
            alternatives = [
                [condition for condition in conditions if condition[1] not in _NEVER_PRUNES]
                for conditions in self._alternatives
            ]
            if all(alternatives):
                bounds.append(
                    reduce(pc.or_kleene, (reduce(pc.and_kleene, map(_expression, a)) for a in alternatives))
                )
        if self._only is not None and len(self._only):
            span = pc.min_max(self._only)
            column = pc.field(self._id)
            bounds.append((column >= span["min"]) & (column <= span["max"]))
        return reduce(pc.and_kleene, bounds) if bounds else None


def _expression(condition: tuple[str, str, Any]) -> pc.Expression:
    column, operator, value = condition
    return _test(pc.field(column), operator, value if operator == "in" else pc.scalar(value))


def _test(column: Any, operator: str, value: Any) -> Any:
    if operator in _COMPARE:
        return _COMPARE[operator](column, value)
    found = pc.is_in(column, value_set=value)
    # is_in says False of a null; "not in" must not turn that into True.
    return found if operator == "in" else pc.and_(pc.invert(found), pc.is_valid(column))


def _literal(column: str, value: Any, operator: str, schema: pa.Schema) -> pa.Scalar | pa.Array:
    """Return a value of `where`, or its list of values, in the type of the column."""
    kind = schema.field(column).type
    if operator in ("in", "not in"):
        return pa.concat_arrays([pa.array([_scalar(column, entry, kind)]) for entry in value])
    return _scalar(column, value, kind)


def _scalar(column: str, value: Any, kind: pa.DataType) -> pa.Scalar:
    """Return a value in the type of a column: 0.1 means float32(0.1) to a float32 column."""
    if pa.types.is_integer(kind) and isinstance(value, float) and value.is_integer():
        value = int(value)
    if not isinstance(value, _python_types(kind)) or (
        isinstance(value, bool) and not pa.types.is_boolean(kind)
    ):
        raise InputError(
            f"input.where: column {column!r} holds {kind}, which cannot be compared with {value!r}"
        )
    try:
        return pa.scalar(value, kind)
    except (pa.ArrowException, ValueError, TypeError, OverflowError):
        raise InputError(
            f"input.where: {value!r} is not a value that column {column!r} ({kind}) can hold"
        ) from None


def _python_types(kind: pa.DataType) -> tuple[type, ...]:
    if pa.types.is_floating(kind):
        return (int, float)
    if pa.types.is_integer(kind):
        return (int,)
    if pa.types.is_timestamp(kind):
        return (datetime.datetime,)
    if pa.types.is_date(kind):
        return (datetime.date,)
    return (bool,) if pa.types.is_boolean(kind) else (str,)


def _only_ids(settings: Settings, id_type: pa.DataType) -> pa.Array | None:
    """Return the ids that `input.only` lists, in the type of the id column, or None if it is not set."""
    path = settings.input.only
    if path is None:
        return None
    try:
        modified = path.stat().st_mtime_ns
    except OSError as problem:
        raise InputError(f"input.only: {path}: {problem.strerror}") from None
    return _read_ids(path, modified, settings.input.id, id_type)


@lru_cache(maxsize=1)
def _read_ids(path: Path, modified_ns: int, column: str, id_type: pa.DataType) -> pa.Array:
    """Read the ids of a file; the time of its last change is there to tell the cache of a new file."""
    try:
        with pq.ParquetFile(path, pre_buffer=False) as file:
            names = file.schema_arrow.names
            if column not in names:
                raise InputError(f"input.only: {path} has no column {column!r}{nearest(column, names)}")
            ids = file.read(columns=[column], use_threads=False)[column]
    except (OSError, pa.ArrowException) as problem:
        raise InputError(f"input.only: {path} is no whole Parquet file ({str(problem)[:120]})") from None
    kind = handed_out_type(ids.type)
    if pa.types.is_string(kind) != pa.types.is_string(id_type) or not is_id(kind):
        raise InputError(
            f"input.only: column {column!r} of {path} holds {ids.type}, but the ids are {id_type}"
        )
    try:
        return ids.cast(kind).cast(id_type).combine_chunks().drop_null().unique()
    except pa.ArrowInvalid as problem:
        raise InputError(f"input.only: an id of {path} does not fit the id column: {problem}") from None
