"""The stars that the benchmarks of speed fit, by the name of their model."""

from __future__ import annotations

import sys
import tomllib
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from simulated import THIRTEEN_BANDS, as_table, invented_departures, make_settings, simulate
from starkiln.inference.posterior import Block
from starkiln.physics.departures import write_departures
from starkiln.settings import Settings, build_settings
from starkiln.stages.fit import pack_block
from starkiln.stages.ingest import ingest
from starkiln.stages.model import FitModel, build_model

ROOT = Path(__file__).parents[3]
SURVEYS = Path(__file__).parents[1] / "surveys"
CASES = {
    "blackbody": "13 bands, A_V, bare blackbody",
    "smooth": "13 bands, A_V and z_1, smooth invented departures",
    "builtin": "13 bands, A_V and z_1, built-in departures: hot stars have several peaks",
    "tamarin": "10 bands, A_V and z_1, the demo's survey and departures",
}
SEED = 3


@dataclass(frozen=True)
class Case:
    """Stars as rows of an input table and as a block, with the model they are fitted by."""

    name: str
    settings: Settings
    model: FitModel
    table: pa.Table
    block: Block

    def input_table(self) -> pa.Table:
        """Return the rows as they stand in a survey's file."""
        return self.table.drop_columns([name for name in self.table.column_names if name.startswith("_")])


def make_case(name: str, stars: int, folder: Path, **sections: Any) -> Case:
    """Return so many stars of a model; files it needs go to ``folder``."""
    if name == "tamarin":
        return tamarin(stars, folder, **sections)
    return simulated(stars, folder, name, **sections)


def simulated(
    stars: int, folder: Path, photosphere: str, bands: tuple[str, ...] = THIRTEEN_BANDS, **sections: Any
) -> Case:
    """Return stars drawn from the priors: "blackbody", "smooth" departures, or "builtin" ones."""
    model_keys: dict[str, Any] = {
        "temperature_k": [2500.0, 20000.0],
        "radius_rsun": [0.1, 20.0],
        "distance": {"length_scale_pc": 300.0},
    }
    if photosphere == "smooth":
        path = folder / f"smooth_{len(bands)}.ecsv"
        write_departures(invented_departures(bands), path)
        model_keys |= {"photosphere": "calibrated", "departures": str(path)}
    elif photosphere == "builtin":
        model_keys |= {"photosphere": "calibrated", "departures": "builtin"}
    settings = make_settings(bands, model=model_keys, **sections)
    model = build_model(settings)
    drawn, _ = simulate(settings, model, stars, SEED, noise=(0.003, 0.03))
    table = as_table(drawn, settings)
    return Case(photosphere, settings, model, table, pack_block(drawn, model, settings))


def tamarin(stars: int, folder: Path, **sections: Any) -> Case:
    """Return the first stars of the survey of surveys/tamarin_million.toml."""
    table = first_tamarin_rows(stars)
    settings = tamarin_settings(folder / "tables", folder / "run", **sections)
    model = build_model(settings)
    origin = {
        "_input_file": pa.array(["stars.parquet"] * stars),
        "_input_row": pa.array(np.arange(stars)),
        "_duplicate": pa.array(np.zeros(stars, np.int8)),
    }
    for column, values in origin.items():
        table = table.append_column(column, values)
    ingested = ingest(table, settings, model)
    return Case("tamarin", settings, model, table, pack_block(ingested.stars, model, settings))


def first_tamarin_rows(stars: int) -> pa.Table:
    """Return the first rows of the survey's first files, drawn anew."""
    return pa.concat_tables(_tamarin_files(stars)).slice(0, stars)


def write_tamarin(stars: int, folder: Path) -> Path:
    """Write the first rows of the survey as a folder of Parquet files, and return it."""
    folder.mkdir(parents=True)
    for number, table in enumerate(_tamarin_files(stars)):
        pq.write_table(table, folder / f"stars-{number:04d}.parquet", row_group_size=10_000)
    return folder


def _tamarin_files(stars: int) -> Iterable[pa.Table]:
    if str(SURVEYS) not in sys.path:
        sys.path.insert(0, str(SURVEYS))
    import make_tamarin_million as survey

    for number, first in enumerate(range(0, stars, survey.STARS_PER_FILE)):
        count = min(survey.STARS_PER_FILE, stars - first)
        # The shares of the kinds are rounded, so of very few stars some kind would be missing; their order is random.
        yield survey.field_table(number, max(count, 100)).slice(0, count)


def tamarin_settings(tables: Path, output: Path, **sections: Any) -> Settings:
    """Return the survey's settings for other tables and another run directory; sections add keys to theirs."""
    data = tomllib.loads((SURVEYS / "tamarin_million.toml").read_text())
    data["input"]["tables"], data["run"]["output"] = str(tables), str(output)
    data["model"]["departures"] = str(ROOT / "demo_catalog" / "tamarin_departures.ecsv")
    for section, keys in sections.items():
        data[section] = data.get(section, {}) | keys
    return build_settings(data)
