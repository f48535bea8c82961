"""A refit of what changed, beside the full run: rows that were fitted, rows that stayed the same, and time.

    python tests/benchmarks/refit.py [ROWS] [FOLDER]

ROWS invented stars (200,000 unless given) are fitted. Then 1,370 of 200,000 change, 410 come and 120 go, and all are
written to other files with other row groups; the run is done again, and once more with nothing changed. Every row that
did not change is compared bit by bit. The fits are made short (see SAMPLING), which is hard on the refit: what it
saves is less than with the settings of a survey. Exits with 1 if anything is not as it should be.
"""

from __future__ import annotations

import json
import os
import shutil
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

sys.path.insert(0, str(Path(__file__).parents[1]))

from pipeline_survey import blackbodies
from small_survey import settings_for, with_column
from starkiln.engine.run import RunResult, run_settings
from starkiln.settings import Settings

ROWS = 200_000
CHANGED, NEW, GONE = 1370 / ROWS, 410 / ROWS, 120 / ROWS
SAMPLING = {"sampling__walkers": 32, "sampling__effective_samples": 100, "sampling__max_steps": 256}
MOST_OF_FULL_RUN = 0.10


def write(table: pa.Table, folder: Path, files: int, row_group_size: int) -> None:
    """Write a table as so many files in a folder of its own."""
    shutil.rmtree(folder, ignore_errors=True)
    folder.mkdir(parents=True)
    edges = np.linspace(0, len(table), files + 1).astype(int)
    for number in range(files):
        piece = table.slice(edges[number], edges[number + 1] - edges[number])
        pq.write_table(piece, folder / f"{files}-{number:03d}.parquet", row_group_size=row_group_size)


def changed_survey(table: pa.Table) -> tuple[pa.Table, np.ndarray, tuple[int, int, int]]:
    """Return the next version of a survey, the ids that stay as they are, and how many changed, came and went."""
    rows = len(table)
    changed, new, gone = (max(1, round(share * rows)) for share in (CHANGED, NEW, GONE))
    chosen = np.random.default_rng(5).permutation(rows)
    is_changed, is_gone = np.isin(np.arange(rows), chosen[:changed]), np.isin(np.arange(rows), chosen[-gone:])
    flux = np.where(is_changed, 1.03, 1.0) * table["panstarrs_r"].to_numpy()
    stays = table["star_id"].to_numpy()[~is_changed & ~is_gone]
    kept = with_column(table, "panstarrs_r", flux).filter(pa.array(~is_gone))
    middle = len(kept) // 3
    survey = pa.concat_tables([kept.slice(0, middle), blackbodies(new, rows + 1), kept.slice(middle)])
    return survey, stays, (changed, new, gone)


def timed_run(settings: Settings, name: str) -> tuple[RunResult, float]:
    """Do a run, and return how it ended and the seconds it took, from settings to the published catalogue."""
    started = time.perf_counter()
    result = run_settings(settings)
    seconds = time.perf_counter() - started
    print(f"{name}: exit {result.exit_code}, {seconds:.1f} s; {result.message}", flush=True)
    wall = json.loads((settings.run.output / "current" / "run.json").read_text())["seconds"]["wall"]
    print(f"    {wall}", flush=True)
    return result, seconds


def catalogue(run_dir: Path, ids: np.ndarray) -> pa.Table:
    """Return the catalogue's rows of some ids, in the order of the ids."""
    files = sorted((run_dir / "catalogue").glob("*.parquet"))
    table = pa.concat_tables([pq.read_table(file) for file in files])
    order = np.argsort(table["star_id"].to_numpy())
    place = np.searchsorted(table["star_id"].to_numpy()[order], np.sort(ids))
    return table.take(pa.array(order[place])).combine_chunks()


def same_bits(first: pa.Table, second: pa.Table) -> bool:
    """Return whether two tables agree in every bit, NaN included."""
    sinks = [pa.BufferOutputStream() for _ in range(2)]
    for sink, table in zip(sinks, (first, second), strict=True):
        with pa.ipc.new_stream(sink, table.schema) as writer:
            writer.write_table(table)
    return bool(sinks[0].getvalue() == sinks[1].getvalue())


def snapshot(folder: Path) -> list[tuple[str, int, int]]:
    """Return name, time of change and inode of everything below a folder."""
    return [(str(path), path.lstat().st_mtime_ns, path.lstat().st_ino) for path in sorted(folder.rglob("*"))]


def measure(rows: int, folder: Path) -> bool:
    """Do the three runs and print what came of them; return whether all is as it should be."""
    survey, run_dir = folder / "survey", folder / "run"
    settings = settings_for(survey, run_dir, **SAMPLING, input__carry=["ra", "dec"])
    table = blackbodies(rows)
    write(table, survey, files=10, row_group_size=20_000)
    print(f"{rows} rows, {os.cpu_count()} processors", flush=True)
    _, full_s = timed_run(settings, "full run")
    after, stays, (changed, new, gone) = changed_survey(table)
    before = catalogue(run_dir, stays)
    write(after, survey, files=7, row_group_size=4096)
    _, refit_s = timed_run(settings, "refit")
    counts = json.loads((run_dir / "current" / "run.json").read_text())["rows"]
    told = {name: count for name, count in counts.items() if count}
    expected = {"new": new, "changed": changed, "kept": rows - changed - gone, "gone": gone}
    published = snapshot(run_dir / "generations")
    nothing, nothing_s = timed_run(settings, "nothing changed")
    same = same_bits(before, catalogue(run_dir, stays))
    untouched = nothing.exit_code == 0 and snapshot(run_dir / "generations") == published
    share = refit_s / full_s
    print(f"refitted {told.get('new', 0) + told.get('changed', 0)} of {new + changed} new or changed rows: {told}")
    print(f"the other {len(stays)} rows: {'same bits' if same else 'DIFFERENT'}")
    print(f"the refit took {share:.1%} of the full run's time (at most {MOST_OF_FULL_RUN:.0%} is the aim)")
    print(f"nothing changed: {'no file touched' if untouched else 'FILES TOUCHED'}, {nothing_s:.1f} s")
    return told == expected and same and untouched and share < MOST_OF_FULL_RUN


def main() -> None:
    rows = int(sys.argv[1]) if len(sys.argv) > 1 else ROWS
    with tempfile.TemporaryDirectory(dir=sys.argv[2] if len(sys.argv) > 2 else None) as folder:
        if not measure(rows, Path(folder)):
            raise SystemExit(1)


if __name__ == "__main__":
    main()
