"""Make a million stars of the Tamarin Strip, invented like the demo's, as tamarin_million.toml reads them.

    python tests/benchmarks/surveys/make_tamarin_million.py [STARS] [FOLDER]

Dwarfs, giants and hot stars of the demo's kinds in its proportions, without its white dwarfs: the run fits departures
to all. Files of 20,000 stars, each drawn with a seed of its own, so that fewer stars are the first of many. FOLDER is
runs/surveys/tamarin_million unless given.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

sys.path.insert(0, str(Path(__file__).parents[3] / "demo_catalog"))

import make_tamarin_strip as strip

ROOT = Path(__file__).parents[3]
STARS = 1_000_000
STARS_PER_FILE = 20_000
SHARES = {"dwarf": 0.72, "giant": 0.17, "hot star": 0.11}
BANDS_LEFT_OUT = ("nuv", "w1", "w2", "h")


def field_table(number: int, count: int) -> pa.Table:
    """Return the stars of one file, all of field ``M`` and its number, without the bands that are left out."""
    random = np.random.default_rng([strip.SEED, number])
    kinds = {kind: round(share * count) for kind, share in SHARES.items()}
    kinds["dwarf"] += count - sum(kinds.values())
    departures = strip.invented_departures()
    stars = strip.visible_stars(departures, random, kinds)
    table = strip.survey_table(strip.survey_columns(stars, departures, random, {f"M{number:04d}": count}))
    left_out = [name for name in table.column_names if set(name.split("_")) & set(BANDS_LEFT_OUT)]
    return table.drop_columns(left_out)


def main() -> None:
    stars = int(sys.argv[1]) if len(sys.argv) > 1 else STARS
    folder = Path(sys.argv[2]) if len(sys.argv) > 2 else ROOT / "runs" / "surveys" / "tamarin_million"
    folder.mkdir(parents=True, exist_ok=True)
    for number, first in enumerate(range(0, stars, STARS_PER_FILE)):
        table = field_table(number, min(STARS_PER_FILE, stars - first))
        path = folder / f"stars-{number:04d}.parquet"
        pq.write_table(table, path, compression="zstd", row_group_size=10_000)


if __name__ == "__main__":
    main()
