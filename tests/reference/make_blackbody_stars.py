"""Write blackbody_stars.parquet, which configs/blackbody-stars.toml reads, from the ECSV file beside it.

python tests/reference/make_blackbody_stars.py
"""

from __future__ import annotations

from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
from astropy.table import Table

HERE = Path(__file__).parent


def blackbody_stars() -> pa.Table:
    """Return the published stars, with units and descriptions as field metadata."""
    stars = Table.read(HERE / "blackbody_stars.ecsv", format="ascii.ecsv")
    columns = [pa.array(column.tolist()) for column in stars.itercols()]
    fields = []
    for column, values in zip(stars.itercols(), columns, strict=True):
        texts = {"unit": str(column.unit or ""), "description": column.description}
        metadata = {key: text for key, text in texts.items() if text}
        fields.append(pa.field(column.name, values.type, metadata=metadata))
    return pa.table(columns, schema=pa.schema(fields, metadata={"source": stars.meta["source"]}))


if __name__ == "__main__":
    pq.write_table(blackbody_stars(), HERE / "blackbody_stars.parquet", compression="zstd")
