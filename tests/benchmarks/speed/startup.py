"""How long a user waits: for a command that only talks, for a check, and for the first star."""

from __future__ import annotations

from typing import Any

from benchmarks.speed.cases import ROOT, tamarin_settings, write_tamarin
from benchmarks.speed.common import Row, Suite, fit_survey, print_rows, starkiln

TRIES = 5
ROWS = 10


def best_wall_s(*arguments: Any) -> float:
    """Return the least wall seconds of some tries of a command."""
    return min(starkiln(*arguments).wall_s for _ in range(TRIES))


def first_star(suite: Suite, tables: Any, name: str) -> Row:
    """Return what a run of ten rows takes; its kernels are kept in a folder of this measurement."""
    cache = suite.room("startup") / "kernels"
    settings = tamarin_settings(tables, suite.room("startup") / name)
    done = fit_survey(settings, {"STARKILN_KERNEL_CACHE": str(cache)})
    wall = done.facts["seconds"]["wall"]
    return {"what": f"run of {ROWS} rows, {name}", "wall_s": done.wall_s, "warm_up_s": wall.get("warm up", 0.0)}


def measure(suite: Suite) -> dict[str, Any]:
    """Measure the start of commands, warm, and of a run with and without compiled kernels."""
    rows: list[Row] = [
        {"what": "starkiln --help", "wall_s": best_wall_s("--help")},
        {"what": "starkiln check configs/demo.toml", "wall_s": best_wall_s("check", ROOT / "configs" / "demo.toml")},
    ]
    tables = write_tamarin(ROWS, suite.room("startup") / "tables")
    rows += [first_star(suite, tables, name) for name in ("empty kernel cache", "full kernel cache")]
    empty, full = rows[-2:]
    empty["compile_share"] = (empty["wall_s"] - full["wall_s"]) / empty["wall_s"]
    columns = {"what": "what", "wall_s": "wall s", "warm_up_s": "warm-up s", "compile_share": "share of compiling"}
    print_rows(rows, columns)
    return {"rows": rows}
