"""Published blackbody stars: temperatures, solid angles and radii (Suzuki & Fukugita 2018, AJ 156, 219)."""

import tomllib

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from makers import load_maker
from small_survey import read_in
from starkiln.physics.constants import MAS_PER_RAD, PARSEC_M, RSUN_M
from starkiln.settings import build_settings
from starkiln.stages.model import build_model
from starkiln.stages.process import process_part


@pytest.fixture(scope="module")
def folder(repository):
    return repository / "tests" / "reference"


@pytest.fixture(scope="module")
def published(folder):
    return pq.read_table(folder / "blackbody_stars.parquet")


def fitted(published, repository, **model):
    """Return the catalogue of the stars, as configs/blackbody-stars.toml has it or with other model keys."""
    configs = repository / "configs"
    data = tomllib.loads((configs / "blackbody-stars.toml").read_text(encoding="utf-8"))
    data["model"] |= model
    settings = build_settings(data, folder=configs)
    table = read_in(published).append_column("_duplicate", pa.array(np.zeros(len(published), np.int8)))
    tables = process_part(table, settings, build_model(settings))
    assert len(tables.rejected) == 0
    return tables.catalogue


@pytest.fixture(scope="module")
def plain(published, repository):
    return fitted(published, repository)


@pytest.fixture(scope="module")
def robust(published, repository):
    return fitted(published, repository, outliers={"fraction": 0.02, "width": 10.0})


def relative(values, reference):
    return np.abs(np.asarray(values) / np.asarray(reference) - 1.0)


def published_omega(published):
    """Return (R/d)²: the published amplitude is pi (R/d)² times 1e23."""
    return published["amp_pub"].to_numpy() * 1e-23 / np.pi


def test_committed_table_is_what_its_maker_makes(folder, published):
    assert (
        load_maker(folder / "make_blackbody_stars.py")
        .blackbody_stars()
        .equals(published, check_metadata=True)
    )


def test_temperatures(plain, published):
    difference = relative(plain["teff_p50"], published["teff_pub"])
    assert np.median(difference) <= 0.004
    assert difference.max() <= 0.04


def test_solid_angles(plain, published):
    omega = (0.5 * plain["ang_diam_p50"].to_numpy() / MAS_PER_RAD) ** 2
    assert np.median(relative(omega, published_omega(published))) <= 0.01


def test_radii(plain, published):
    distance_m = 1e3 / published["plx"].to_numpy() * PARSEC_M
    radius_rsun = np.sqrt(published_omega(published)) * distance_m / RSUN_M
    difference = relative(plain["radius_p50"], radius_rsun)
    assert np.median(difference) <= 0.02
    assert difference.max() <= 0.05


def test_temperatures_with_outlier_bands_allowed(robust, published):
    difference = relative(robust["teff_p50"], published["teff_pub"])
    assert np.median(difference) <= 0.012
    assert difference.max() <= 0.06
