"""Time to build the quality page of a run, and the size of the page: python tests/benchmarks/page.py RUN_DIR [ROWS]

The run directory is only read: the page goes to a temporary folder. With ROWS, the catalogue is repeated, in one file,
until it has so many rows.
"""

from __future__ import annotations

import sys
import tempfile
import time
from pathlib import Path

import pyarrow.parquet as pq

from starkiln.report.page import read_run, render


def main() -> None:
    generation, rows = Path(sys.argv[1]) / "current", int(sys.argv[2]) if len(sys.argv) > 2 else 0
    with tempfile.TemporaryDirectory() as scratch:
        folder = generation.resolve() if not rows else repeated(generation.resolve(), rows, Path(scratch, "many"))
        started, cpu = time.monotonic(), time.process_time()
        page = render(read_run(folder), Path(scratch, "figures"))
        seconds, cpu_seconds = time.monotonic() - started, time.process_time() - cpu
        saved = sum(path.stat().st_size for path in Path(scratch, "figures").iterdir())
    count = sum(pq.read_metadata(path).num_rows for path in (generation / "catalogue").rglob("*.parquet"))
    print(f"{max(count, rows):,} rows: {seconds:.1f} s ({cpu_seconds:.1f} s of processor time)")
    print(f"page {len(page.encode()) / 1e6:.2f} MB, figures for papers {saved / 1e6:.1f} MB")


def repeated(generation: Path, rows: int, folder: Path) -> Path:
    """Return a copy of a generation whose catalogue is repeated until it has so many rows."""
    (folder / "catalogue").mkdir(parents=True)
    for name in ("run.json", "settings.toml"):
        (folder / name).write_bytes((generation / name).read_bytes())
    table, written = pq.read_table(generation / "catalogue"), 0
    with pq.ParquetWriter(folder / "catalogue" / "part-000000.parquet", table.schema) as writer:
        while written < rows:
            some = table.slice(0, min(table.num_rows, rows - written))
            writer.write_table(some)
            written += some.num_rows
    return folder


if __name__ == "__main__":
    main()
