"""A run on a cluster of which workers die, come, and disagree, beside a run on this machine's own workers.

    .venv/bin/python tests/benchmarks/cluster.py [STARS]

Four workers of a real scheduler, and a fifth with another version of the package. Two are killed, and two come, when a
quarter and a half of the parts are done. Prints how both runs ended, and whether their rows are equal, bit by bit.
"""

from __future__ import annotations

import json
import sys
import tempfile
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

import pyarrow as pa
import pyarrow.parquet as pq

from dask_cluster import DaskCluster, another_version, kill_tree
from pipeline_survey import blackbodies, write
from real_runs import start_run
from small_survey import settings_for
from starkiln.settings import Settings

PART_ROWS = 25

MAIN = """
import sys
from starkiln import cli
if __name__ == "__main__":
    del sys.argv[1:3]
    cli.main()
"""


def main() -> None:
    stars = int(sys.argv[1]) if len(sys.argv) > 1 else 1000
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        write(folder / "survey", row_group_size=200, a=blackbodies(stars // 2, 1), b=blackbodies(stars // 2, 10_001))
        local, shared = settings_of(folder, "local"), settings_of(folder, "shared")
        print(f"{stars} stars, {stars // PART_ROWS} parts")
        on_cluster(folder, shared, stars // PART_ROWS)
        start = time.monotonic()
        process = start_run(folder, local, "", "--quiet", main=MAIN)
        _, errors = process.communicate()
        print(f"two workers of its own: exit {process.returncode} after {time.monotonic() - start:.0f} s", errors)
        for table in ("catalogue", "rejected", "index"):
            same = rows_of(local, table).equals(rows_of(shared, table))
            print(f"{table}: {rows_of(local, table).num_rows} rows, {'the same' if same else 'OTHER'} bits")


def settings_of(folder: Path, output: str) -> Settings:
    changes = {"compute__rows_per_part": PART_ROWS, "compute__workers": 2}
    return settings_for(folder / "survey", folder / output, **changes)


def on_cluster(folder: Path, settings: Settings, parts: int) -> None:
    """Do the run while workers come and go, and print what happened."""
    with DaskCluster(folder / "dask") as cluster:
        first = [cluster.worker() for _ in range(4)]
        cluster.worker(package=another_version(folder / "other"))
        start = time.monotonic()
        process = start_run(folder, settings, "", "--scheduler-file", str(cluster.scheduler_file), "--quiet", main=MAIN)
        for share, victim in ((0.25, first[0]), (0.5, first[1])):
            while process.poll() is None and parts_done(settings) < share * parts:
                time.sleep(0.1)
            kill_tree(victim)
            cluster.worker()
            print(f"{time.monotonic() - start:6.1f} s: {parts_done(settings)} parts done, one worker killed, one added")
        process.communicate()
        print(f"cluster: exit {process.returncode} after {time.monotonic() - start:.0f} s")
        alive = sum(worker.poll() is None for worker in cluster.processes[1:])
        print(f"{alive} workers and {'the' if cluster.scheduler.poll() is None else 'NO'} scheduler still run")
    (log,) = (settings.run.output / "logs").iterdir()
    for line in map(json.loads, log.read_text().splitlines()):
        if line["event"] in ("worker", "refused", "attempt"):
            print("   ", {key: value for key, value in line.items() if key != "trace"})


def parts_done(settings: Settings) -> int:
    return len(list(settings.run.output.glob("generations/*.partial/parts/catalogue/part-*")))


def rows_of(settings: Settings, table: str) -> pa.Table:
    paths = sorted((settings.run.output / "current" / table).rglob("*.parquet"))
    return pa.concat_tables([pq.ParquetFile(path).read() for path in paths])


if __name__ == "__main__":
    main()
