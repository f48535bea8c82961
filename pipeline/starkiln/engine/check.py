"""What a run would do: from settings and footers only, or with all rows counted."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import pyarrow as pa

from starkiln.engine.disk import disk_trouble
from starkiln.engine.earlier import find_earlier
from starkiln.engine.plan import even_parts, make_plan, rows_per_part
from starkiln.engine.progress import Progress
from starkiln.engine.records import Plan, PlannedFile
from starkiln.engine.resources import worker_count
from starkiln.settings import Settings
from starkiln.tables.columns import catalogue_schema, draws_schema, output_fields
from starkiln.tables.source import Source

STARS_PER_SECOND, WITH_CHOICE = 200.0, 60.0
"""About what one worker fits in a second, measured with ten bands and departures, and with 14 bands where each star's
photosphere is chosen; stars that the model does not fit are slower."""

DRIVER_BYTES = 700e6
"""About what the driver takes, whatever the number of rows."""

STRING_BYTES = 16


def describe_plan(source: Source, settings: Settings, plan: Plan | None = None) -> str:
    """Return the plan as lines of text: rows, parts, bands, workers, memory, disk and time.

    Parameters
    ----------
    source
        The input tables; only their footers have been read.
    settings
        The settings.
    plan
        What `count_rows` found; without it, filters are not applied and all rows count as new.
    """
    rows = source.rows if plan is None else plan.selected
    workers = worker_count(settings)
    output = rows * row_bytes(source.schema, settings)
    memory = workers * settings.compute.memory_per_worker_bytes + DRIVER_BYTES
    groups = sum(len(file.row_group_rows) for file in source.files)
    labels = ", ".join(band.label for band in settings.input.photometry)
    lines = [
        ("run", f"{settings.run.name} in {settings.run.output}"),
        ("input", f"{source.rows} rows, {len(source.files)} file(s), {groups} row group(s)" + _skipped(source)),
        *(_filters(settings) if plan is None else _counted(plan)),
        ("bands", f"{len(settings.input.photometry)}: {labels}"),
        ("parts", _parts(rows, workers, settings) if plan is None else f"{plan.parts}"),
        ("workers", f"{workers}, up to {settings.compute.memory_per_worker} each"),
        ("memory", f"up to {_bytes(memory)} in all"),
        ("disk", f"about {_bytes(output)} for the result, and as much again while it is built"),
        ("time", _time(rows if plan is None else _to_fit(plan), workers, settings)),
    ]
    return "\n".join(f"{name:<9}{text}" for name, text in lines)


def _filters(settings: Settings) -> list[tuple[str, str]]:
    if settings.input.where is None and settings.input.only is None:
        return []
    return [("filters", "not counted here (--rows does): input.where and input.only can only lower the figures below")]


def _parts(rows: int, workers: int, settings: Settings) -> str:
    part_rows = rows_per_part(rows, rows, workers, settings.compute.rows_per_part)
    return f"about {len(even_parts(rows, part_rows))} of up to {part_rows} rows"


def _to_fit(plan: Plan) -> int:
    return plan.rows.new + plan.rows.changed + plan.rows.retried


def _counted(plan: Plan) -> Iterator[tuple[str, str]]:
    """Yield what becomes of the rows, leaving out what there is none of."""
    rows = plan.rows
    yield "selected", f"{plan.selected} rows; the filters turn {plan.read - plan.selected} away"
    yield (
        "to fit",
        f"{_to_fit(plan)} rows: {rows.new} new, {rows.changed} changed" + _some(rows.retried, ", {} retried"),
    )
    if plan.why:
        yield "why", plan.why
    yield (
        "kept",
        f"{rows.kept} rows as published" + _some(rows.failed, ", {} left out for a fault before"),
    )
    if rows.duplicate or rows.without_id:
        yield "left out", f"{rows.duplicate} rows whose id has come before, {rows.without_id} without an id"
    if rows.gone:
        yield "gone", f"{rows.gone} ids of the published catalogue"


def _some(count: int, text: str) -> str:
    return text.format(count) if count else ""


def count_rows(source: Source, settings: Settings, hashes: Mapping[str, Any], progress: Progress) -> Plan:
    """Read the input, and return the plan of a run that would begin now; nothing of the run directory is touched.

    Parameters
    ----------
    source
        The input tables.
    settings
        The settings.
    hashes
        The key of a fit, and the key's parts.
    progress
        Is told how far the reading has come.
    """
    earlier = find_earlier(settings.run.output, [], settings, hashes, source, refit_all=False)
    progress.begin("planning", source.rows)
    place = _temporary_place(settings)
    with disk_trouble(place), tempfile.TemporaryDirectory(prefix="starkiln-check-", dir=place) as name:
        scratch = Path(name)
        return make_plan(
            source,
            settings,
            worker_count(settings),
            folder=scratch / "plan",
            planning=scratch / "planning",
            scratch=scratch,
            checkpoints=_Forgetful(),
            earlier=earlier,
            between=progress.advance,
        )


def _temporary_place(settings: Settings) -> Path:
    """Return a folder with room for what a run of this size keeps on disk, if one can be written."""
    places = [place for place in (settings.compute.scratch, settings.run.output.parent) if place is not None]
    return next((place for place in places if os.access(place, os.W_OK | os.X_OK)), Path(tempfile.gettempdir()))


class _Forgetful:
    """Keeps no checkpoint."""

    def planned_file(self, key: str) -> PlannedFile | None:
        return None

    def add_planned_file(self, file: PlannedFile) -> None:
        pass


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


def _time(rows: int, workers: int, settings: Settings) -> str:
    rate = WITH_CHOICE if settings.model.photosphere == "auto" else STARS_PER_SECOND
    told = f"{rate:.0f} stars a second and worker"
    return f"about {_duration(rows / rate / workers)} at {told}, as measured on one machine: yours will differ"


def _duration(seconds: float) -> str:
    for unit, length in (("seconds", 60.0), ("minutes", 60.0), ("hours", 24.0)):
        if seconds < 2 * length:
            return f"{seconds:.2g} {unit}"
        seconds /= length
    return f"{seconds:.3g} days"
