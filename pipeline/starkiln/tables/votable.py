"""The VOTable header that makes a Parquet file a VOParquet file (IVOA Note VOParquet 1.0, 2025-01-16).

astropy reads such files with ``Table.read(path, format="parquet.votable")``. That reader turns null floats
and integers into NaN and a null string into the word None, and cannot read a null among lists of draws;
`starkiln.read` keeps them apart and reads those.
"""

from __future__ import annotations

import io
import re
import xml.etree.ElementTree as ElementTree
from collections.abc import Mapping
from functools import lru_cache

import pyarrow as pa
import pyarrow.compute as pc
from astropy.io.votable.tree import Field, Resource, TableElement, VOTableFile
from astropy.io.votable.ucd import check_ucd
from astropy.units import Unit, UnitBase, UnrecognizedUnit

from starkiln.tables.columns import Column

VERSION_KEY = b"IVOA.VOTable-Parquet.version"
CONTENT_KEY = b"IVOA.VOTable-Parquet.content"
WIDTH_PREFIX = b"table::len::"
"""Schema keys that tell astropy's Parquet reader how many characters a string column needs."""

_WIDTH_OF_NONE = 4
"""astropy's reader writes the word None for a null string; a narrower column would cut it."""

# astropy's reader joins the columns of the header to those of the data, by ID. Left out of the header, though
# not of the Parquet schema, is what would clash there: bool, timestamps, lists; uint64, which would pass
# through float64; and names that cannot be an XML ID, such as "2mass_name".
_XML_ID = re.compile(r"[A-Za-z_][A-Za-z0-9_.-]*")
_DATATYPES = {
    pa.int8(): "short",
    pa.int16(): "short",
    pa.int32(): "int",
    pa.int64(): "long",
    pa.uint8(): "unsignedByte",
    pa.uint16(): "int",
    pa.uint32(): "long",
    pa.float16(): "float",
    pa.float32(): "float",
    pa.float64(): "double",
    pa.string(): "unicodeChar",
}


def string_widths(table: pa.Table) -> dict[str, int]:
    """Return the number of characters each string column of a table needs."""
    widths = {}
    for field in table.schema:
        if pa.types.is_string(field.type):
            longest = pc.max(pc.utf8_length(table[field.name])).as_py()
            widths[field.name] = max(longest or 0, _WIDTH_OF_NONE)
    return widths


def stored_widths(schema: pa.Schema) -> dict[str, int]:
    """Return the widths of the string columns that `with_header` noted in a schema."""
    return {
        key.removeprefix(WIDTH_PREFIX).decode(): int(width)
        for key, width in (schema.metadata or {}).items()
        if key.startswith(WIDTH_PREFIX)
    }


def with_header(schema: pa.Schema, widths: Mapping[str, int]) -> pa.Schema:
    """Return a schema with the VOTable header and the string widths among its file metadata.

    Parameters
    ----------
    schema
        Fields carry unit, ucd and description as field metadata.
    widths
        Characters that each string column needs; one left out gets the least width.
    """
    strings = [field.name for field in schema if pa.types.is_string(field.type)]
    full = {name: max(widths.get(name, 0), _WIDTH_OF_NONE) for name in strings}
    header = _votable_xml(tuple(map(Column.of, schema)), tuple(full.items()))
    metadata = dict(schema.metadata or {}) | {VERSION_KEY: b"1.0", CONTENT_KEY: header}
    metadata |= {WIDTH_PREFIX + name.encode(): str(width).encode() for name, width in full.items()}
    return schema.with_metadata(metadata)


@lru_cache(maxsize=32)
def _votable_xml(columns: tuple[Column, ...], widths: tuple[tuple[str, int], ...]) -> bytes:
    document = VOTableFile()
    resource = Resource()
    table = TableElement(document)
    document.resources.append(resource)
    resource.tables.append(table)
    for column in columns:
        if column.type in _DATATYPES and _XML_ID.fullmatch(column.name):
            table.fields.append(_votable_field(document, column, dict(widths).get(column.name)))
    buffer = io.BytesIO()
    document.to_xml(buffer)
    return buffer.getvalue()


def _votable_field(document: VOTableFile, column: Column, width: int | None) -> Field:
    field = Field(
        document,
        name=column.name,
        datatype=_DATATYPES[column.type],
        arraysize=None if width is None else str(width),
        unit=_vounit(column.unit),
        ucd=column.ucd if column.ucd and check_ucd(column.ucd, has_colon=True) else None,
    )
    if column.description:
        field.description = column.description
    return field


def known_unit(text: str) -> UnitBase | None:
    """Return the astropy unit a text names, or None if astropy knows no such unit."""
    unit = Unit(text, parse_strict="silent")
    return None if isinstance(unit, UnrecognizedUnit) else unit


def _vounit(text: str | None) -> str | None:
    """Return a unit in VOUnit spelling, or None if there is none."""
    unit = known_unit(text) if text else None
    try:
        return unit.to_string("vounit") if unit is not None else None
    except ValueError:
        return None


def header_units(metadata: Mapping[bytes, bytes] | None) -> dict[str, str]:
    """Return the units that the VOTable header of a Parquet file states, by column name.

    Raises
    ------
    ValueError
        If the header is not well-formed XML.
    """
    content = (metadata or {}).get(CONTENT_KEY)
    return dict(_units_in(content)) if content else {}


@lru_cache(maxsize=32)
def _units_in(content: bytes) -> tuple[tuple[str, str], ...]:
    try:
        root = ElementTree.fromstring(content)
    except ElementTree.ParseError as problem:
        raise ValueError(f"the VOTable header is not well-formed XML: {problem}") from problem
    fields = (element for element in root.iter() if element.tag.rpartition("}")[2] == "FIELD")
    return tuple(
        (element.attrib["name"], element.attrib["unit"])
        for element in fields
        if "name" in element.attrib and element.attrib.get("unit")
    )
