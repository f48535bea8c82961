"""A part of stars from Parquet to Parquet in one process, with each stage's share of the CPU time.

What a worker does with a part: it cuts its rows out of the input, fits them, and writes the tables. Functions are
wrapped where Python looks their names up; a stage's time is what its functions take less what wrapped functions
within them take.
"""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from importlib import import_module
from inspect import isgeneratorfunction
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow.parquet as pq

from benchmarks.speed.cases import Case, make_case
from benchmarks.speed.common import Row, Suite, one_core, print_rows
from benchmarks.speed.samplers import KERNEL_LOOP, OURS, PLAIN_LOOP, contenders, rows_of
from starkiln.engine.job import Job, fitting_stages
from starkiln.engine.records import Guard, Unit
from starkiln.tables.source import open_source

STAGES = {
    "reading": ("starkiln.engine.tasks:cut_unit", "starkiln.engine.tasks:_read_cut"),
    "ingest": ("starkiln.stages.process:ingest",),
    "start": ("starkiln.stages.fit:start_block",),
    "kernels": (
        "starkiln.inference.ensemble:log_posterior",
        "starkiln.inference.ensemble:fit_proposal",
        "starkiln.inference.ensemble:_draw_walkers",
        "starkiln.inference.ensemble:_pull_in",
        "starkiln.inference.ensemble:learn_others",
        "starkiln.inference.ensemble:_record",
        "starkiln.inference.moves:draw_ahead",
        "starkiln.inference.moves:evolve_half",
        "starkiln.inference.moves:accept_half",
    ),
    "diagnostics": (
        "starkiln.inference.ensemble:autocorrelation_times",
        "starkiln.inference.ensemble:diagnose",
    ),
    "bookkeeping": ("starkiln.stages.fit:sample_blocks",),
    "derive": ("starkiln.stages.process:derive",),
    "summarise": ("starkiln.stages.process:summarise", "starkiln.stages.process:mode_points"),
    "audit": ("starkiln.stages.process:audit",),
    "writing": ("starkiln.engine.tasks:write_part",),
}
"""What is timed: module and name, where the callers of each function look it up. The one table to change when a
function goes; the sampler's innermost ones go most often."""
REST = "rest"
FEW = 8


class WrappedNameGone(RuntimeError):
    """A function that the suite times is not there any more."""


class StageClock:
    """CPU seconds by stage, each without the stages within it."""

    def __init__(self) -> None:
        self.seconds: Counter[str] = Counter()
        self._running = [REST]
        self._last = time.process_time()

    @contextmanager
    def within(self, stage: str) -> Iterator[None]:
        """Count the time to a stage."""
        self._charge()
        self._running.append(stage)
        try:
            yield
        finally:
            self._charge()
            self._running.pop()

    def _charge(self) -> None:
        now = time.process_time()
        self.seconds[self._running[-1]] += now - self._last
        self._last = now

    def timed(self, function: Callable[..., Any], stage: str) -> Callable[..., Any]:
        """Return a function, or a generator function, that counts its time to a stage."""
        if isgeneratorfunction(function):

            def generate(*arguments: Any, **keywords: Any) -> Iterator[Any]:
                made = function(*arguments, **keywords)
                while True:
                    with self.within(stage):
                        item = next(made, None)
                    if item is None:
                        return
                    yield item

            return generate

        def call(*arguments: Any, **keywords: Any) -> Any:
            with self.within(stage):
                return function(*arguments, **keywords)

        return call


def wrapped_functions() -> list[tuple[str, Any, str]]:
    """Return stage, module and name of every function that is timed.

    Raises
    ------
    WrappedNameGone
        If one of them is not there.
    """
    found = []
    for stage, places in STAGES.items():
        for place in places:
            module_name, name = place.split(":")
            module = import_module(module_name)
            if not hasattr(module, name):
                raise WrappedNameGone(f"{module_name} has no {name} any more: change STAGES in {Path(__file__).name}")
            found.append((stage, module, name))
    return found


@contextmanager
def timing() -> Iterator[StageClock]:
    """Wrap the functions of all stages while this lasts."""
    originals = [(module, name, getattr(module, name)) for _, module, name in wrapped_functions()]
    clock = StageClock()
    for stage, module, name in wrapped_functions():
        setattr(module, name, clock.timed(getattr(module, name), stage))
    try:
        yield clock
    finally:
        for module, name, function in originals:
            setattr(module, name, function)


def make_job(case: Case, folder: Path) -> Job:
    """Return the job of a run over the case's rows, which are written to a Parquet file."""
    for name in ("scratch", "notes", "parts/catalogue", "parts/rejected", "parts/index", "tables"):
        (folder / name).mkdir(parents=True)
    pq.write_table(case.input_table(), folder / "tables" / "stars.parquet", row_group_size=10_000)
    given = case.settings.input.model_copy(update={"tables": str(folder / "tables")})
    settings = case.settings.model_copy(update={"input": given})
    source = open_source(settings)
    stamps = tuple((file.path.stat().st_size, file.path.stat().st_mtime_ns) for file in source.files)
    return Job(
        source=source,
        settings=settings,
        stages=fitting_stages(),
        model=case.model,
        stamps=stamps,
        scratch=folder / "scratch",
        parts=folder / "parts",
        notes=folder / "notes",
    )


def fit_part(job: Job, folder: Path) -> int:
    """Take all rows of a job from Parquet to Parquet as one part, and return how many were fitted."""
    # By their modules, where they may be wrapped.
    tasks, rows = import_module("starkiln.engine.tasks"), job.source.rows
    groups = tuple((0, group) for group in range(len(job.source.files[0].row_group_rows)))
    unit = Unit(0, ".", groups, 0, rows, rows, 0, (rows,))
    (part,) = tasks.cut_unit(job, unit, frozenset({0}), {}).parts
    return tasks.fit_rows(job, part, 0, part.rows, Guard(folder / "mark", 3600.0)).written["catalogue"].rows


def shares(case: Case, folder: Path) -> Row:
    """Return stars per core-second of a part, and the seconds of each stage."""
    fit_part(make_job(replace(case, table=case.table.slice(0, FEW)), folder / "warm"), folder)
    job = make_job(case, folder / "timed")
    with timing() as clock:
        began = time.process_time()
        stars = fit_part(job, folder)
        core_s = time.process_time() - began
    return {
        "case": case.name,
        "stars": stars,
        "core_s": core_s,
        "stars_per_core_s": stars / core_s,
        "seconds": {stage: clock.seconds[stage] for stage in (*STAGES, REST)},
    }


LOOP_COLUMNS = {
    "loop": "one star after the other",
    "same_ess": "stars/core-s at our ESS",
    "over_same_ess": "ours end to end over it",
    "asked_ess": "at ESS 1,000",
    "over_asked_ess": "ours over it",
}


def measure(suite: Suite) -> dict[str, Any]:
    """Measure the stages on two cases, and compare the whole with stock emcee's loop at the same effective size."""
    rows = []
    for name in ("blackbody", "tamarin"):
        folder = suite.room(f"end-to-end-{name}")
        case = make_case(name, suite.stars, folder)
        with one_core():
            row = shares(case, folder)
        row["loops"] = stock_loops(suite, case)
        rows.append(row)
        print(f"{name}: {row['stars']} stars, {row['stars_per_core_s']:.1f} stars per core-second end to end")
        parts = [
            {"stage": stage, "seconds": seconds, "share": f"{seconds / row['core_s']:.1%}"}
            for stage, seconds in row["seconds"].items()
        ]
        print_rows(parts, {"stage": "stage", "seconds": "core-s", "share": "share"})
        loops = [
            {"loop": loop, **rates} | {f"over_{at}": row["stars_per_core_s"] / rate for at, rate in rates.items()}
            for loop, rates in row["loops"].items()
        ]
        print_rows(loops, LOOP_COLUMNS)
    return {"rows": rows}


def stock_loops(suite: Suite, case: Case) -> dict[str, dict[str, float]]:
    """Return the stars per core-second of stock emcee's loops, by name, from this call's own measurement.

    Of each loop: at the mean effective size of our chains, and at the size that they are asked for.
    """
    compared = suite.results.get("samplers", {}).get("rows") or compared_now(case, suite.stars)
    return {
        row["sampler"]: {at: row[f"{at}_stars_per_core_s"] for at in ("same_ess", "asked_ess")}
        for row in compared
        if row["case"] == case.name and row["sampler"] in (KERNEL_LOOP, PLAIN_LOOP)
    }


def compared_now(case: Case, stars: int) -> list[Row]:
    """Return the rows of our sampler and of stock emcee's loops for the first stars of a case."""
    block = case.block.take(np.arange(min(stars, len(case.block.n_bands))))
    some = replace(case, block=block)
    return rows_of(some, contenders(some, stars, (OURS, KERNEL_LOOP, PLAIN_LOOP)))
