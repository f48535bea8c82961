"""What a part costs the driver, whatever is in it: CPU seconds of runs of many small parts, one by one."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

from benchmarks.speed.common import Clock, Row, Suite, print_rows
from pipeline_survey import QUICK, blackbodies, write
from small_survey import settings_for
from starkiln.engine.run import run_settings

ROWS = 10_000
ROWS_PER_PART = (1_000, 100, 20)


def measure(suite: Suite) -> dict[str, Any]:
    """Fit the same rows in more and more parts; the driver's time grows by what a part takes it, packing included."""
    room = suite.room("driver")
    survey = write(room / "survey", stars=blackbodies(ROWS, 1))
    rows: list[Row] = []
    for rows_per_part in ROWS_PER_PART:
        compute = {"compute__workers": 1, "compute__rows_per_part": rows_per_part}
        settings = settings_for(survey, room / f"run-{rows_per_part}", **QUICK | compute)
        clock = Clock()
        run_settings(settings)
        rows.append({"parts": ROWS // rows_per_part, "driver_s": clock.lap()})
    for before, row in pairwise(rows):
        row["part_ms"] = 1e3 * (row["driver_s"] - before["driver_s"]) / (row["parts"] - before["parts"])
    print_rows(rows, {"parts": "parts", "driver_s": "driver's core-s", "part_ms": "ms a part more"})
    return {"rows": rows}
