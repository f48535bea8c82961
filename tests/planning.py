"""Plans of small tables, for tests."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from small_survey import settings_for
from starkiln.engine.earlier import Earlier
from starkiln.engine.plan import Plan, make_plan
from starkiln.engine.records import PlannedFile
from starkiln.settings import Settings
from starkiln.tables.source import Source, open_source


class Remembered:
    """Checkpoints in memory."""

    def __init__(self) -> None:
        self.files: dict[str, PlannedFile] = {}

    def planned_file(self, key: str) -> PlannedFile | None:
        return self.files.get(key)

    def add_planned_file(self, file: PlannedFile) -> None:
        self.files[file.key] = file


def written(
    folder: Path, tables: list[pa.Table], row_group_size: int = 30, output: str | Path = "/results/run", **changes: Any
) -> tuple[Source, Settings]:
    """Write tables as files a, b, ... of a new folder, and return them as a source, with settings for it."""
    folder.mkdir()
    for name, table in zip("abcdefgh", tables, strict=False):
        pq.write_table(table, folder / f"{name}.parquet", row_group_size=row_group_size)
    settings = settings_for(folder, output, **changes)
    return open_source(settings), settings


def planned(folder: Path, source: Source, settings: Settings, workers: int = 1, **options: Any) -> Plan:
    """Make a plan in a folder, which may hold what an earlier one left."""
    scratch = folder / "scratch"
    scratch.mkdir(parents=True)
    places = {"folder": folder / "plan", "planning": folder / "planning", "scratch": scratch}
    options = {"checkpoints": Remembered(), "earlier": Earlier()} | places | options
    try:
        return make_plan(source, settings, workers, **options)
    finally:
        for path in sorted(scratch.rglob("*"), reverse=True):
            path.rmdir() if path.is_dir() else path.unlink()
        scratch.rmdir()
