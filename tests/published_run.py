"""A run directory with a published generation of invented numbers, made without fitting anything."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from small_survey import band, settings_for
from starkiln.flags import BY_NAME
from starkiln.settings import Settings, dump_toml
from starkiln.tables.columns import catalogue_schema
from starkiln.tables.hashes import row_hashes

LABELS = ("panstarrs_g", "panstarrs_r", "panstarrs_i", "2mass_j", "2mass_h", "2mass_ks")
QUANTILES = (("lo95", -1.96), ("lo68", -1.0), ("p50", 0.0), ("hi68", 1.0), ("hi95", 1.96))
NASTY_ID = "<script>alert('id')</script>&\"'"
"""The id of the row most in need of a look."""


def publish(run_dir: Path, rows: int = 400, rows_per_file: int | None = None, **facts: Any) -> Path:
    """Write a run directory with one generation, and return the generation's folder.

    The last row is flagged not_converged and poor_fit and has `NASTY_ID`; every tenth is flagged poor_parallax.
    """
    tables = run_dir.parent / "input"
    tables.mkdir(exist_ok=True)
    settings = settings_for(tables, run_dir, input__photometry=[band(label) for label in LABELS])
    observed = _input(rows)
    pq.write_table(observed, tables / "a.parquet")
    folder = run_dir / "generations" / "000001"
    (folder / "catalogue").mkdir(parents=True)
    catalogue = _catalogue(observed, settings)
    for place, first in enumerate(range(0, max(rows, 1), rows_per_file or max(rows, 1))):
        some = catalogue.slice(first, rows_per_file or rows)
        pq.write_table(some, folder / "catalogue" / f"part-{place:06d}.parquet")
    (folder / "settings.toml").write_text(dump_toml(settings))
    (folder / "run.json").write_text(json.dumps(_facts(rows) | facts))
    (run_dir / "current").symlink_to("generations/000001")
    return folder


def _input(rows: int) -> pa.Table:
    random = np.random.default_rng(7)
    columns: dict[str, Any] = {
        "star_id": [f"star {row}" for row in range(rows - 1)] + [NASTY_ID] * min(rows, 1),
        "parallax": random.normal(5, 1, rows),
        "parallax_error": np.full(rows, 0.1),
    }
    for label in LABELS:
        columns[label] = random.lognormal(14, 0.3, rows)
        columns[f"{label}_error"] = 0.03 * columns[label]
    return pa.table(columns)


def _catalogue(observed: pa.Table, settings: Settings) -> pa.Table:
    random, n = np.random.default_rng(8), observed.num_rows
    radius, teff = 10.0 ** random.normal(0.0, 0.3, n), 10.0 ** random.uniform(3.5, 4.3, n)
    dist = 10.0 ** random.uniform(1.5, 3.0, n)
    ang_diam = 9.305 * radius / dist
    medians = {
        "teff": teff,
        "radius": radius,
        "lum": radius**2 * (teff / 5772.0) ** 4,
        "dist": dist,
        "av": random.exponential(0.3, n),
        "ang_diam": ang_diam,
        "fbol": 1e-12 * ang_diam**2 * teff**4 / 1e13,
    }
    columns: dict[str, Any] = {
        f"{name}_{end}": median * (1.0 + 0.05 * sigmas) for name, median in medians.items() for end, sigmas in QUANTILES
    }
    flags = np.where(np.arange(n) % 10 == 0, BY_NAME["poor_parallax"].value, 0)
    flags[n - 1 :] |= BY_NAME["not_converged"].value | BY_NAME["poor_fit"].value
    columns |= {
        "ppp_value": random.uniform(0.02, 1.0, n),
        "ess_bulk": random.uniform(1000, 2000, n),
        "ess_tail": random.uniform(700, 2000, n),
        "autocorr_steps": random.uniform(2, 6, n),
        "rhat_max": random.uniform(1.0, 1.02, n),
        "n_steps": np.full(n, 192),
        "accept_frac": random.uniform(0.3, 0.6, n),
        "n_bands": np.full(n, len(LABELS)),
        "n_limits": np.zeros(n, int),
        "photosphere": ["calibrated"] * n,
        "flags": flags,
        "row_hash": row_hashes(observed, settings),
    }
    for label in LABELS:
        columns[f"residual_{label}"] = random.normal(0.0, 0.8, n)
        columns[f"outlier_{label}"] = np.full(n, 0.01)
    schema = catalogue_schema(settings, observed.schema.field("star_id"), [])
    columns["star_id"] = observed["star_id"]
    arrays = [
        pa.chunked_array([pa.array(columns[field.name], field.type)])
        if field.name in columns and field.name != "star_id"
        else columns.get(field.name, pa.nulls(n, field.type))
        for field in schema
    ]
    return pa.table(arrays, schema=schema)


def _facts(rows: int) -> dict[str, Any]:
    counts = {"read": rows + 12, "filtered": 2, "selected": rows + 10, "catalogue": rows, "rejected": 10, "pending": 0}
    return {
        "name": "<b>tamarin</b>",
        "exit_code": 0,
        "counts": counts | {"rejected_by_reason": {"too few bands": 10}},
        "rows": {"set_aside": 0},
        "zero_point_audit": [
            {"label": label, "offset_mag": 0.001, "error_mag": 0.002, "determined": True, "stars": rows}
            for label in LABELS
        ],
        "seconds": {"wall": {"work": 83.0}},
        "versions": {"starkiln": "0.1.0"},
        "hashes": {"fit_key": "0" * 64, "passbands": {}, "method": 4},
        "input": {"tables": "<i>tables</i>", "files": [], "skipped": []},
    }
