"""What a survey costs by its number of stars: runs of the command line, and the plot of them beside stock emcee."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path
from typing import Any

from benchmarks.speed.cases import make_case, tamarin_settings, write_tamarin
from benchmarks.speed.common import Row, Suite, fit_survey, print_rows, run_facts
from benchmarks.speed.end_to_end import stock_loops
from benchmarks.speed.samplers import KERNEL_LOOP, PLAIN_LOOP

STARS_SHOWN = (1e3, 1e9)
FEW, MANY = 2, 1_000
OUR_COLOUR, LOOP_COLOURS = "#1f3b5c", ("#8a8a8a", "#b08d57")
LOOP_LABELS = {
    KERNEL_LOOP: "stock emcee on our kernel, at the same ESS",
    PLAIN_LOOP: "stock emcee on NumPy, at the same ESS",
}


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
    """Return what an earlier run cost by its run.json.

    Core-seconds are wall seconds: those that its workers were busy, of all parts, and of its last start all but the
    fitting.
    """
    facts = run_facts(run_dir)
    wall_s = (datetime.fromisoformat(facts["end"]) - datetime.fromisoformat(facts["start"])).total_seconds()
    seconds = facts["seconds"]
    busy_s = sum(seconds["summed_over_workers"].values())
    return {
        "run": str(facts["name"]),
        "stars": facts["counts"]["catalogue"],
        "core_s": busy_s + wall_s - seconds["wall"].get("work", 0.0),
        "wall_s": wall_s,
        "workers": max(facts["workers"], 1),
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
    low, high = STARS_SHOWN
    for (name, rates), colour in zip(scaling["loops"].items(), LOOP_COLOURS, strict=False):
        rate = rates["same_ess"]
        label = f"{LOOP_LABELS.get(name, name)}: {rate:.2g} stars per core-second"
        axes.plot([low, high], [low / rate, high / rate], color=colour, lw=1.2, ls="--", label=label)
    points = sorted((row["stars"], row["core_s"]) for row in scaling["rows"])
    most, cost_s = points[-1]
    axes.plot(*zip(*points, strict=True), "o-", color=OUR_COLOUR, ms=5, lw=1.6, label="starkiln run, measured")
    label = f"at its rate with {most:,} stars: {most / cost_s:.3g} stars per core-second"
    axes.plot([most, high], [cost_s, cost_s * high / most], color=OUR_COLOUR, lw=1.0, ls=":", label=label)
    axes.set(xscale="log", yscale="log", xlim=(0.8 * min(low, points[0][0]), high), ylabel="core-seconds")
    axes.set_xlabel("stars of ten bands, A$_V$ and z$_1$ fitted")
    axes.grid(color="#e4e4e4", lw=0.6)
    axes.set_axisbelow(True)
    axes.minorticks_off()
    axes.spines["top"].set_visible(False)
    for place, cores in ((1.0, FEW), (1.16, MANY)):
        _add_hours(axes, place, cores)
    axes.legend(frameon=False, fontsize=8, loc="upper left")
    figure.savefig(path, dpi=160)
    plt.close(figure)


def _add_hours(axes: Any, place: float, cores: int) -> None:
    from matplotlib.ticker import LogLocator

    of_hour = 3600.0 * cores
    hours = axes.secondary_yaxis(place, functions=(lambda core_s: core_s / of_hour, lambda hour: hour * of_hour))
    hours.yaxis.set_major_locator(LogLocator(numticks=20))
    hours.minorticks_off()
    hours.set_ylabel(f"hours on {cores:,} cores")
