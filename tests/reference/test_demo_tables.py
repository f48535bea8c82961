"""The demo's invented survey: what is in its tables, and whether the intervals hold the truth."""

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
import pytest
from scipy.stats import binom

from makers import load_maker
from starkiln.flags import BY_NAME
from starkiln.physics.bandtable import build_band_table, ln_flux
from starkiln.physics.constants import PARSEC_M, RSUN_M, TSUN_K
from starkiln.physics.departures import read_departures
from starkiln.physics.passbands import load_passband
from starkiln.settings import load_settings
from starkiln.stages.fit import giant_scale
from starkiln.stages.ingest import ingest
from starkiln.stages.model import build_model
from starkiln.stages.process import process_part
from starkiln.tables.source import open_source, read_rows

CHANCE = 1e-4  # of a binomial bound being passed at either end by luck


@pytest.fixture(scope="module")
def folder(repository):
    return repository / "demo_catalog"


@pytest.fixture(scope="module")
def truth(folder):
    return pq.read_table(folder / "truth.parquet")


@pytest.fixture(scope="module")
def settings(repository):
    return load_settings(repository / "configs" / "demo.toml")


@pytest.fixture(scope="module")
def model(settings):
    return build_model(settings)


@pytest.fixture(scope="module")
def survey(settings):
    """The rows that configs/demo.toml selects, with the mark of repeated ids."""
    source = open_source(settings)
    pieces = [(k, group) for k, file in enumerate(source.files) for group in range(len(file.row_group_rows))]
    batches = list(read_rows(source, settings, pieces, settings.used_columns(), 1000))
    assert sum(batch.read for batch in batches) == 4000
    assert sum(batch.filtered for batch in batches) == 200  # T4
    table = pa.concat_tables([batch.table for batch in batches])
    return table.append_column("_duplicate", pa.array(repeats(table["star_id"].to_pylist()), pa.int8()))


def repeats(ids):
    """Return 0 for an id that occurs once, 1 for the first of several, 2 for the later ones."""
    seen = set()
    marks = []
    for star_id in ids:
        marks.append(0 if not star_id or ids.count(star_id) == 1 else 1 + (star_id in seen))
        seen.add(star_id)
    return marks


def with_truth(table, truth):
    """Return the truth of each row of a table, in its order."""
    row_of = {star_id: row for row, star_id in enumerate(truth["star_id"].to_pylist())}
    return truth.take([row_of[star_id] for star_id in table["star_id"].to_pylist()])


def close(found, expected):
    """Tell whether two tables hold the same, numbers to a few parts in ten thousand."""
    if found.schema != expected.schema or found.num_rows != expected.num_rows:
        return False
    for name in found.column_names:
        if not pa.types.is_floating(found.schema.field(name).type):
            same = found[name].equals(expected[name])
        else:
            same = np.allclose(found[name].to_numpy(), expected[name].to_numpy(), rtol=3e-4, atol=2e-4, equal_nan=True)
        if not same:
            return False
    return True


def test_committed_tables_are_what_the_maker_makes(folder, tmp_path):
    load_maker(folder / "make_tamarin_strip.py").write_tables(tmp_path)
    made = sorted(path.relative_to(tmp_path) for path in tmp_path.rglob("*.parquet"))
    assert made == sorted(path.relative_to(folder) for path in folder.rglob("*.parquet"))
    for path in made:
        assert close(pq.ParquetFile(tmp_path / path).read(), pq.ParquetFile(folder / path).read()), path
    one, other = (read_departures(place / "tamarin_departures.ecsv") for place in (tmp_path, folder))
    assert (one.bands, one.digests) == (other.bands, other.digests)
    for name in ("ln_d", "loading", "scatter"):
        np.testing.assert_allclose(getattr(one, name), getattr(other, name), atol=2e-5)


def test_tables_are_small(folder):
    assert sum(path.stat().st_size for path in folder.rglob("*") if path.is_file()) < 1_000_000


def test_settings_say_what_the_maker_did(folder, settings):
    maker = load_maker(folder / "make_tamarin_strip.py")
    assert settings.model.blackbody.scatter == maker.WHITE_DWARF_SCATTER
    assert settings.model.extinction.scale == maker.AV_SCALE_MAG
    assert settings.model.distance.length_scale_pc == maker.LENGTH_SCALE_PC
    assert settings.input.parallax.zero_point == maker.PARALLAX_ZERO_POINT_MAS


def test_stars_have_oddities_of_their_own_and_white_dwarfs_none(truth):
    z1 = truth["z1"].to_numpy()
    compact = np.array([str(kind).endswith("white dwarf") for kind in truth["kind"].to_pylist()])
    assert np.isnan(z1[compact]).all()
    known = z1[~compact & np.isfinite(truth["teff"].to_numpy())]
    assert abs(known.mean()) < 4 / np.sqrt(len(known))
    assert abs(known.std() - 1) < 4 / np.sqrt(2 * len(known))


def test_columns_carry_units(folder):
    schema = pq.read_schema(folder / "tamarin_strip" / "field=T1" / "stars.parquet")
    units = {field.name: (field.metadata or {}).get(b"unit") for field in schema}
    expected = {"parallax": b"mas", "flux_g": b"nJy", "flux_g_error": b"nJy", "mag_ks": b"mag", "ra": b"deg"}
    assert {name: units[name] for name in expected} == expected


def test_spoilt_rows_are_rejected_with_their_reasons(survey, settings, model):
    ingested = ingest(survey, settings, model)
    reasons = ingested.rejected["reason"].to_pylist()
    assert {reason: reasons.count(reason) for reason in set(reasons)} == {
        "no id": 4,
        "duplicate id": 6,
        "too few bands": 8 + 8,
    }
    assert len(ingested.stars) + len(reasons) == survey.num_rows == 3800


def test_survey_shows_what_a_survey_has(survey, truth):
    kinds = set(truth["kind"].to_pylist())
    assert {"dwarf", "giant", "white dwarf", "hot star", "dusty dwarf", "dusty giant", "empty sky"} <= kinds
    assert pc.sum(pc.less(survey["parallax"], 0.0)).as_py() > 5
    assert pc.sum(pc.less(survey["flux_g"], 0.0)).as_py() > 0
    assert survey["parallax"].null_count > 50
    assert pc.sum(survey["is_limit_nuv"]).as_py() > 100
    assert pc.sum(survey["is_limit_w2"]).as_py() > 100
    assert pc.sum(survey["flag_r"]).as_py() > 100


def test_radius_and_temperature_give_the_luminosity(truth):
    teff, radius = truth["teff"].to_numpy(), truth["radius"].to_numpy()
    np.testing.assert_allclose(truth["lum"].to_numpy(), radius**2 * (teff / TSUN_K) ** 4, rtol=1e-5)


@pytest.mark.parametrize(("passband", "column"), [("panstarrs_r", "r"), ("panstarrs_z", "z")])
def test_fluxes_scatter_about_the_model_by_their_errors(survey, truth, folder, passband, column):
    clean = survey.filter(pc.invert(survey[f"flag_{column}"]))
    clean = clean.filter(pc.is_in(clean["star_id"], truth["star_id"]))
    star = with_truth(clean, truth)
    bands = [load_passband(passband)]
    table = build_band_table(bands, 2000.0, 40000.0, 6.0, "G23", 3.1)
    known = (
        np.isfinite(star["teff"].to_numpy())
        & (star["outlier_bands"].to_numpy() == 0)
        & (clean[f"flux_{column}_error"].to_numpy() > 0)
    )
    values = {name: star[name].to_numpy().astype(float)[known] for name in ("teff", "radius", "dist", "av", "z1")}
    omega = (values["radius"] * RSUN_M / (values["dist"] * PARSEC_M)) ** 2
    at = read_departures(folder / "tamarin_departures.ecsv").for_bands(bands).at(values["teff"])
    scale, compact = giant_scale(values["teff"], values["radius"]), np.isnan(values["z1"])
    departure = np.where(compact, 0.0, at.ln_d[0] + scale * at.loading[0, 0] * values["z1"])
    own_scatter = np.where(compact, 0.015, scale * at.scatter[0])
    model_njy = 1e9 * omega * np.exp(ln_flux(table, values["teff"], values["av"])[:, 0] + departure)
    flux, error = (clean[name].to_numpy()[known] for name in (f"flux_{column}", f"flux_{column}_error"))
    pull = (flux - model_njy) / np.hypot(error, own_scatter * model_njy)
    pull = pull[np.isfinite(pull)]
    assert len(pull) > 1500
    assert abs(pull.mean()) < 4 / np.sqrt(len(pull))
    assert abs(pull.std() - 1) < 4 / np.sqrt(2 * len(pull))


@pytest.fixture(scope="module")
def catalogue(survey, settings, model):
    return process_part(survey.slice(0, 500), settings, model).catalogue


@pytest.mark.slow
def test_intervals_hold_the_truth_as_often_as_they_say(catalogue, truth):
    star = with_truth(catalogue, truth)
    for quantity in ("teff", "radius", "lum", "av", "photosphere_z1"):
        true = star[quantity.removeprefix("photosphere_")].to_numpy()
        for level in (68, 95):
            if f"{quantity}_lo{level}" not in catalogue.column_names:
                continue
            lower, upper = (catalogue[f"{quantity}_{end}{level}"].to_numpy() for end in ("lo", "hi"))
            fitted = np.isfinite(lower) & np.isfinite(true)
            inside = int(((lower <= true) & (true <= upper))[fitted].sum())
            least, most = binom.ppf([CHANCE, 1 - CHANCE], fitted.sum(), level / 100.0)
            assert least <= inside <= most, (quantity, level, inside, int(fitted.sum()))


@pytest.mark.slow
def test_white_dwarfs_are_told_from_other_stars(catalogue, truth):
    kinds = np.array([str(kind) for kind in with_truth(catalogue, truth)["kind"].to_pylist()])
    white = np.char.endswith(kinds, "white dwarf")
    chosen = np.array(catalogue["photosphere"].to_pylist()) == "blackbody"
    assert white.sum() > 30
    assert chosen[white].mean() > 0.7
    assert chosen[~white].mean() < 0.01


@pytest.mark.slow
def test_outlying_bands_and_empty_sky_are_flagged(survey, truth, settings, model):
    rows = with_truth(survey.filter(pc.is_in(survey["star_id"], truth["star_id"])), truth)
    wanted = rows.filter(pc.or_(pc.equal(rows["kind"], "empty sky"), pc.greater(rows["outlier_bands"], 1)))
    table = survey.filter(pc.is_in(survey["star_id"], wanted["star_id"]))
    catalogue = process_part(table, settings, model).catalogue
    star, flags = with_truth(catalogue, truth), catalogue["flags"].to_numpy()
    empty = np.array(star["kind"].to_pylist()) == "empty sky"
    assert empty.sum() == 4
    assert (flags[empty] & BY_NAME["no_detection"].value).all()
    assert catalogue["teff_p50"].to_numpy()[empty].tolist() == pytest.approx([np.nan] * 4, nan_ok=True)
    assert (flags[~empty] & BY_NAME["band_outlier"].value > 0).mean() > 0.5
