"""What a survey costs by its number of stars: runs of the command line, and the plot of them beside stock emcee."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path
from typing import Any

import numpy as np

from speed.cases import make_case, tamarin_settings, write_tamarin
from speed.common import Row, Suite, fit_survey, print_rows, run_facts
from speed.end_to_end import stock_loops

STARS_SHOWN = (1e3, 1e9)
FEW, MANY = 2, 1_000
LOOP_COLOURS = ("#8a8a8a", "#b08d57")


def measured(suite: Suite, size: int) -> Row:
    """Return what a run of so many rows of the survey costs on two workers, from the command to its end."""
    room = suite.room("scaling")
    tables = write_tamarin(size, room / f"tables-{size}")
    done = fit_survey(tamarin_settings(tables, room / f"run-{size}"))
    return {
        "run": f"{size:,} rows",
        "stars": done.facts["counts"]["catalogue"],
        "core_s": done.core_s,
        "wall_s": done.wall_s,
        "workers": max(done.facts["workers"], 1),
    }


def earlier(run_dir: Path) -> Row:
    """Return what an earlier run cost by its run.json; core-seconds are its workers' wall seconds, idle ones too."""
    facts = run_facts(run_dir)
    wall_s = (datetime.fromisoformat(facts["end"]) - datetime.fromisoformat(facts["start"])).total_seconds()
    workers, work_s = max(facts["workers"], 1), facts["seconds"]["wall"].get("work", 0.0)
    return {
        "run": str(facts["name"]),
        "stars": facts["counts"]["catalogue"],
        "core_s": wall_s + (workers - 1) * work_s,
        "wall_s": wall_s,
        "workers": workers,
    }


def measure(suite: Suite) -> dict[str, Any]:
    """Measure runs of the sizes asked for, take up earlier ones, and measure stock emcee's loops beside them."""
    rows = [measured(suite, size) for size in suite.sizes] + [earlier(run_dir) for run_dir in suite.runs]
    columns = {"run": "run", "stars": "stars", "workers": "workers", "wall_s": "wall s", "core_s": "core-s"}
    for row in rows:
        row["stars_per_core_s"] = row["stars"] / row["core_s"]
    print_rows(rows, columns | {"stars_per_core_s": "stars/core-s"})
    return {"rows": rows, "loops": stock_loops(suite, make_case("tamarin", suite.stars, suite.room("scaling-loops")))}


def draw(scaling: dict[str, Any], path: Path) -> None:
    """Draw core-seconds against stars, with the hours on two cores and on a thousand at the right."""
    import matplotlib

    matplotlib.use("agg")
    import matplotlib.pyplot as plt

    figure, axes = plt.subplots(figsize=(7.6, 4.8), layout="constrained")
    stars = np.array(STARS_SHOWN)
    largest = max(scaling["rows"], key=lambda row: row["stars"])
    ours = largest["stars"] / largest["core_s"]
    for (name, rates), colour in zip(scaling["loops"].items(), LOOP_COLOURS, strict=False):
        label = f"{name}, a star at a time, at the same ESS"
        axes.plot(stars, stars / rates["same_ess"], color=colour, lw=1.2, ls="--", label=label)
    axes.plot(stars, stars / ours, color="#1f3b5c", lw=1.2, label=f"starkiln at {ours:.0f} stars per core-second")
    points = [(row["stars"], row["core_s"]) for row in scaling["rows"]]
    axes.plot(*zip(*points, strict=True), "o", color="#1f3b5c", ms=5, label="starkiln run, measured")
    axes.set(xscale="log", yscale="log", xlim=STARS_SHOWN, xlabel="stars", ylabel="core-seconds")
    axes.grid(color="#e4e4e4", lw=0.6)
    axes.set_axisbelow(True)
    axes.spines["top"].set_visible(False)
    for place, cores in ((1.0, FEW), (1.15, MANY)):
        hours = axes.secondary_yaxis(
            place, functions=(lambda s, c=cores: s / (3600.0 * c), lambda h, c=cores: 3600.0 * c * h)
        )
        hours.set_ylabel(f"hours on {cores:,} cores")
    axes.legend(frameon=False, fontsize=8, loc="upper left")
    figure.savefig(path, dpi=160)
    plt.close(figure)
