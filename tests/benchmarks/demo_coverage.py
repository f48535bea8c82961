"""Coverage of the demo's intervals by the quality of the parallax, and how often the photosphere is told right.

    starkiln run configs/demo.toml
    python tests/benchmarks/demo_coverage.py [RUN_DIR]

The truth of every star is in demo_catalog/truth.parquet.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

REPOSITORY = Path(__file__).parents[2]
DEMO = REPOSITORY / "demo_catalog"
QUANTITIES = ("teff", "radius", "lum", "dist", "av", "photosphere_z1")
PARALLAX_SN = {"no parallax": None, "below 3": (-np.inf, 3), "3 to 10": (3, 10), "above 10": (10, np.inf)}


def rows_of(table: pa.Table, ids: list[str]) -> pa.Table:
    """Return the rows of a table with some star_ids, in their order; null where there is none."""
    place = {star_id: row for row, star_id in enumerate(table["star_id"].to_pylist())}
    return table.take(pa.array([place.get(star_id) for star_id in ids], pa.int64()))


def values(table: pa.Table, name: str) -> np.ndarray:
    """Return a column as floats, NaN for null."""
    return table[name].to_numpy().astype(float)


def inside(catalogue: pa.Table, truth: pa.Table, quantity: str, level: int) -> np.ndarray:
    """Return for each star whether an interval holds the truth: 1, 0, or NaN where there is none."""
    true = values(truth, quantity.removeprefix("photosphere_"))
    low, high = (values(catalogue, f"{quantity}_{end}{level}") for end in ("lo", "hi"))
    held = ((low <= true) & (true <= high)).astype(float)
    return np.where(np.isfinite(low + high + true), held, np.nan)


def parallax_sn(ids: list[str]) -> np.ndarray:
    """Return each star's parallax over its error, zero point removed; NaN without one."""
    survey = pq.read_table(DEMO / "tamarin_strip", columns=["star_id", "parallax", "parallax_error"])
    rows = rows_of(survey, ids)
    return (values(rows, "parallax") + 0.017) / values(rows, "parallax_error")


def main() -> None:
    run = Path(sys.argv[1]) if len(sys.argv) > 1 else REPOSITORY / "runs" / "tamarin-strip"
    catalogue = pq.read_table(run / "catalogue")
    ids = catalogue["star_id"].to_pylist()
    truth, sn = rows_of(pq.read_table(DEMO / "truth.parquet"), ids), parallax_sn(ids)
    print(f"{'shares inside 68 % / 95 %':28s}" + "".join(f"{name:>18s}" for name in QUANTITIES))
    for label, bounds in {"all": (-np.inf, np.inf), **PARALLAX_SN}.items():
        chosen = np.isnan(sn) if bounds is None else (sn >= bounds[0]) & (sn < bounds[1])
        chosen |= label == "all"
        cells = []
        for quantity in QUANTITIES:
            shares = []
            for level in (68, 95):
                if f"{quantity}_lo{level}" in catalogue.column_names:
                    held = inside(catalogue, truth, quantity, level)[chosen]
                    shares.append(f"{np.nanmean(held):.1%}" if np.isfinite(held).any() else "-")
            cells.append(" / ".join(shares))
        print(f"parallax S/N {label:9s} {chosen.sum():5d}" + "".join(f"{cell:>18s}" for cell in cells))
    is_blackbody = np.array(catalogue["photosphere"].to_pylist()) == "blackbody"
    kinds = np.array([str(kind).removeprefix("dusty ") for kind in truth["kind"].to_pylist()])
    for kind in sorted(set(kinds)):
        of_kind = kinds == kind
        print(f"{kind:12s} {of_kind.sum():5d} stars, {is_blackbody[of_kind].sum():4d} taken for blackbodies")


if __name__ == "__main__":
    main()
