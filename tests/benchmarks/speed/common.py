"""What the sections of the suite share: options, clocks, tables, and runs of the command line."""

from __future__ import annotations

import json
import os
import resource
import subprocess
import sys
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from starkiln.settings import Settings, dump_toml

Row = dict[str, Any]


@dataclass
class Suite:
    """The options of one call of the suite, and its results so far.

    Attributes
    ----------
    stars
        Stars of a measurement; where a section takes more or fewer it takes a multiple or a part of them.
    folder
        A temporary folder.
    sizes, runs
        Rows of the runs that the plot of costs is measured with, and run directories of earlier ones.
    """

    stars: int
    folder: Path
    sizes: tuple[int, ...] = ()
    runs: tuple[Path, ...] = ()
    results: dict[str, Any] = field(default_factory=dict)

    def room(self, name: str) -> Path:
        """Return the folder of a measurement, made if need be."""
        folder = self.folder / name
        folder.mkdir(parents=True, exist_ok=True)
        return folder


class Clock:
    """The CPU seconds of this process, all its threads, lap by lap."""

    def __init__(self) -> None:
        self._last = time.process_time()

    def lap(self) -> float:
        """Return the seconds since the last call."""
        now = time.process_time()
        self._last, passed = now, now - self._last
        return passed


@contextmanager
def one_core() -> Iterator[None]:
    """Keep this process, and threads that it starts meanwhile, on one core."""
    before = os.sched_getaffinity(0)
    os.sched_setaffinity(0, {min(before)})
    try:
        yield
    finally:
        os.sched_setaffinity(0, before)


def print_rows(rows: Sequence[Row], columns: dict[str, str]) -> None:
    """Print rows as a table.

    Parameters
    ----------
    columns
        From a row's key to the column's title; a number in it is shown with four digits.
    """
    cells = [[shown(row.get(key)) for key in columns] for row in rows]
    titles = list(columns.values())
    widths = [max(len(cell) for cell in column) for column in zip(titles, *cells, strict=True)]
    is_text = [any(isinstance(row.get(key), str) for row in rows) for key in columns]
    for line in [titles, *cells]:
        pairs = zip(line, widths, is_text, strict=True)
        print("  ".join(cell.ljust(width) if text else cell.rjust(width) for cell, width, text in pairs).rstrip())
    print(flush=True)


def shown(value: Any) -> str:
    """Return a value as it stands in a table."""
    if value is None:
        return "-"
    if not isinstance(value, float):
        return f"{value:,}" if isinstance(value, int) else str(value)
    if abs(value) >= 1000.0:
        return f"{value:,.0f}"
    return f"{value:.4g}" if abs(value) >= 1e-3 or not value else f"{value:.2e}"


@dataclass(frozen=True)
class CommandRun:
    """A command of the package that has ended: wall and CPU seconds, those of its worker processes included."""

    wall_s: float
    core_s: float
    facts: dict[str, Any]


def starkiln(*arguments: str | Path, environment: dict[str, str] | None = None) -> CommandRun:
    """Run a command as a user does, in a process of its own."""
    before, began = _children_s(), time.perf_counter()
    command = [sys.executable, "-m", "starkiln", *map(str, arguments)]
    done = subprocess.run(command, capture_output=True, text=True, env=os.environ | (environment or {}))
    wall_s = time.perf_counter() - began
    if done.returncode:
        raise RuntimeError(f"{' '.join(command)}: exit code {done.returncode}\n{done.stderr}")
    return CommandRun(wall_s, _children_s() - before, {})


def fit_survey(settings: Settings, environment: dict[str, str] | None = None) -> CommandRun:
    """Run the settings from the command line, and return what run.json says of it."""
    config = settings.run.output.with_suffix(".toml")
    config.parent.mkdir(parents=True, exist_ok=True)
    config.write_text(dump_toml(settings))
    done = starkiln("run", config, "--quiet", environment=environment)
    return CommandRun(done.wall_s, done.core_s, run_facts(settings.run.output))


def run_facts(run_dir: Path) -> dict[str, Any]:
    """Return the run.json of a published run."""
    return json.loads((run_dir / "current" / "run.json").read_text())


def _children_s() -> float:
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    return used.ru_utime + used.ru_stime
