"""A forecast as a table file, pictures and lines of text."""

from __future__ import annotations

import math
import os
from pathlib import Path

from astropy.table import Row, Table

from starkiln.errors import SettingsError
from starkiln.report.forecast_figure import forecast_figure, save_figure
from starkiln.stages.forecast import QUANTITIES, is_misled

MISLED = "*"


def check_folder(folder: Path) -> None:
    """Refuse a folder that is not for forecasts.

    Raises
    ------
    SettingsError
        If it is the directory of a run, or no folder.
    """
    if (folder / "generations").exists():
        raise SettingsError(f"run.output: {folder} is the directory of a run: give the forecast a folder of its own")
    if folder.exists() and not folder.is_dir():
        raise SettingsError(f"run.output: {folder} is a file: name a folder")


def save_forecast(table: Table, folder: Path) -> list[Path]:
    """Write the table (ECSV) and the picture (PDF and PNG), each whole or not at all, and return their paths."""
    folder.mkdir(parents=True, exist_ok=True)
    path, temporary = folder / "forecast.ecsv", folder / ".forecast.ecsv.tmp"
    table.write(temporary, format="ascii.ecsv", overwrite=True)
    os.replace(temporary, path)
    return [path, *save_figure(forecast_figure(table), folder / "forecast")]


def describe_forecast(table: Table) -> str:
    """Return the half-widths of the grid in per cent, with their ratios for each set of bands left out."""
    sets = list(dict.fromkeys(table["bands"]))
    lines = [f"Half of the 68 % interval in per cent of the value, median of {table['stars'][0]} invented stars"]
    if len(sets) > 1:
        lines += ["In brackets, how many times as wide it is"]
        lines += [f"  {place}. {name}" for place, name in enumerate(sets[1:], 1)]
    header = ["T [K]", table.meta["mag"], "R [solRad]", "parallax [mas]", "T [%]", "R [%]", "L [%]", "not detected"]
    grid = [header]
    for first in range(0, len(table), len(sets)):
        widest, others = table[first], [table[first + place] for place in range(1, len(sets))]
        grid.append(
            [
                f"{widest['teff']:.0f}",
                f"{widest['mag']:g}",
                f"{widest['radius']:g}",
                f"{widest['parallax']:.3g}",
                *(_width(quantity, widest, others) for quantity in QUANTITIES),
                f"{100.0 * widest['not_detected']:.0f} %",
            ]
        )
    widths = [max(map(len, column)) for column in zip(*grid, strict=True)]
    lines += ["  ".join(text.rjust(width) for text, width in zip(row, widths, strict=True)) for row in grid]
    if any(MISLED in text for row in grid for text in row):
        lines += [f"{MISLED} fewer than a third of the stars lie in their interval: the priors decide, not the data"]
    return "\n".join(lines)


def _width(quantity: str, widest: Row, others: list[Row]) -> str:
    width = widest[f"{quantity}_half_width"]
    if math.isnan(width):
        return "-"
    ratios = ", ".join("-" if math.isnan(ratio := row[f"{quantity}_ratio"]) else f"{ratio:.2f}" for row in others)
    mark = MISLED if is_misled(widest, quantity) else ""
    return f"{mark}{100.0 * width:.3g}" + (f" ({ratios})" if others else "")
