"""One star of a published catalogue, looked at by itself."""

import json
import shutil

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from filelock import FileLock

from pipeline_survey import QUICK, blackbodies, write
from small_survey import BANDS, band, settings_for, with_column
from starkiln.engine import provenance
from starkiln.engine.onestar import find_star
from starkiln.engine.run import run_settings
from starkiln.errors import SettingsError
from starkiln.flags import names
from starkiln.physics.constants import MAS_PER_RAD
from starkiln.physics.extinction import extinction_ratio
from starkiln.physics.planck import exitance_jy
from starkiln.report.star import band_rows, describe_star
from starkiln.report.star_command import file_stem, star

ODD_ID = "../x/$y_{\\frac}'; DROP TABLE stars --"
TOO_FEW, COPY, LIMITED, UNLIKELY = 4, 6, 8, 10


def odd_rows(table):
    """Leave one star two bands, give two rows one id, make one flux a limit, and one impossible."""
    ids = table["star_id"].to_pylist()
    ids[COPY + 1] = ids[COPY]
    table = with_column(table, "star_id", pa.array(ids, pa.int64()))
    bad, limit = np.zeros(len(table), bool), np.zeros(len(table), bool)
    bad[TOO_FEW] = limit[LIMITED] = True
    flux = table[BANDS[0]].to_numpy().copy()
    flux[UNLIKELY] *= 30.0
    return with_column(with_column(with_column(table, "bad", bad), "limit", limit), BANDS[0], flux)


@pytest.fixture(scope="module")
def survey(tmp_path_factory):
    """A run of 24 stars in two files, each of which may be a blackbody or not; returns folder and ids."""
    folder = tmp_path_factory.mktemp("survey")
    table = odd_rows(blackbodies(24, 2**61))
    table = with_column(table, "night", np.r_[np.ones(22, np.int64), 2, 2])
    write(folder / "tables", row_group_size=5, a=table.slice(0, 14), b=table.slice(14))
    photometry = [band(BANDS[0], bad="bad", limit="limit"), band(BANDS[1]), band(BANDS[2])]
    settings = settings_for(
        folder / "tables",
        folder / "run",
        input__photometry=photometry,
        input__where=[["night", "=", 1]],
        model__photosphere="auto",
        model__blackbody={"fraction": 0.9999999},  # three bands say little, and some stars must be taken for one
        **QUICK,
    )
    assert run_settings(settings).exit_code == 0
    return folder


@pytest.fixture(scope="module")
def named_survey(tmp_path_factory):
    """A run of six stars with names for ids, dust given, and jitter; it keeps draws and no residuals."""
    folder = tmp_path_factory.mktemp("named")
    names = ["HD 1", "HD 2", ODD_ID, "hd 3\n", "α Vir", "6"]
    write(folder / "tables", a=with_column(blackbodies(6), "star_id", names))
    settings = settings_for(
        folder / "tables",
        folder / "run",
        sampling__keep_draws=20,
        model__extinction={"prior": "fixed", "mean": 0.1},
        model__jitter=True,
        output__per_band="none",
        **QUICK,
    )
    assert run_settings(settings).exit_code == 0
    return folder


def ids_of(folder):
    return pq.read_table(folder / "run" / "catalogue")["star_id"].to_pylist()


def row_of(folder, star_id):
    (row,) = [row for row in pq.read_table(folder / "run" / "catalogue").to_pylist() if row["star_id"] == star_id]
    return row


def everything_below(folder):
    return {path: (path.stat().st_mtime_ns, path.stat().st_size) for path in folder.rglob("*")}


def copied(folder, tmp_path):
    """A copy of a run's published generation, and of its tables, to be spoilt."""
    shutil.copytree(folder / "tables", tmp_path / "tables")
    generation = tmp_path / "generation"
    shutil.copytree((folder / "run" / "current").resolve(), generation)
    settings = generation / "settings.toml"
    settings.write_text(settings.read_text().replace(str(folder / "tables"), str(tmp_path / "tables")))
    return generation


def test_a_star_alone_has_the_bits_of_the_catalogue(survey):
    rows = pq.read_table(survey / "run" / "catalogue").to_pylist()
    assert len(rows) == 20
    assert {row["photosphere"] for row in rows} == {"blackbody", "calibrated"}
    for row in rows:
        found = find_star(survey / "run", str(row["star_id"]))
        assert found.refit_problem == ""
        assert found.differing == []
        assert found.stored.values == row
        for name in ("teff_p50", "radius_lo95", "lum_hi68", "chi2", "ess_bulk"):
            assert np.float32(found.closeup.columns[name][0]) == np.float32(row[name])


def test_a_difference_in_one_bit_is_told(survey, tmp_path):
    generation = copied(survey, tmp_path)
    path = generation / "catalogue" / "part-000000.parquet"
    table = pq.read_table(path)
    lum = table["lum_p50"].to_numpy().copy()
    lum[0] = np.nextafter(lum[0], np.float32(0))
    place = table.column_names.index("lum_p50")
    pq.write_table(table.set_column(place, table.field("lum_p50"), pa.array(lum)), path)
    found = find_star(generation, str(table["star_id"][0].as_py()))
    assert found.differing == ["lum_p50"]
    assert "a new fit differs in lum_p50, on the same platform: please report it" in describe_star(found)


def test_another_platform_is_the_reason_for_other_bits(survey, tmp_path):
    generation = copied(survey, tmp_path)
    path = generation / "catalogue" / "part-000000.parquet"
    table = pq.read_table(path)
    place = table.column_names.index("lum_p50")
    pq.write_table(table.set_column(place, table.field("lum_p50"), pa.array(2 * table["lum_p50"].to_numpy())), path)
    facts = json.loads((generation / "run.json").read_text())
    facts["platform"]["cpu"] = "abacus"
    (generation / "run.json").write_text(json.dumps(facts))
    text = describe_star(find_star(generation, str(table["star_id"][0].as_py())))
    assert "a new fit differs in lum_p50: cpu abacus ->" in text


@pytest.mark.parametrize("which", ["survey", "named_survey"])
def test_residuals_are_those_of_the_fluxes_that_are_shown(request, which):
    folder = request.getfixturevalue(which)
    for star_id in ids_of(folder):
        found = find_star(folder / "run", str(star_id))
        assert {row.use for row in band_rows(found)} >= {"used"}
        for row, spread in zip(band_rows(found), found.bands.spread, strict=True):
            if row.use == "used":
                sigma = np.hypot(row.error_jy, spread * row.model_jy)
                assert (row.flux_jy - row.model_jy) / sigma == pytest.approx(row.residual, rel=2e-5, abs=2e-5)


def test_limits_and_bands_left_out_are_told(survey):
    limited = find_star(survey / "run", str(2**61 + LIMITED))
    assert [row.use for row in band_rows(limited)] == ["limit", "used", "used"]
    assert band_rows(limited)[0].residual is None
    rejected = find_star(survey / "run", str(2**61 + TOO_FEW))
    assert [row.why for row in band_rows(rejected)] == ["bad is true", "", ""]


def test_a_rejected_star_says_why(survey):
    text = star(survey / "run", str(2**61 + TOO_FEW))
    assert "Not fitted: too few bands (2 usable of 3 needed: bad is true)" in text
    assert f"row {TOO_FEW} of a.parquet" in text


def test_the_first_of_two_copies_is_the_star(survey):
    found = find_star(survey / "run", str(2**61 + COPY))
    assert (found.input_row.row, found.differing) == (COPY, [])
    assert "duplicate_id" in names(found.stored.values["flags"])
    assert "duplicate_id " in describe_star(found)


def test_a_changed_input_row_leaves_the_stored_numbers(survey, tmp_path):
    generation = copied(survey, tmp_path)
    table = pq.read_table(tmp_path / "tables" / "a.parquet")
    flux = table[BANDS[1]].to_numpy().copy()
    flux[0] *= 1.5
    pq.write_table(with_column(table, BANDS[1], flux), tmp_path / "tables" / "a.parquet")
    changed, same = (find_star(generation, str(star_id)) for star_id in ids_of(survey)[:2])
    assert "row_hash differs" in changed.refit_problem
    assert changed.closeup is None
    assert changed.stored.values == row_of(survey, changed.star_id)
    assert "as stored; the input row has changed" in describe_star(changed)
    assert same.closeup is not None


def test_input_that_is_gone_leaves_the_stored_numbers(named_survey, tmp_path):
    generation = copied(named_survey, tmp_path)
    shutil.rmtree(tmp_path / "tables")
    found = find_star(generation, "HD 1")
    assert "the input cannot be read: input.tables: there is no file or folder" in found.refit_problem
    assert len(found.draws["teff"]) == 20
    assert f"{found.stored.values['teff_p50']:.0f}"[:2] in describe_star(found)
    assert star(generation, "HD 1", tmp_path / "pictures")


def test_another_method_leaves_the_stored_numbers(named_survey, monkeypatch):
    monkeypatch.setattr(provenance, "METHOD_VERSION", 99)
    found = find_star(named_survey / "run", "HD 1")
    assert "the method's version changed" in found.refit_problem
    assert found.closeup is None
    assert found.input_row is not None


@pytest.mark.parametrize("photosphere", ["blackbody", "calibrated"])
def test_without_a_fit_the_model_is_that_of_the_stored_medians(survey, monkeypatch, photosphere):
    monkeypatch.setattr(provenance, "METHOD_VERSION", 99)
    rows = pq.read_table(survey / "run" / "catalogue").to_pylist()
    row = next(row for row in rows if row["photosphere"] == photosphere)
    found = find_star(survey / "run", str(row["star_id"]))
    omega = (row["ang_diam_p50"] / 2.0 / MAS_PER_RAD) ** 2
    for passband, flux_jy in zip(found.model.passbands.values(), found.bands.flux_jy, strict=True):
        bare_jy = omega * passband.average(
            lambda um: (
                exitance_jy(um, row["teff_p50"]) * 10 ** (-0.4 * row["av_p50"] * extinction_ratio("G23", 3.1, um))
            )
        )
        assert (abs(flux_jy / bare_jy - 1) < 1e-3) == (photosphere == "blackbody")


def test_settings_that_cannot_be_read_leave_the_stored_numbers(named_survey, tmp_path):
    generation = copied(named_survey, tmp_path)
    settings = generation / "settings.toml"
    settings.write_text(settings.read_text() + "\n[telescope]\naperture = 8\n")
    text = star(generation, "HD 1", tmp_path / "pictures")
    assert "this version cannot read the generation's settings.toml" in text
    assert not (tmp_path / "pictures").exists()


def test_ids_reach_no_path(named_survey, tmp_path):
    text = star(named_survey / "run", ODD_ID, tmp_path / "pictures")
    stem = file_stem(ODD_ID)
    assert {path.name for path in tmp_path.rglob("*") if path.is_file()} == {f"{stem}.png", f"{stem}.pdf"}
    assert ODD_ID in text
    assert (tmp_path / "pictures" / f"{stem}.png").read_bytes().startswith(b"\x89PNG")
    assert "hd 3\\n" in star(named_survey / "run", "hd 3\n", tmp_path / "pictures")


def test_json_holds_all_of_it(named_survey, tmp_path):
    told = json.loads(star(named_survey / "run", "α Vir", tmp_path, as_json=True))
    assert (told["schema"], told["id"], told["generation"], told["table"]) == (1, "α Vir", "000001", "catalogue")
    assert told["input"] == {"file": "a.parquet", "row": 4, "problem": None}
    assert told["refit"] == {"done": True, "same_bits": True, "differing": [], "why": None}
    assert told["values"] == row_of(named_survey, "α Vir")
    assert told["units"]["teff_p50"] == "K"
    assert [row["band"] for row in told["bands"]] == list(BANDS)
    assert len(told["pictures"]) == 2
    assert {flag["name"] for flag in told["flags"]} >= {"few_bands"}


@pytest.mark.parametrize(
    ("which", "star_id", "text"),
    [
        ("survey", "HD 1", "column 'star_id', are integers"),
        ("survey", "99999999999999999999", "are integers"),
        ("survey", str(2**61).replace("3", "3_", 1), "are integers"),
        ("survey", "12", "no star of this run has star_id = 12 among its 22 rows; its ids look like"),
        ("survey", str(2**61 + 23), "input.where leaves out"),
        ("named_survey", "hd 1 ", r"did you mean 'HD 1'\?"),
        ("named_survey", "", "no star of this run has star_id = ''"),
    ],
)
def test_an_unknown_id_is_a_wrong_command_line(request, which, star_id, text):
    folder = request.getfixturevalue(which)
    with pytest.raises(SettingsError, match=text) as error:
        star(folder / "run", star_id)
    assert error.value.exit_code == 2


def test_a_folder_without_a_catalogue_is_a_wrong_command_line(tmp_path):
    with pytest.raises(SettingsError, match="holds no published catalogue"):
        star(tmp_path, "1")


def test_another_run_may_hold_the_directory(named_survey, tmp_path):
    with FileLock(named_survey / "run" / "lock", timeout=0):
        before = everything_below(named_survey)
        star(named_survey / "run", "6", tmp_path)
        assert everything_below(named_survey) == before


def test_an_index_of_another_version_is_done_without(survey, tmp_path):
    generation = copied(survey, tmp_path)
    facts = json.loads((generation / "run.json").read_text())
    del facts["hashes"]["rows"]
    (generation / "run.json").write_text(json.dumps(facts))
    shutil.rmtree(generation / "index")
    (generation / "index").mkdir()
    found = find_star(generation, str(ids_of(survey)[-1]))
    assert found.stored.values == row_of(survey, ids_of(survey)[-1])
    assert find_star(generation, str(2**61 + TOO_FEW)).stored.outcome == "rejected"
