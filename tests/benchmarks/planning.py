"""What planning costs: time, memory and disk of the driver, and of a worker that cuts parts.

    python tests/benchmarks/planning.py [ROWS] [FOLDER]

Tables of ROWS invented rows (ten million unless given) with three bands are planned four times, each in a process of
its own: from nothing; again, with every file's hashes at hand; beside a published generation that has every row; and
beside one with a thousandth of the rows changed. Then a worker's part is measured: reading a unit with its notes and
cutting its parts. Nothing is fitted; the published generation is an index without a catalogue.
"""

from __future__ import annotations

import json
import multiprocessing
import sys
import tempfile
import time
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

sys.path.insert(0, str(Path(__file__).parents[1]))

from fake_stages import NoModel, stages
from small_survey import settings_for, stars
from starkiln.engine.buckets import BUCKET_ROWS
from starkiln.engine.earlier import Earlier, find_earlier
from starkiln.engine.job import Job
from starkiln.engine.keys import ROWS_VERSION
from starkiln.engine.ledger import open_ledger
from starkiln.engine.plan import load_plan, make_plan, save_plan
from starkiln.engine.provenance import hashes
from starkiln.engine.resources import peak_memory
from starkiln.engine.rownotes import read_notes
from starkiln.engine.tasks import cut_unit
from starkiln.settings import Settings, dump_toml
from starkiln.tables.columns import catalogue_schema, index_schema, output_fields
from starkiln.tables.hashes import id_hashes, row_hashes
from starkiln.tables.source import open_source, read_rows

ROWS = 10_000_000
FILE_ROWS = 1_000_000
GROUP_ROWS = 100_000
WORKERS = 8
CATALOGUE = "catalogue/part-{:06d}.parquet"


def settings_in(folder: Path) -> Settings:
    return settings_for(folder / "survey", folder / "run", input__carry=["ra", "dec"], compute__workers=WORKERS)


def write_survey(folder: Path, rows: int) -> dict[str, Any]:
    """Write the tables; all files hold the same values under other ids."""
    (folder / "survey").mkdir()
    for first in range(0, rows, FILE_ROWS):
        table = stars(min(FILE_ROWS, rows - first))
        ids = pa.array(np.arange(first, first + len(table)))
        table = table.set_column(0, "star_id", ids)
        pq.write_table(table, folder / f"survey/{first:012d}.parquet", row_group_size=GROUP_ROWS)
    return {"bytes": _bytes_below(folder / "survey")}


def publish(folder: Path, share_changed: float) -> dict[str, Any]:
    """Make an index as if every row had been fitted, a share of them with other values."""
    settings = settings_in(folder)
    source = open_source(settings)
    generation = folder / "run" / "generations" / "000001"
    for name in ("catalogue", "index"):
        (generation / name).mkdir(parents=True, exist_ok=True)
    schema = catalogue_schema(settings, *output_fields(source.schema, settings))
    files = {}
    for number, file in enumerate(source.files):
        pieces = [(number, group) for group in range(len(file.row_group_rows))]
        batches = list(read_rows(source, settings, pieces, settings.used_columns(), GROUP_ROWS))
        table = pa.concat_tables([batch.table for batch in batches])
        changed = np.random.default_rng(number).random(len(table)) < share_changed
        name = CATALOGUE.format(number)
        index = {
            "id_hash": id_hashes(table["star_id"])[0],
            "row_hash": row_hashes(table, settings) + changed,
            "file": pa.repeat(pa.scalar(name), len(table)),
            "row": np.arange(len(table)),
        }
        pq.write_table(
            pa.table(index, schema=index_schema()), generation / f"index/part-{number:06d}.parquet", BUCKET_ROWS
        )
        pq.write_table(schema.empty_table(), generation / name)
        files |= {name: {"rows": len(table)}, f"index/part-{number:06d}.parquet": {"rows": len(table)}}
    (generation / "settings.toml").write_text(dump_toml(settings))
    facts = {"hashes": hashes(settings, NoModel()) | {"rows": ROWS_VERSION}, "files": files}
    (generation / "run.json").write_text(json.dumps(facts))
    current = folder / "run" / "current"
    current.unlink(missing_ok=True)
    current.symlink_to(generation)
    return {}


def plan(folder: Path, name: str, beside_published: bool) -> dict[str, Any]:
    """Make and store a plan; return its figures."""
    settings, hashed = settings_in(folder), []
    scratch, place = folder / f"scratch-{name}", folder / f"plan-{name}"
    scratch.mkdir()
    started = time.perf_counter()
    source, earlier = open_source(settings), Earlier()
    if beside_published:
        now = hashes(settings, NoModel())
        earlier = find_earlier(folder / "run", [], settings, now, source, refit_all=False)
    with open_ledger(folder / "run") as ledger:
        made = make_plan(
            source,
            settings,
            WORKERS,
            folder=place,
            planning=folder / "run" / "planning",
            scratch=scratch,
            checkpoints=ledger,
            earlier=earlier,
            on_file=lambda file, fresh: hashed.append(time.perf_counter()),
        )
    joined = time.perf_counter()
    sha256 = save_plan(made, place)
    stored = time.perf_counter()
    (place / "sha256").write_text(sha256)
    if load_plan(place, sha256) != made:
        raise RuntimeError("the stored plan is another")
    return {
        "hashing_s": hashed[-1] - started,
        "joining_s": joined - hashed[-1],
        "storing_s": stored - joined,
        "loading_s": time.perf_counter() - stored,
        "counts": {key: count for key, count in vars(made.rows).items() if count},
        "parts": made.parts,
        "plan_bytes": _bytes_below(place),
        "hash_bytes": _bytes_below(folder / "run" / "planning"),
    }


def cut(folder: Path, name: str) -> dict[str, Any]:
    """Cut some units of a stored plan as a worker does; return its figures."""
    settings, place, scratch = settings_in(folder), folder / f"plan-{name}", folder / "cut"
    scratch.mkdir(exist_ok=True)
    made = load_plan(place, (place / "sha256").read_text())
    if made is None:
        raise RuntimeError("the plan is gone")
    job = Job(
        source=open_source(settings),
        settings=settings,
        stages=stages(),
        model=NoModel(),
        stamps=made.stamps,
        scratch=scratch,
        parts=scratch,
        earlier=made.earlier,
        notes=place / "notes",
    )
    units = made.units[:: max(1, len(made.units) // 5)][:5]
    reading_s, started = [], time.perf_counter()
    for unit in units:
        before = time.perf_counter()
        read_notes(job.notes, unit.first_row, unit.last_row)
        reading_s.append(time.perf_counter() - before)
        cut_unit(job, unit, frozenset(range(unit.first_part, unit.first_part + len(unit.part_rows))), {})
    spent = time.perf_counter() - started
    rows = sum(unit.selected for unit in units)
    return {"notes_s": max(reading_s), "units": len(units), "rows": rows, "us_per_row": 1e6 * spent / rows}


def _bytes_below(folder: Path) -> int:
    return sum(path.stat().st_size for path in folder.rglob("*") if path.is_file())


def _measured(function: Callable[..., dict[str, Any]], arguments: tuple[Any, ...]) -> dict[str, Any]:
    before, cpu_s = peak_memory(), time.process_time()
    found = function(*arguments)
    return found | {"cpu_s": time.process_time() - cpu_s, "peak_memory": peak_memory(), "memory_before": before}


def apart(text: str, function: Callable[..., dict[str, Any]], *arguments: Any) -> None:
    """Call a function in a new process, and print what it returns, with seconds and the peak of memory."""
    started = time.perf_counter()
    with ProcessPoolExecutor(1, multiprocessing.get_context("spawn")) as pool:
        found = pool.submit(_measured, function, arguments).result()
    shown = {key: round(value, 3) if isinstance(value, float) else value for key, value in found.items()}
    print(f"{text}: {time.perf_counter() - started:.1f} s in all; {shown}", flush=True)


def main() -> None:
    rows = int(sys.argv[1]) if len(sys.argv) > 1 else ROWS
    with tempfile.TemporaryDirectory(dir=sys.argv[2] if len(sys.argv) > 2 else None) as name:
        folder = Path(name)
        (folder / "run").mkdir()
        apart(f"write {rows} rows", write_survey, folder, rows)
        apart("plan from nothing", plan, folder, "first", False)
        apart("plan again, hashes at hand", plan, folder, "again", False)
        apart("a worker cuts parts", cut, folder, "first")
        apart("(publish)", publish, folder, 0.0)
        apart("plan beside the same rows", plan, folder, "same", True)
        apart("(publish)", publish, folder, 0.001)
        apart("plan beside a thousandth changed", plan, folder, "changed", True)
        apart("a worker cuts parts of kept rows", cut, folder, "changed")


if __name__ == "__main__":
    main()
