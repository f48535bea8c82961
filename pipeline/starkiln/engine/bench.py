"""What a run is asked for, and what its steps work with."""

from __future__ import annotations

import time
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

from starkiln.engine.board import Board
from starkiln.engine.events import EventLog
from starkiln.engine.generations import Generations
from starkiln.engine.job import Stages
from starkiln.engine.ledger import Ledger
from starkiln.engine.progress import Progress
from starkiln.engine.records import Build
from starkiln.engine.stopping import StopFlag
from starkiln.settings import Settings
from starkiln.tables.source import Source


@dataclass(frozen=True, kw_only=True)
class RunOptions:
    """What a run is asked for beside its settings.

    Attributes
    ----------
    refit_all
        Fit every row, whatever earlier results there are.
    retry_failed
        Try again the rows that faults had set aside.
    scheduler, scheduler_file
        The address of a dask scheduler whose workers to use, or a file that holds it.
    """

    refit_all: bool = False
    retry_failed: bool = False
    scheduler: str | None = None
    scheduler_file: Path | None = None

    def met_by(self, build: Build) -> bool:
        """Return whether a build is what they ask for; one that does more than asked is."""
        return build.refit_all >= self.refit_all and build.retry_failed >= self.retry_failed


class Laps:
    """The seconds of the steps of a run."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self._clock = time.perf_counter()

    def lap(self, step: str) -> None:
        """Note that a step has ended and the next one begins."""
        now = time.perf_counter()
        self.seconds[step], self._clock = now - self._clock, now


@dataclass(kw_only=True)
class Gains:
    """What a run has added so far to what was there: planned input files and parts."""

    files: int = 0
    parts: int = 0


@dataclass(frozen=True, kw_only=True)
class Bench:
    """What the steps of a run work with."""

    settings: Settings
    options: RunOptions
    stages: Stages
    source: Source
    model: Any
    hashes: Mapping[str, Any]
    published: Mapping[str, Any] | None
    ledger: Ledger
    generations: Generations
    board: Board
    progress: Progress
    stop: StopFlag
    log: EventLog
    scratch: Path
    start: datetime
    laps: Laps
    gains: Gains
