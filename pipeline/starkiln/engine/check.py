"""What a run would do, from settings and footers only."""

from __future__ import annotations

import pyarrow as pa

from starkiln.engine.plan import even_parts, rows_per_part
from starkiln.engine.resources import worker_count
from starkiln.settings import Settings
from starkiln.tables.columns import catalogue_schema, draws_schema, output_fields
from starkiln.tables.source import Source

STARS_PER_SECOND = 50.0
"""Stars that one worker fits in a second: measured on one core with the demo's 14 bands; plain blackbodies or few
bands went up to four times as fast, stars that the model does not fit slower."""

DRIVER_BYTES = 700e6
"""About what the driver takes, whatever the number of rows."""

STRING_BYTES = 16


def describe_plan(source: Source, settings: Settings) -> str:
    """Return the plan as lines of text: rows, parts, bands, workers, memory, disk and time.

    Parameters
    ----------
    source
        The input tables; only their footers have been read, so filters are not applied.
    settings
        The settings.
    """
    rows = source.rows
    workers = worker_count(settings)
    part_rows = rows_per_part(rows, workers, settings.compute.rows_per_part)
    output = rows * row_bytes(source.schema, settings)
    memory = workers * settings.compute.memory_per_worker_bytes + DRIVER_BYTES
    groups = sum(len(file.row_group_rows) for file in source.files)
    filtered = settings.input.where is not None or settings.input.only is not None
    labels = ", ".join(band.label for band in settings.input.photometry)
    lines = [
        ("run", f"{settings.run.name} in {settings.run.output}"),
        ("input", f"{rows} rows, {len(source.files)} file(s), {groups} row group(s)" + _skipped(source)),
        ("filters", "not counted here: input.where and input.only can only lower the figures below"),
        ("bands", f"{len(settings.input.photometry)}: {labels}"),
        ("parts", f"about {len(even_parts(rows, part_rows))} of up to {part_rows} rows"),
        ("workers", f"{workers}, up to {settings.compute.memory_per_worker} each"),
        ("memory", f"up to {_bytes(memory)} in all"),
        ("disk", f"about {_bytes(output)} for the result, and as much again while it is built"),
        ("time", _time(rows, workers)),
    ]
    return "\n".join(f"{name:<9}{text}" for name, text in lines if name != "filters" or filtered)


def row_bytes(input_schema: pa.Schema, settings: Settings) -> float:
    """Return about how many bytes a star takes in the result: nothing is assumed to compress."""
    id_field, carry_fields = output_fields(input_schema, settings)
    fields = list(catalogue_schema(settings, id_field, carry_fields))
    if settings.sampling.keep_draws:
        fields += draws_schema(settings, id_field)
    return sum(_field_bytes(field.type) for field in fields)


def _field_bytes(kind: pa.DataType) -> float:
    if pa.types.is_fixed_size_list(kind):
        return kind.list_size * _field_bytes(kind.value_type)
    try:
        return kind.bit_width / 8
    except ValueError:
        return STRING_BYTES


def _skipped(source: Source) -> str:
    if not source.skipped:
        return ""
    names = ", ".join(file.name for file in source.skipped)
    return f"; {len(source.skipped)} unusable files left out: {names}"


def _bytes(count: float) -> str:
    for unit in ("B", "kB", "MB", "GB"):
        if count < 1000:
            return f"{count:.3g} {unit}"
        count /= 1000
    return f"{count:.3g} TB"


def _time(rows: int, workers: int) -> str:
    rate = f"{STARS_PER_SECOND:.0f} stars a second and worker"
    return f"about {_duration(rows, workers)} at {rate}, as measured on one machine: yours will differ"


def _duration(rows: int, workers: int) -> str:
    seconds = rows / STARS_PER_SECOND / workers
    for unit, length in (("seconds", 60.0), ("minutes", 60.0), ("hours", 24.0)):
        if seconds < 2 * length:
            return f"{seconds:.2g} {unit}"
        seconds /= length
    return f"{seconds:.3g} days"
