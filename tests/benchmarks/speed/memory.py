"""Peak memory of one worker against the rows of a part and the number of bands, each in a process of its own.

    PYTHONPATH=tests python -m benchmarks.speed.memory ROWS BANDS FOLDER

does one part with short chains, and prints its peak memory as JSON.
"""

from __future__ import annotations

import json
import os
import resource
import subprocess
import sys
from pathlib import Path
from typing import Any

from benchmarks.speed.cases import simulated
from benchmarks.speed.common import Row, Suite, print_rows
from benchmarks.speed.costs import bands_of
from benchmarks.speed.end_to_end import fit_part, make_job

TESTS = Path(__file__).parents[2]
ROWS = (500, 2_500, 10_000)
BANDS = (3, 10, 20)
SHORT = {"max_steps": 64}


def one_part(rows: int, bands: int, folder: Path) -> int:
    """Fit a part of rows and return the peak memory of this process in bytes."""
    case = simulated(rows, folder, "smooth", bands_of(bands), sampling=SHORT)
    fit_part(make_job(case, folder / "part"), folder)
    return 1024 * resource.getrusage(resource.RUSAGE_SELF).ru_maxrss


def peak(suite: Suite, rows: int, bands: int) -> Row:
    """Return the peak memory of a process that does one part."""
    folder = suite.room(f"memory-{rows}-{bands}")
    command = [sys.executable, "-m", __spec__.name, str(rows), str(bands), str(folder)]
    paths = os.pathsep.join(filter(None, [str(TESTS), os.environ.get("PYTHONPATH")]))
    said = subprocess.run(
        command, stdout=subprocess.PIPE, text=True, check=True, env=os.environ | {"PYTHONPATH": paths}
    )
    return {"rows": rows, "bands": bands, "peak_mb": json.loads(said.stdout)["bytes"] / 1e6}


def measure(suite: Suite) -> dict[str, Any]:
    """Measure the peak against rows and against bands."""
    found = [peak(suite, 10, BANDS[1])]
    found += [peak(suite, rows, BANDS[1]) for rows in ROWS]
    found += [peak(suite, ROWS[0], bands) for bands in BANDS if bands != BANDS[1]]
    print_rows(found, {"rows": "rows of the part", "bands": "bands", "peak_mb": "peak MB"})
    return {"rows": found}


if __name__ == "__main__":
    print(json.dumps({"bytes": one_part(int(sys.argv[1]), int(sys.argv[2]), Path(sys.argv[3]))}))
