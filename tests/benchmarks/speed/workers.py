"""How much of a second worker arrives: wall seconds of the fitting of one survey on one worker and on two."""

from __future__ import annotations

from typing import Any

from benchmarks.speed.cases import tamarin_settings, write_tamarin
from benchmarks.speed.common import Row, Suite, fit_survey, print_rows

ROWS_PER_PART = 250


def fitted_by(suite: Suite, tables: Any, workers: int) -> Row:
    """Return the seconds of the steps of a run on so many workers."""
    compute = {"workers": workers, "rows_per_part": ROWS_PER_PART}
    done = fit_survey(tamarin_settings(tables, suite.room("workers") / f"on-{workers}", compute=compute))
    wall = done.facts["seconds"]["wall"]
    return {
        "workers": done.facts["workers"],
        "stars": done.facts["counts"]["catalogue"],
        "fitting_s": wall["work"],
        "start_s": wall.get("start workers", 0.0),
        "wall_s": done.wall_s,
        "core_s": done.core_s,
    }


def measure(suite: Suite) -> dict[str, Any]:
    """Fit the same rows on one worker and on two; the efficiency is half the ratio of the fitting's wall seconds."""
    tables = write_tamarin(max(16 * suite.stars, 1_000), suite.room("workers") / "tables")
    rows = [fitted_by(suite, tables, workers) for workers in (1, 2)]
    for row in rows:
        row["efficiency"] = rows[0]["fitting_s"] / (row["workers"] * row["fitting_s"])
    columns = {"workers": "workers", "stars": "stars", "fitting_s": "fitting s", "efficiency": "efficiency"}
    print_rows(rows, columns | {"start_s": "starting them s", "wall_s": "command s", "core_s": "core-s"})
    return {"rows": rows}
