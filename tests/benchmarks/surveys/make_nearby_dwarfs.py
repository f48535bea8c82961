"""Turn the nearby K and M dwarfs of Cifuentes et al. 2020, A&A 642, A115, into the table that nearby_dwarfs.toml reads.

    python tests/benchmarks/surveys/make_nearby_dwarfs.py [FOLDER]

The published table is nearby_dwarfs_a.csv in the folder that STARKILN_REFERENCE names, or in
../shared/reference beside the source tree; its contents stay out of this repository. FOLDER is runs/surveys
unless given.
"""

from __future__ import annotations

import os
import sys
from pathlib import Path

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

REPOSITORY = Path(__file__).parents[3]
PLACEHOLDER_MAG = 0.99  # stands for an error not known, in the optical catalogues gathered there
LARGEST_ERROR_MAG = 9.0  # 2MASS writes errors not known as 9.99 and a last digit

BANDS = (
    "FUV",
    "NUV",
    "u",
    "BT",
    "B",
    "g",
    "BP",
    "VT",
    "V",
    "r",
    "G",
    "i",
    "RP",
    "J",
    "H",
    "Ks",
    "W1",
    "W2",
    "W3",
    "W4",
)
CARRIED = {
    "sptype": None,
    "teff_pub": "K",
    "radius_pub": "solRad",
    "e_radius_pub": "solRad",
    "lbol_pub": "solLum",
    "e_lbol_pub": "solLum",
    "RUWE": None,
    "Bool_delta": None,
    "Bool_young": None,
    "Bool_RUWE": None,
    "Bool_contam": None,
}


def reference_folder() -> Path:
    """Return the folder of published tables."""
    return Path(os.environ.get("STARKILN_REFERENCE", REPOSITORY.parent / "shared" / "reference"))


def is_bad(quality: pd.Series, error_mag: pd.Series) -> pd.Series:
    """Return where a band is not to be used: its quality mark says so, or its error is a placeholder.

    The mark may be text or missing. Errors of zero and missing ones are left as they are: the fit leaves such
    a band out by itself, and says so.
    """
    return (
        (quality.astype(str).str.lower() == "true") | (error_mag == PLACEHOLDER_MAG) | (error_mag > LARGEST_ERROR_MAG)
    )


def nearby_dwarfs(published: pd.DataFrame) -> pa.Table:
    """Return the table to fit: id, parallax, a magnitude, an error and a mark per band, published values, `good`."""
    units = {"id": None, "parallax_mas": "mas", "e_parallax_mas": "mas"} | CARRIED
    columns: dict[str, pd.Series] = {name: published[name] for name in units}
    for band in BANDS:
        magnitude, error = f"{band}_mag", f"e{band}_mag"
        columns |= {magnitude: published[magnitude], error: published[error]}
        columns[f"bad_{band}"] = is_bad(published[f"Qf_{band}"], published[error])
        units |= {magnitude: "mag", error: "mag"}
    spurious = [published[name].astype(str).str.lower() == "true" for name in ("Bool_delta", "Bool_RUWE")]
    columns["good"] = ~(spurious[0] | spurious[1])  # no close companion is known, or told by the astrometry
    arrays = {name: pa.array(values.to_numpy(), from_pandas=True) for name, values in columns.items()}
    fields = [
        pa.field(name, values.type, metadata={"unit": units[name]} if units.get(name) else None)
        for name, values in arrays.items()
    ]
    return pa.table(list(arrays.values()), schema=pa.schema(fields))


def make(folder: Path) -> Path:
    """Write the table into a folder and return its path."""
    folder.mkdir(parents=True, exist_ok=True)
    path = folder / "nearby_dwarfs.parquet"
    published = pd.read_csv(reference_folder() / "nearby_dwarfs_a.csv")
    pq.write_table(nearby_dwarfs(published), path, compression="zstd")
    return path


if __name__ == "__main__":
    print(make(Path(sys.argv[1]) if len(sys.argv) > 1 else REPOSITORY / "runs" / "surveys"))
