"""The first rows of a catalogue, as a reader wants to see them."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import pyarrow.parquet as pq

from starkiln import flags

QUANTITIES = (("teff", "T [K]"), ("radius", "R [solRad]"), ("lum", "L [solLum]"))


def first_rows(generation: Path, rows: int = 5) -> str:
    """Return the id, temperature, radius, luminosity and flags of the first stars as lines of text.

    Parameters
    ----------
    generation
        The folder of a published generation.
    rows
        How many stars to show.
    """
    first_file = min((generation / "catalogue").rglob("*.parquet"))
    with pq.ParquetFile(first_file, pre_buffer=False) as file:
        batch = next(file.iter_batches(rows, use_threads=False), None)
        id_name = file.schema_arrow.names[0]
    stars = [] if batch is None else batch.to_pylist()
    table = [[id_name, *(title for _, title in QUANTITIES), "flags"]]
    for star in stars:
        values = [_with_interval(star, name) for name, _ in QUANTITIES]
        table.append([str(star[id_name]), *values, ", ".join(flags.names(star["flags"])) or "none"])
    widths = [max(map(len, column)) for column in zip(*table, strict=True)]
    lines = ("  ".join(text.ljust(width) for text, width in zip(row, widths, strict=True)) for row in table)
    return "\n".join(line.rstrip() for line in lines)


def _with_interval(star: dict[str, Any], name: str) -> str:
    median = star[f"{name}_p50"]
    if median is None:
        return "-"
    above, below = star[f"{name}_hi68"] - median, median - star[f"{name}_lo68"]
    return f"{_rounded(median, 4)} +{_rounded(above, 2)} -{_rounded(below, 2)}"


def _rounded(value: float, digits: int) -> str:
    """Return a number with so many significant digits and no exponent."""
    if value == 0:
        return "0"
    decimals = digits - 1 - math.floor(math.log10(abs(value)))
    return f"{round(value, decimals):.{max(decimals, 0)}f}"
