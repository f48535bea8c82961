"""Keys: digests that tell whether an input, a plan or a result is still what it was."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from starkiln.engine.records import PlannedFile
from starkiln.errors import EnvironmentTrouble
from starkiln.settings import Settings
from starkiln.tables.hashes import mark_columns, value_columns, value_units
from starkiln.tables.source import Source

ROWS_VERSION = 2
"""Raised when ids or rows hash otherwise than before: what was hashed in another way is not compared."""

PLAN_FORMAT = 1
"""Raised when a stored plan changes its form or its meaning."""


def digest(value: Any) -> str:
    """Return the SHA-256 of a value's canonical JSON, in hexadecimal."""
    text = json.dumps(value, sort_keys=True, separators=(",", ":"), default=str)
    return hashlib.sha256(text.encode()).hexdigest()


def file_stamp(path: Path) -> tuple[int, int]:
    """Return the size and the modification time in nanoseconds of a file.

    Raises
    ------
    EnvironmentTrouble
        If it is gone or cannot be read.
    """
    try:
        status = os.stat(path)
    except OSError as error:
        raise EnvironmentTrouble(f"input file {path}: {error.strerror}; run again when it is back") from error
    return status.st_size, status.st_mtime_ns


def rows_key(source: Source, settings: Settings) -> str:
    """Return a digest of what decides, beside the file itself, which of its rows are selected and how they hash."""
    data = settings.input
    return digest(
        {
            "version": ROWS_VERSION,
            "id": data.id,
            "values": value_columns(settings),
            "marks": mark_columns(settings),
            "units": value_units(settings),
            "carry": data.carry,
            "where": data.where,
            "only": data.only and [data.only, *file_stamp(data.only)],
            "schema": schema_facts(source, [field.name for field in source.schema]),
        }
    )


def schema_facts(source: Source, names: Sequence[str]) -> list[Any]:
    """Return columns of the input as JSON can hold them: name, type, and metadata."""
    fields = [source.schema.field(name) for name in names]
    return [
        [
            field.name,
            str(field.type),
            sorted([key.decode(), text.decode()] for key, text in (field.metadata or {}).items()),
        ]
        for field in fields
    ]


def inputs_key(source: Source, settings: Settings, hashes: Mapping[str, Any]) -> str:
    """Return a digest of all that a published generation hangs on, from settings and footers alone.

    Parameters
    ----------
    source
        The input tables.
    settings
        The settings.
    hashes
        What `provenance.hashes` returned.
    """
    return digest([_input_facts(source, settings, hashes), settings.output.rows_per_file])


def plan_key(source: Source, settings: Settings, hashes: Mapping[str, Any], published: Mapping[str, Any] | None) -> str:
    """Return a digest of all that a stored plan hangs on: a run goes on with a plan of its own key.

    Parameters
    ----------
    source
        The input tables.
    settings
        The settings.
    hashes
        What `provenance.hashes` returned.
    published
        What `earlier.published_facts` returned.
    """
    base = published and [published["number"], published["sha256"]]
    return digest([PLAN_FORMAT, _input_facts(source, settings, hashes), base])


def _input_facts(source: Source, settings: Settings, hashes: Mapping[str, Any]) -> dict[str, Any]:
    return {
        "fit_key": hashes["fit_key"],
        "rows": rows_key(source, settings),
        "layout": settings.output.layout,
        "per_band": settings.output.per_band,
        "skipped": [file.name for file in source.skipped],
        "files": [[file.name, file.path, *file_stamp(file.path), file.row_group_rows] for file in source.files],
    }


def content_key(files: Sequence[PlannedFile], source: Source, settings: Settings) -> str:
    """Return a digest of everything of the input that shows in a result, however old its files are.

    Names of files and places of rows count: the rejected rows tell them. Row groups do not.

    Parameters
    ----------
    files
        What is known of each input file, in order.
    source
        The input tables.
    settings
        The settings.
    """
    data = settings.input
    selected = [[file.name, file.content] for file in files if file.selected]
    skipped = [file.name for file in source.skipped]
    return digest([ROWS_VERSION, selected, skipped, schema_facts(source, [data.id, *data.carry])])
