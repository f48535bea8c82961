"""A small survey of invented blackbodies for runs of the whole pipeline."""

from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from small_survey import BANDS, stars, with_column
from starkiln.physics.constants import PARSEC_M, RSUN_M
from starkiln.physics.passbands import load_passband
from starkiln.physics.planck import planck_nu

LIGHT_SPEED_UM_HZ = 2.99792458e14
QUICK = {"sampling__walkers": 16, "sampling__effective_samples": 60, "sampling__max_steps": 120}


def blackbodies(rows: int, first_id: int = 1) -> pa.Table:
    """Stars of 4000 to 12000 K at 100 to 500 pc, with errors of two per cent, from the flux at the pivots."""
    random = np.random.default_rng(first_id)
    table = stars(rows, first_id)
    teff_k = np.exp(random.uniform(np.log(4000), np.log(12000), rows))
    distance_pc = random.uniform(100, 500, rows)
    omega = (random.uniform(0.5, 2, rows) * RSUN_M / (distance_pc * PARSEC_M)) ** 2
    for label in BANDS:
        nu_hz = LIGHT_SPEED_UM_HZ / load_passband(label).pivot_um
        intensity = np.array([float(np.squeeze(planck_nu(nu_hz, teff))) for teff in teff_k])
        flux_njy = np.pi * intensity * omega * 1e35
        table = with_column(table, label, flux_njy * (1 + 0.02 * random.standard_normal(rows)))
        table = with_column(table, f"{label}_error", 0.02 * flux_njy)
    table = with_column(table, "parallax", 1000 / distance_pc)
    return with_column(table, "parallax_error", np.full(rows, 0.05))


def write(folder: Path, row_group_size: int = 1000, **tables: pa.Table) -> Path:
    folder.mkdir(parents=True, exist_ok=True)
    for name, table in tables.items():
        pq.write_table(table, folder / f"{name}.parquet", row_group_size=row_group_size)
    return folder
