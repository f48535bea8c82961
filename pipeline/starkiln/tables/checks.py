"""What the settings ask of each input column, and whether a column of a file gives it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

import pyarrow as pa
from astropy.units import AB, UnitBase
from astropy.units.function import FunctionUnitBase

from starkiln.settings import Settings
from starkiln.tables.votable import known_unit

OWN_COLUMNS = ("_input_file", "_input_row", "_duplicate", "_source", "_source_row")
"""What goes with each row on its way through a run."""

Kind = Literal["id", "number", "mark", "carry", "filter"]


@dataclass(frozen=True)
class Use:
    """One use of a column.

    Attributes
    ----------
    key
        The setting that names the column.
    kind
        What the column must hold.
    unit, system
        Unit that the settings give its values, and the zero of magnitudes; None where they give none.
    """

    key: str
    kind: Kind
    unit: str | None = None
    system: str | None = None


def column_uses(settings: Settings) -> dict[str, list[Use]]:
    """Return the uses of every input column, the columns in order of the settings, those of filters last."""
    data, model = settings.input, settings.model
    named: list[tuple[str | float | None, Use]] = [(data.id, Use("input.id", "id"))]
    if parallax := data.parallax:
        named += [
            (parallax.value, Use("input.parallax.value", "number", parallax.unit)),
            (parallax.error, Use("input.parallax.error", "number", parallax.unit)),
            (parallax.zero_point, Use("input.parallax.zero_point", "number", parallax.unit)),
            (parallax.error_scale, Use("input.parallax.error_scale", "number")),
        ]
    if distance := data.distance:
        named += [
            (distance.value, Use("input.distance.value", "number", distance.unit)),
            (distance.error, Use("input.distance.error", "number", distance.unit)),
        ]
    for band in data.photometry:
        key = f"input.photometry {band.label}"
        named += [
            (band.value, Use(f"{key} value", "number", band.unit, band.system)),
            (band.error, Use(f"{key} error", "number", band.unit)),
            (band.bad, Use(f"{key} bad", "mark")),
            (band.limit, Use(f"{key} limit", "mark")),
        ]
    named += [
        (model.extinction.scale, Use("model.extinction.scale", "number", "mag")),
        (model.extinction.mean, Use("model.extinction.mean", "number", "mag")),
        (model.distance.length_scale_pc, Use("model.distance.length_scale_pc", "number", "pc")),
        *((column, Use("input.carry", "carry")) for column in data.carry),
        *((column, Use("input.where", "filter")) for column in settings.filter_columns()),
    ]
    uses: dict[str, list[Use]] = {}
    for column, use in named:
        if isinstance(column, str):
            uses.setdefault(column, []).append(use)
    return uses


def handed_out_type(kind: pa.DataType) -> pa.DataType:
    """Return the type a column is handed out as: no dictionary, one kind of string, decimals as float64."""
    if pa.types.is_dictionary(kind):
        return handed_out_type(kind.value_type)
    if pa.types.is_large_string(kind) or pa.types.is_string_view(kind):
        return pa.string()
    return pa.float64() if pa.types.is_decimal(kind) else kind


def _is_carried(kind: pa.DataType) -> bool:
    return is_id(kind) or pa.types.is_floating(kind) or pa.types.is_boolean(kind) or pa.types.is_timestamp(kind)


def is_id(kind: pa.DataType) -> bool:
    """Tell whether a column of this type can hold ids."""
    return pa.types.is_integer(kind) or pa.types.is_string(kind)


def _is_number(kind: pa.DataType) -> bool:
    return pa.types.is_integer(kind) or pa.types.is_floating(kind)


def _is_mark(kind: pa.DataType) -> bool:
    return pa.types.is_boolean(kind) or pa.types.is_integer(kind)


def _is_comparable(kind: pa.DataType) -> bool:
    return _is_carried(kind) or pa.types.is_date(kind)


_WANTED: Mapping[Kind, tuple[Callable[[pa.DataType], bool], str]] = {
    "id": (is_id, "integers or strings"),
    "number": (_is_number, "numbers"),
    "mark": (_is_mark, "booleans, or integers with 0 for false"),
    "carry": (_is_carried, "integers, floats, strings, booleans or timestamps"),
    "filter": (_is_comparable, "integers, floats, strings, booleans, timestamps or dates"),
}


def column_problem(field: pa.Field, uses: list[Use]) -> str | None:
    """Return what keeps a column, with its unit as field metadata, from its uses; None if nothing does.

    A column of type null, as writers make it where every value is missing, fits any use.
    """
    if field.name in OWN_COLUMNS:
        return f"column {field.name!r} has a name that starkiln needs for itself: rename it"
    if pa.types.is_null(field.type):
        return None
    unit = field_unit(field)
    for use in uses:
        fits, wanted = _WANTED[use.kind]
        exact = field.type if use.kind in ("id", "carry") else handed_out_type(field.type)
        if not fits(handed_out_type(field.type)) or pa.types.is_decimal(exact):
            return f"column {field.name!r} holds {field.type}, but {use.key} needs {wanted}: cast it"
        if unit and use.unit and not _is_stated_unit(unit, use.unit, use.system):
            return (
                f"column {field.name!r} is in {unit!r} by the file's metadata, "
                f"but {use.key} has {use.unit!r}: correct the one that is wrong"
            )
    return None


def field_unit(field: pa.Field) -> str | None:
    """Return the unit in a field's metadata, or None."""
    text = (field.metadata or {}).get(b"unit", b"").decode().strip()
    return text or None


@lru_cache(maxsize=1024)
def _is_stated_unit(found: str, stated: str, system: str | None) -> bool:
    if same_unit(found, stated):
        return True
    unit = known_unit(found)
    if stated != "mag" or not isinstance(unit, FunctionUnitBase):
        return False
    # "mag(AB)" beside unit = "mag": the same if the settings say so, and for errors, which have no zero.
    return system in (None, "AB") and unit.physical_unit == AB


@lru_cache(maxsize=1024)
def same_unit(first: str, second: str) -> bool:
    """Tell whether two texts name one unit, in dimension and in scale; unknown ones must be the same text."""
    if first == second:
        return True
    units = known_unit(first), known_unit(second)
    return all(isinstance(unit, UnitBase) for unit in units) and units[0] == units[1]
