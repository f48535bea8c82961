"""How fast starkiln is, and beside what: samplers, the kernel's floor, a whole part, start-up, memory, workers, costs.

    python tests/benchmarks/speed.py [--stars N] [--out FOLDER] [--only NAME ...] [--sizes ROWS ...] [--run RUN_DIR ...]

Prints a table for each section, writes FOLDER/speed.json, where sections that are not measured keep what is there, and
draws FOLDER/speed.svg and .png from the section "scaling". Times are CPU times unless they are called wall. Sections:
samplers, floor, end_to_end, startup, memory, workers, driver, costs, scaling. `--stars 8` is a trial.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("XLA_FLAGS", "--xla_cpu_multi_thread_eigen=false intra_op_parallelism_threads=1")
os.environ.setdefault("JAX_PLATFORMS", "cpu")

import argparse
import json
import sys
import time
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

sys.path.insert(0, str(Path(__file__).parents[1]))

from benchmarks.speed import costs, driver, end_to_end, floor, memory, samplers, scaling, startup, workers
from benchmarks.speed.common import Suite

SECTIONS = {
    "samplers": samplers.measure,
    "floor": floor.measure,
    "end_to_end": end_to_end.measure,
    "startup": startup.measure,
    "memory": memory.measure,
    "workers": workers.measure,
    "driver": driver.measure,
    "costs": costs.measure,
    "scaling": scaling.measure,
}
PACKAGES = ("starkiln", "numba", "numpy", "emcee", "arviz", "blackjax", "jax")


def options() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--stars", type=int, default=128, help="stars of a measurement")
    parser.add_argument("--out", type=Path, default=Path("runs/speed"), help="where the results go")
    parser.add_argument("--only", nargs="+", choices=SECTIONS, default=list(SECTIONS), metavar="NAME")
    parser.add_argument("--sizes", nargs="*", type=int, default=[1_000, 5_000], metavar="ROWS", help="runs to plot")
    parser.add_argument(
        "--run", nargs="*", type=Path, default=[], metavar="RUN_DIR", help="earlier runs of that survey"
    )
    return parser.parse_args()


def versions() -> dict[str, str]:
    """Return the versions of what is compared, as far as it is installed."""
    found = {}
    for package in PACKAGES:
        try:
            found[package] = version(package)
        except PackageNotFoundError:
            continue
    return found


def main() -> None:
    given = options()
    given.out.mkdir(parents=True, exist_ok=True)
    path = given.out / "speed.json"
    kept: dict[str, Any] = json.loads(path.read_text()) if path.exists() else {}
    with TemporaryDirectory() as folder:
        suite = Suite(given.stars, Path(folder), tuple(given.sizes), tuple(given.run))
        for section in (name for name in SECTIONS if name in given.only):
            print(f"== {section} ==", flush=True)
            began = time.perf_counter()
            found = SECTIONS[section](suite)
            suite.results[section] = found
            told = {"date": datetime.now(UTC).isoformat(timespec="seconds"), "stars": given.stars}
            kept[section] = {**told, "wall_s": time.perf_counter() - began, "versions": versions(), **found}
            path.write_text(json.dumps(kept, indent=2) + "\n")
    if "scaling" in kept and kept["scaling"]["rows"]:
        for suffix in ("svg", "png"):
            scaling.draw(kept["scaling"], given.out / f"speed.{suffix}")
    print(f"results: {path}")


if __name__ == "__main__":
    main()
