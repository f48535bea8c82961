"""Make the Tamarin Strip, an invented survey of invented stars: tables, departures and, beside them, the truth.

Run it from anywhere; the same files come out every time:

    python demo_catalog/make_tamarin_strip.py [FOLDER]

White dwarfs are blackbodies behind dust, all others depart from blackbodies as tamarin_departures.ecsv says, each
by its own z1. Distances and extinctions are drawn from the priors that configs/demo.toml states, and the noise is
the one that the fit assumes, so that the intervals it finds can be held against the truth.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from starkiln.physics.constants import AB_ZERO_JY, PARSEC_M, RSUN_M, TSUN_K
from starkiln.physics.departures import LN_TEFF_NODES, Departures, inside_range, write_departures
from starkiln.physics.extinction import extinction_ratio
from starkiln.physics.passbands import load_passband, zero_point_jy
from starkiln.physics.planck import exitance_jy
from starkiln.stages.fit import giant_scale

SEED = 20261201
LENGTH_SCALE_PC = 400.0  # of the falling space density, as in configs/demo.toml
AV_SCALE_MAG = 0.4  # of the exponential distribution of extinctions, as there
PARALLAX_ZERO_POINT_MAS = -0.017
FAINTEST_R_MAG = 20.0
SATURATION_MAG = 14.0  # of the survey's own camera, AB
DETECTION_SIGMA = 3.0
OUTLIER_FRACTION, OUTLIER_WIDTH = 0.01, 10.0
DUSTY_AV_MAG = 1.0
SPOILT_ROWS = {"no id": 4, "no error": 8, "two bands": 8, "three bands": 12, "empty sky": 4, "repeated": 6}
NJY = 1e9  # in a jansky

KINDS = {"dwarf": 2600, "giant": 620, "white dwarf": 400, "hot star": 380}
FIELDS = {"T1": 1500, "T2": 1400, "T3": 900, "T4": 200}  # T4 was observed through cloud
FIELD_WIDTH_DEG = 1.6
CLOUD_TRANSMISSION = 0.6
DEPARTURES_FILE = "tamarin_departures.ecsv"
DEPARTURES_RANGE_K = (2500.0, 30000.0)
WHITE_DWARF_SCATTER = 0.015  # of blackbodies, as in configs/demo.toml


@dataclass(frozen=True)
class Band:
    """A band of the survey; ``noise_jy`` is the sky's, ``relative_noise`` the star's own."""

    passband: str
    column: str
    noise_jy: float
    relative_noise: float
    unit: str = "mag"

    @property
    def camera(self) -> bool:
        """Whether the survey's own camera took it: fluxes that may be negative, and a mark for bad ones."""
        return self.passband.startswith("panstarrs")

    @property
    def limits(self) -> bool:
        """Whether upper limits stand in for what was not detected."""
        return self.column in ("nuv", "w1", "w2")


BANDS = (
    Band("galex_nuv", "nuv", 600e-9, 0.02, "nJy"),
    Band("panstarrs_g", "g", 200e-9, 0.005, "nJy"),
    Band("panstarrs_r", "r", 250e-9, 0.005, "nJy"),
    Band("panstarrs_i", "i", 300e-9, 0.005, "nJy"),
    Band("panstarrs_z", "z", 500e-9, 0.005, "nJy"),
    Band("panstarrs_y", "y", 1000e-9, 0.005, "nJy"),
    Band("gaia_dr3_bp", "gaia_bp", 2500e-9, 0.003),
    Band("gaia_dr3_g", "gaia_g", 300e-9, 0.002),
    Band("gaia_dr3_rp", "gaia_rp", 2500e-9, 0.003),
    Band("2mass_j", "j", 76e-6, 0.02),
    Band("2mass_h", "h", 93e-6, 0.02),
    Band("2mass_ks", "ks", 127e-6, 0.02),
    Band("wise_w1", "w1", 16e-6, 0.02),
    Band("wise_w2", "w2", 22e-6, 0.02),
)
R_BAND = 2


def draw_stars(kind: str, count: int, random: np.random.Generator) -> dict[str, np.ndarray]:
    """Draw stars of a kind from the whole volume, seen or not, on invented temperature-radius relations."""
    teff_k, radius_rsun, scatter = {
        "dwarf": ((2900.0, 9500.0), lambda t: (t / TSUN_K) ** 1.4, 0.08),
        "giant": ((3600.0, 5200.0), lambda t: 10.0 * (4800.0 / t) ** 6, 0.25),
        "white dwarf": ((5000.0, 30000.0), lambda t: np.full_like(t, 0.0125), 0.08),
        "hot star": ((10000.0, 25000.0), lambda t: 2.2 * (t / 1e4) ** 0.7, 0.15),
    }[kind]
    teff = np.exp(random.uniform(*np.log(teff_k), count))
    return {
        "teff": teff,
        "radius": radius_rsun(teff) * np.exp(scatter * random.standard_normal(count)),
        "dist": random.gamma(3.0, LENGTH_SCALE_PC, count),
        "av": random.exponential(AV_SCALE_MAG, count),
        "z1": np.full(count, np.nan) if kind == "white dwarf" else random.standard_normal(count),
    }


def invented_departures() -> Departures:
    """Return how the stars depart from blackbodies: lines in the blue of cool ones, a Balmer jump in hot ones."""
    passbands = [load_passband(band.passband) for band in BANDS]
    pivot_um = np.array([passband.pivot_um for passband in passbands])
    colour, x = np.log(pivot_um)[:, np.newaxis], np.log(np.exp(LN_TEFF_NODES) / 5500.0)
    cool, hot = 0.5 - 0.5 * np.tanh(3.0 * x), 0.5 + 0.5 * np.tanh(4.0 * (x - 0.3))
    lines = -0.3 * cool * np.exp(-1.5 * (colour + 1.2))
    opacity_minimum = 0.08 * cool * np.exp(-(((colour - 0.48) / 0.3) ** 2))
    balmer_jump = -0.15 * hot * np.exp(-(((colour + 1.1) / 0.3) ** 2))
    loading = (0.02 + 0.05 * np.exp(-1.2 * (colour + 0.7))) * (1.0 - 0.5 * hot)
    ends = LN_TEFF_NODES[inside_range(DEPARTURES_RANGE_K)][[0, -1]]
    return Departures(
        bands=tuple(band.passband for band in BANDS),
        digests=tuple(passband.digest() for passband in passbands),
        kind=("stars",) * len(BANDS),
        source=("invented",) * len(BANDS),
        pivot_um=pivot_um,
        range_k=np.tile(np.exp(ends), (len(BANDS), 1)),
        ln_d=lines + opacity_minimum + balmer_jump,
        loading=loading[np.newaxis],
        scatter=np.where(colour < -1.2, 0.03, 0.012) + 0.0 * x,
        factors=("oddity",),
        provenance={"curve": "invented, for the invented Tamarin Strip survey"},
    )


def departure(stars: dict[str, np.ndarray], passband_name: str, departures: Departures) -> tuple[np.ndarray, ...]:
    """Return the factor on each star's flux in a band, and the band's own scatter; white dwarfs are blackbodies."""
    at = departures.at(stars["teff"])
    band = departures.bands.index(passband_name)
    scale = giant_scale(stars["teff"], stars["radius"])
    compact = np.isnan(stars["z1"])
    factor = np.exp(at.ln_d[band] + scale * at.loading[0, band] * stars["z1"])
    return np.where(compact, 1.0, factor), np.where(compact, WHITE_DWARF_SCATTER, scale * at.scatter[band])


def band_flux_jy(stars: dict[str, np.ndarray], passband_name: str, departures: Departures) -> np.ndarray:
    """Return each star's flux density in a band, by direct summation over the passband."""
    nodes_um, weights = load_passband(passband_name).quadrature
    ratio = extinction_ratio("G23", 3.1, nodes_um)
    omega = (stars["radius"] * RSUN_M / (stars["dist"] * PARSEC_M)) ** 2
    transmission = 10.0 ** (-0.4 * stars["av"][:, np.newaxis] * ratio)
    bare = np.sum(exitance_jy(nodes_um, stars["teff"][:, np.newaxis]) * transmission * weights, axis=1)
    return omega * bare * departure(stars, passband_name, departures)[0]


def visible_stars(
    departures: Departures, random: np.random.Generator, kinds: dict[str, int] = KINDS
) -> dict[str, np.ndarray]:
    """Return the stars of every kind that are bright enough, in random order."""
    faintest_jy = AB_ZERO_JY * 10.0 ** (-0.4 * FAINTEST_R_MAG)
    chosen: list[dict[str, np.ndarray]] = []
    for kind, wanted in kinds.items():
        found = 0
        while found < wanted:
            stars = draw_stars(kind, 4 * wanted, random)
            bright = np.flatnonzero(band_flux_jy(stars, BANDS[R_BAND].passband, departures) > faintest_jy)[
                : wanted - found
            ]
            some = {name: values[bright] for name, values in stars.items()}
            dusty = some["av"] >= DUSTY_AV_MAG
            chosen.append(some | {"kind": np.where(dusty, f"dusty {kind}", kind)})
            found += len(bright)
    stars = {name: np.concatenate([some[name] for some in chosen]) for name in chosen[0]}
    order = random.permutation(len(stars["teff"]))
    return {name: values[order] for name, values in stars.items()}


def observe(
    flux_jy: np.ndarray, own_scatter: np.ndarray, band: Band, random: np.random.Generator
) -> tuple[np.ndarray, ...]:
    """Return measured fluxes, their stated errors, and which of them are outliers.

    The scatter is the stated error and the star's own in this band. The departures have been learnt with the survey's
    own zero points, so whatever is wrong with those is in the departures.
    """
    stated_jy = np.hypot(band.noise_jy, band.relative_noise * flux_jy)
    total_jy = np.hypot(stated_jy, own_scatter * flux_jy)
    outlier = random.random(len(flux_jy)) < OUTLIER_FRACTION
    blend = OUTLIER_WIDTH * np.abs(random.standard_normal(len(flux_jy)))  # another star's light
    scatter = random.standard_normal(len(flux_jy))
    return flux_jy + total_jy * np.where(outlier, blend, scatter), stated_jy, outlier


def band_columns(
    measured_jy: np.ndarray, error_jy: np.ndarray, band: Band, random: np.random.Generator
) -> dict[str, np.ndarray]:
    """Return the columns of a band as the survey would publish them."""
    columns: dict[str, np.ndarray] = {}
    faint = measured_jy < DETECTION_SIGMA * error_jy
    if band.camera:
        saturation_jy = AB_ZERO_JY * 10.0 ** (-0.4 * SATURATION_MAG)
        struck = random.random(len(measured_jy)) < 0.02  # by a cosmic ray, and marked
        columns[f"flag_{band.column}"] = struck | (measured_jy > saturation_jy)
        measured_jy = np.where(struck, measured_jy * random.uniform(1.5, 5.0, len(measured_jy)), measured_jy)
        measured_jy = np.minimum(measured_jy, saturation_jy)
    elif band.limits:
        columns[f"is_limit_{band.column}"] = faint
        measured_jy = np.where(faint, DETECTION_SIGMA * error_jy, measured_jy)
    else:
        measured_jy = np.where(faint, np.nan, measured_jy)
    error_jy = np.where(faint & (not band.camera), np.nan, error_jy)
    if band.unit == "nJy":
        name, value, error = "flux", np.round(measured_jy * NJY, 1), np.round(error_jy * NJY, 1)
    else:
        passband = load_passband(band.passband)
        name = "mag"
        value = np.round(-2.5 * np.log10(measured_jy / zero_point_jy(passband, "Vega")), 4)
        error = np.round(2.5 / np.log(10.0) * error_jy / measured_jy, 4)
    missing = random.random(len(value)) < 0.03
    value, error = np.where(missing, np.nan, value), np.where(missing, np.nan, error)
    return {f"{name}_{band.column}": value, f"{name}_{band.column}_error": error} | columns


def survey_columns(
    stars: dict[str, np.ndarray],
    departures: Departures,
    random: np.random.Generator,
    fields: dict[str, int] = FIELDS,
) -> dict[str, np.ndarray]:
    """Return the survey's columns and, under ``outlier_bands``, how many outliers each star has."""
    count = len(stars["teff"])
    field = np.repeat(list(fields), list(fields.values()))
    number = np.concatenate([np.arange(1, size + 1) for size in fields.values()])
    start_deg = 30.0 + FIELD_WIDTH_DEG * np.searchsorted(list(fields), field)
    columns: dict[str, np.ndarray] = {
        "star_id": np.array([f"TS-{f}-{n:04d}" for f, n in zip(field, number, strict=True)], dtype=object),
        "field": field,
        "ra": np.round(start_deg + random.uniform(0.0, FIELD_WIDTH_DEG, count), 6),
        "dec": np.round(random.uniform(-0.5, 0.5, count), 6),
    }
    r_mag = -2.5 * np.log10(band_flux_jy(stars, BANDS[R_BAND].passband, departures) / AB_ZERO_JY)
    error_mas = np.hypot(0.03, 0.6 * 10.0 ** (0.3 * (r_mag - 20.0)))
    parallax_mas = 1e3 / stars["dist"] + PARALLAX_ZERO_POINT_MAS + error_mas * random.standard_normal(count)
    unmeasured = random.random(count) < 0.02
    columns["parallax"] = np.where(unmeasured, np.nan, np.round(parallax_mas, 4))
    columns["parallax_error"] = np.where(unmeasured, np.nan, np.round(error_mas, 4))
    outliers = np.zeros(count, np.int16)
    for band in BANDS:
        flux_jy = band_flux_jy(stars, band.passband, departures)
        if band.camera:
            flux_jy = np.where(field == "T4", CLOUD_TRANSMISSION * flux_jy, flux_jy)
        measured_jy, error_jy, outlier = observe(flux_jy, departure(stars, band.passband, departures)[1], band, random)
        columns |= band_columns(measured_jy, error_jy, band, random)
        outliers += outlier
    not_in_t3 = columns["field"] == "T3"  # the satellite did not get that far
    columns["flux_nuv"] = np.where(not_in_t3, np.nan, columns["flux_nuv"])
    columns["is_limit_nuv"] &= ~not_in_t3
    return columns | {"outlier_bands": outliers}


def spoil_rows(columns: dict[str, np.ndarray], random: np.random.Generator) -> dict[str, np.ndarray]:
    """Spoil a few rows of T1 to T3 in the ways in which real tables are spoilt; return which rows."""
    # With all of Gaia's bands, so that those left are as many as meant.
    gaia = np.all([np.isfinite(columns[f"mag_gaia_{band}"]) for band in ("bp", "g", "rp")], axis=0)
    rows = np.flatnonzero((columns["field"] != "T4") & gaia)
    chosen = random.choice(rows, 2 * sum(SPOILT_ROWS.values()), replace=False)
    parts = np.split(chosen, np.cumsum(list(SPOILT_ROWS.values())))
    spoilt = dict(zip(SPOILT_ROWS, parts, strict=False))
    columns["star_id"][spoilt["no id"]] = [None, None, "", ""]
    for name in value_names(columns):
        wrong = random.choice([0.0, -1.0, np.nan], SPOILT_ROWS["no error"])
        columns[f"{name}_error"][spoilt["no error"]] = wrong
        if name not in ("mag_gaia_g", "mag_gaia_rp"):
            columns[name][spoilt["two bands"]] = np.nan
        if not name.startswith("mag_gaia"):
            columns[name][spoilt["three bands"]] = np.nan
    empty_sky(columns, spoilt["empty sky"], random)
    first, later = np.sort([spoilt["repeated"], parts[-1][: SPOILT_ROWS["repeated"]]], axis=0)
    for name, column in columns.items():
        if name not in ("field", "ra", "dec"):
            column[later] = column[first]
    return spoilt | {"repeated": later}


def value_names(columns: dict[str, np.ndarray]) -> list[str]:
    """Return the columns that hold fluxes or magnitudes."""
    return [name for name in columns if name.startswith(("flux_", "mag_")) and not name.endswith("_error")]


def empty_sky(columns: dict[str, np.ndarray], rows: np.ndarray, random: np.random.Generator) -> None:
    """Leave nothing but the camera's noise in some rows."""
    for name in value_names(columns):
        columns[name][rows] = np.nan
    for band in BANDS:
        if band.camera:
            noise_njy = band.noise_jy * NJY
            columns[f"flux_{band.column}"][rows] = np.round(noise_njy * random.uniform(-2, 2, len(rows)), 1)
            columns[f"flux_{band.column}_error"][rows] = noise_njy
            columns[f"flag_{band.column}"][rows] = False
    columns["parallax"][rows] = columns["parallax_error"][rows] = np.nan


DESCRIPTIONS = {
    "star_id": (None, "Identifier in the invented Tamarin Strip survey"),
    "ra": ("deg", "Right ascension, invented"),
    "dec": ("deg", "Declination, invented"),
    "parallax": ("mas", "Parallax; its zero point is -0.017 mas"),
    "parallax_error": ("mas", "Standard error of the parallax"),
}


def survey_field(name: str, unit_of: dict[str, str]) -> pa.Field:
    """Return the Arrow field of a column, with unit and description."""
    if name in DESCRIPTIONS:
        unit, description = DESCRIPTIONS[name]
        kind = {"star_id": pa.string(), "ra": pa.float64(), "dec": pa.float64()}.get(name, pa.float32())
    elif name.startswith(("flag_", "is_limit_")):
        unit, kind = None, pa.bool_()
        meaning = "not to be used" if name.startswith("flag_") else "an upper limit at 3 sigma"
        description = f"True: the value in {name.rpartition('_')[2]} is {meaning}"
    else:
        unit, kind = unit_of[name.removesuffix("_error")], pa.float32()
        measure, _, band = name.removesuffix("_error").partition("_")
        what = "Flux density" if measure == "flux" else "Vega magnitude"
        description = f"{'Standard error of: ' if name.endswith('_error') else ''}{what} in band {band}"
    metadata = {"unit": unit, "description": description}
    return pa.field(name, kind, metadata={key: text for key, text in metadata.items() if text})


def survey_table(columns: dict[str, np.ndarray]) -> pa.Table:
    """Return the survey's table, NaN as null, the field's column included."""
    unit_of = {f"{'flux' if b.unit == 'nJy' else 'mag'}_{b.column}": b.unit for b in BANDS}
    names = [name for name in columns if name not in ("field", "outlier_bands")]
    fields = [survey_field(name, unit_of) for name in names]
    arrays = [pa.array(columns[f.name], f.type, from_pandas=True) for f in fields]
    return pa.table(arrays, schema=pa.schema(fields)).append_column("field", pa.array(columns["field"].tolist()))


def truth_table(
    stars: dict[str, np.ndarray], columns: dict[str, np.ndarray], spoilt: dict[str, np.ndarray]
) -> pa.Table:
    """Return what each identifier truly is; nothing but the kind for the patches of empty sky."""
    units = {"teff": "K", "radius": "solRad", "lum": "solLum", "dist": "pc", "av": "mag", "z1": None}
    values = stars | {"lum": stars["radius"] ** 2 * (stars["teff"] / TSUN_K) ** 4}
    kind = stars["kind"].astype(object)
    kind[spoilt["empty sky"]] = "empty sky"
    keep = np.ones(len(kind), bool)
    keep[np.concatenate([spoilt["no id"], spoilt["repeated"]])] = False
    table = {
        "star_id": pa.array(columns["star_id"][keep], pa.string()),
        "kind": pa.array(kind[keep], pa.string()),
    }
    fields = [pa.field("star_id", pa.string()), pa.field("kind", pa.string())]
    for name, unit in units.items():
        column = values[name].astype(np.float32)
        column[spoilt["empty sky"]] = np.nan
        table[name] = pa.array(column[keep], from_pandas=True)
        fields.append(pa.field(name, pa.float32(), metadata={"unit": unit} if unit else None))
    table["outlier_bands"] = pa.array(columns["outlier_bands"][keep])
    fields.append(pa.field("outlier_bands", pa.int16()))
    return pa.table(list(table.values()), schema=pa.schema(fields))


def make_tables(departures: Departures, seed: int = SEED) -> tuple[pa.Table, pa.Table]:
    """Return the survey, all fields in one table, and the truth."""
    random = np.random.default_rng(seed)
    stars = visible_stars(departures, random)
    columns = survey_columns(stars, departures, random)
    spoilt = spoil_rows(columns, random)
    return survey_table(columns), truth_table(stars, columns, spoilt)


def write_tables(folder: Path) -> None:
    """Write the survey as one Parquet file per field in a hive layout, and departures and truth beside it."""
    departures = invented_departures()
    write_departures(departures, folder / DEPARTURES_FILE)
    survey, truth = make_tables(departures)
    for field in FIELDS:
        target = folder / "tamarin_strip" / f"field={field}" / "stars.parquet"
        target.parent.mkdir(parents=True, exist_ok=True)
        rows = survey.filter(pa.array([name == field for name in survey["field"].to_pylist()]))
        pq.write_table(rows.drop_columns(["field"]), target, compression="zstd", row_group_size=500)
    pq.write_table(truth, folder / "truth.parquet", compression="zstd")


if __name__ == "__main__":
    write_tables(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
