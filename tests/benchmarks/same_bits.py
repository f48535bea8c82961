"""The same settings, the same bits: the demo survey on 1, 2 and 4 workers, in parts and row groups of other sizes.

    python tests/benchmarks/same_bits.py

Each catalogue is read whole and compared bit by bit with the first.
"""

from __future__ import annotations

import hashlib
import tempfile
import tomllib
from pathlib import Path

import pyarrow as pa
import pyarrow.dataset as ds
import pyarrow.parquet as pq
import tomlkit

import starkiln

DEMO = Path(__file__).parents[2] / "configs" / "demo.toml"
CASES = [
    ("1 worker", {"workers": 1}, None),
    ("2 workers", {"workers": 2}, None),
    ("4 workers", {"workers": 4}, None),
    ("500 rows a part", {"workers": 2, "rows_per_part": 500}, None),
    ("5000 rows a part", {"workers": 2, "rows_per_part": 5000}, None),
    ("row groups of 100", {"workers": 2}, 100),
    ("row groups of 100,000", {"workers": 2}, 100_000),
]


def catalogue(folder: Path, name: str, compute: dict, row_group_size: int | None) -> pa.Table:
    settings = tomllib.loads(DEMO.read_text())
    survey = DEMO.parent / settings["input"]["tables"]
    table = ds.dataset(survey, partitioning="hive").to_table()
    tables = folder / f"{name}.parquet"
    pq.write_table(table.sort_by("star_id"), tables, row_group_size=row_group_size or 1000)
    settings["input"]["tables"] = str(tables)
    settings["run"]["output"] = str(folder / name)
    settings["compute"] = settings.get("compute", {}) | compute
    config = folder / f"{name}.toml"
    config.write_text(tomlkit.dumps(settings))
    result = starkiln.run(config)
    if result.exit_code:
        raise SystemExit(result.message)
    files = sorted((folder / name / "catalogue").glob("*.parquet"))
    return pa.concat_tables([pq.read_table(file) for file in files]).combine_chunks()


def digest(table: pa.Table) -> str:
    """Return a hash of every bit of a table's columns."""
    sink = pa.BufferOutputStream()
    with pa.ipc.new_stream(sink, table.schema) as writer:
        writer.write_table(table)
    return hashlib.sha256(sink.getvalue()).hexdigest()


def main() -> None:
    with tempfile.TemporaryDirectory() as folder:
        first = None
        for number, (text, compute, row_group_size) in enumerate(CASES):
            table = catalogue(Path(folder), f"case{number}", compute, row_group_size)
            found = digest(table)
            first = first or found
            print(
                f"{text:24s} {table.num_rows} rows  {'same bits' if found == first else 'DIFFERENT'}", flush=True
            )


if __name__ == "__main__":
    main()
