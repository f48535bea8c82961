"""Nearby K and M dwarfs of published T, R and L (Cifuentes et al. 2020, A&A 642, A115), fitted by the product's chain.

    python tests/benchmarks/nearby_dwarfs.py [builtin] [halves] [auto]

builtin: all stars without a known close companion, with the built-in departures and as bare blackbodies: median offset
and robust scatter of T, R, L about the published values.
halves: departures learnt by `starkiln calibrate` from one half of those stars, tested on the other, both ways: coverage
of T and of the bolometric flux with many bands and with few, and chi squared per degree of freedom.
auto: which photosphere photosphere = "auto" chooses for them.

STARKILN_REFERENCE names the folder of the published table.
"""

from __future__ import annotations

import sys
import time
import tomllib
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc

sys.path.insert(0, str(Path(__file__).parent / "surveys"))

from make_nearby_dwarfs import nearby_dwarfs, reference_folder

from starkiln.calibration.individual import learn_departures
from starkiln.flags import BY_NAME
from starkiln.physics.constants import PARSEC_M, TSUN_K
from starkiln.physics.departures import Departures, write_departures
from starkiln.physics.planck import bolometric_exitance
from starkiln.settings import Settings, build_settings
from starkiln.stages.bands import build_bands
from starkiln.stages.calibrate import reference_stars
from starkiln.stages.ingest import ingest
from starkiln.stages.model import build_model
from starkiln.stages.process import process_part

SETTINGS = Path(__file__).parent / "surveys" / "nearby_dwarfs.toml"
ALL = ("B", "g", "BP", "V", "r", "G", "i", "RP", "J", "H", "Ks", "W1", "W2")
TEN = ("B", "BP", "V", "G", "RP", "J", "H", "Ks", "W1", "W2")
EIGHT = ("BP", "G", "RP", "J", "H", "Ks", "W1", "W2")
SETS = {
    "13 bands": ALL,
    "10 bands": TEN,
    "8 bands": EIGHT,
    "4 bands": ("BP", "G", "RP", "J"),
    "3 bands": ("BP", "G", "RP"),
}


def published_stars() -> pa.Table:
    """Return the rows with published T and L and no known close companion, as a run reads them."""
    table = nearby_dwarfs(pd.read_csv(reference_folder() / "nearby_dwarfs_a.csv"))
    spurious = pc.or_(pc.fill_null(table["Bool_delta"], False), pc.fill_null(table["Bool_RUWE"], False))
    table = table.filter(
        pc.and_(pc.invert(spurious), pc.and_(table["teff_pub"].is_valid(), table["lbol_pub"].is_valid()))
    )
    n = table.num_rows
    teff_k, lum = table["teff_pub"].to_numpy(), table["lbol_pub"].to_numpy()
    return (
        table.append_column("radius_pub_derived", pa.array(np.sqrt(lum) * (TSUN_K / teff_k) ** 2))
        .append_column("_input_file", pa.array(["nearby_dwarfs.parquet"] * n))
        .append_column("_input_row", pa.array(np.arange(n)))
        .append_column("_duplicate", pa.array(np.zeros(n, np.int8)))
    )


def settings_for(bands: tuple[str, ...], **model: Any) -> Settings:
    """Return the settings of surveys/nearby_dwarfs.toml with some of its bands and another model."""
    values = tomllib.loads(SETTINGS.read_text())
    chosen = [band for band in values["input"]["photometry"] if band["value"].removesuffix("_mag") in bands]
    values["input"] |= {"photometry": chosen, "carry": [*values["input"]["carry"], "radius_pub_derived"]}
    values["model"] |= model
    values["calibrate"] = {"output": "departures.ecsv", "teff": "teff_pub", "radius": "radius_pub_derived"}
    return build_settings(values)


def fit(table: pa.Table, settings: Settings) -> pd.DataFrame:
    """Return the catalogue of the stars, with the published values."""
    catalogue = process_part(table, settings, build_model(settings)).catalogue.to_pandas()
    exitance = bolometric_exitance(catalogue["teff_pub"].to_numpy())
    distance_m = 1e3 / table_column(table, catalogue, "parallax_mas") * PARSEC_M
    omega = (catalogue["radius_pub_derived"] * 6.957e8 / distance_m) ** 2
    return catalogue.assign(fbol_pub=omega * exitance)


def table_column(table: pa.Table, catalogue: pd.DataFrame, name: str) -> np.ndarray:
    values = pd.Series(table[name].to_numpy(), index=table["id"].to_pylist())
    return values.loc[catalogue["id"]].to_numpy()


PUBLISHED = {"teff": "teff_pub", "radius": "radius_pub_derived", "lum": "lbol_pub", "fbol": "fbol_pub"}


def accuracy(stars: pd.DataFrame) -> str:
    """Return median offset and robust scatter about the published values, per cent."""
    texts = []
    for name in ("teff", "radius", "lum"):
        ratio = np.log(stars[f"{name}_p50"] / stars[PUBLISHED[name]])
        middle = np.median(ratio)
        texts.append(f"{name} {100 * middle:+.1f} +- {148.26 * np.median(np.abs(ratio - middle)):.1f} %")
    return ", ".join(texts)


def coverage(stars: pd.DataFrame, name: str, published_error: np.ndarray | float = 0.0) -> str:
    """Return the shares of stars whose published value lies in their 68 and 95 per cent intervals.

    A published error, fractional, widens both sides in quadrature.
    """
    truth, middle = stars[PUBLISHED[name]], stars[f"{name}_p50"]
    shares = []
    for level, sigmas in (("68", 1.0), ("95", 2.0)):
        low = middle - np.hypot(middle - stars[f"{name}_lo{level}"], sigmas * published_error * truth)
        high = middle + np.hypot(stars[f"{name}_hi{level}"] - middle, sigmas * published_error * truth)
        shares.append(100.0 * np.mean((low <= truth) & (truth <= high)))
    return f"{shares[0]:.0f} {shares[1]:.0f}"


def reduced_chi2(stars: pd.DataFrame) -> float:
    """Return the median chi squared per degree of freedom: of bands and of z_1, less T and R/d.

    For one and for two degrees the median of chi squared itself is 0.45 and 0.69 for each.
    """
    odd = np.nan_to_num(stars["photosphere_z1_p50"])
    return float(np.median((stars["chi2"] + odd**2) / (stars["n_bands"] - 2)))


def described(stars: pd.DataFrame) -> str:
    """Return what is to be known of a fit, in a line."""
    not_converged = np.mean(stars["flags"] & BY_NAME["not_converged"].value != 0)
    return (
        f"{len(stars)} stars: {accuracy(stars)}; inside T {coverage(stars, 'teff')}, F_bol {coverage(stars, 'fbol')}; "
        f"chi2/dof {reduced_chi2(stars):.2f}; {100 * not_converged:.1f} % not converged"
    )


def builtin(table: pa.Table) -> None:
    for name in ("13 bands", "10 bands", "3 bands"):
        for photosphere in ("calibrated", "blackbody"):
            started = time.process_time()
            stars = fit(table, settings_for(SETS[name], photosphere=photosphere))
            rate = len(stars) / (time.process_time() - started)
            print(f"built-in, {name:8s} {photosphere:10s} {described(stars)}; {rate:.0f} stars/s", flush=True)


def learnt_from(table: pa.Table) -> Departures:
    """Return departures learnt from stars as `starkiln calibrate` does."""
    settings = settings_for(ALL, photosphere="blackbody")
    bands = build_bands(settings)
    ingested = ingest(table, settings, build_model(settings))
    rows = table.filter(pa.array(ingested.is_kept))
    stars, known = reference_stars(rows, ingested.stars, bands, settings)
    return learn_departures(list(bands.passbands.values()), stars.only(known), None, {}).departures


def halves(table: pa.Table) -> None:
    place = np.arange(table.num_rows) % 2
    with TemporaryDirectory() as folder:
        tested: dict[str, list[pd.DataFrame]] = {}
        for half in (0, 1):
            path = Path(folder) / f"half{half}.ecsv"
            departures = learnt_from(table.filter(pa.array(place == half)))
            write_departures(departures, path)
            print(f"half {half}: factors {departures.factors}, tau {departures.temperature_scatter[0]:.4f}", flush=True)
            others = table.filter(pa.array(place != half))
            for name, bands in SETS.items():
                stars = fit(others, settings_for(bands, photosphere="calibrated", departures=str(path)))
                tested.setdefault(name, []).append(stars)
    for name, parts in tested.items():
        stars = pd.concat(parts)
        error = (stars["e_lbol_pub"] / stars["lbol_pub"]).to_numpy()
        widened = coverage(stars, "fbol", error)
        print(f"other half, {name:8s} {described(stars)}; F_bol with the published error {widened}")


def auto(table: pa.Table) -> None:
    for name in ("13 bands", "3 bands", "4 bands"):
        stars = fit(table, settings_for(SETS[name], photosphere="auto"))
        print(f"auto, {name}: {100 * np.mean(stars['photosphere'] == 'calibrated'):.1f} % calibrated", flush=True)


def main() -> None:
    table = published_stars()
    for name in sys.argv[1:] or ("builtin", "halves", "auto"):
        {"builtin": builtin, "halves": halves, "auto": auto}[name](table)


if __name__ == "__main__":
    main()
