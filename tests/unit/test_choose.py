"""photosphere = "auto": stars of which there is no doubt, and stars of which there is too little data."""

from dataclasses import replace

import numpy as np
import pytest

from simulated import LN_RSUN_PC, as_table, invented_departures, make_settings, simulate
from starkiln.flags import BY_NAME
from starkiln.physics.bandtable import ln_flux
from starkiln.physics.departures import write_departures
from starkiln.stages.choose import choose
from starkiln.stages.model import build_model
from starkiln.stages.process import process_part

WHITE_DWARF = {"teff_k": 15_000.0, "radius_rsun": 0.0125, "dist_pc": 60.0}
DWARF = {"teff_k": 5_200.0, "radius_rsun": 0.8, "dist_pc": 150.0}
HOT_DWARF = {"teff_k": 11_000.0, "radius_rsun": 2.2, "dist_pc": 400.0}


@pytest.fixture(scope="module")
def settings(tmp_path_factory):
    path = tmp_path_factory.mktemp("departures") / "invented.ecsv"
    write_departures(invented_departures(), path)
    return make_settings(
        model={"photosphere": "auto", "departures": str(path), "distance": {"length_scale_pc": 400.0}},
        sampling={"effective_samples": 200},
    )


@pytest.fixture(scope="module")
def model(settings):
    return build_model(settings)


def stars_like(kind, table, settings, model, n=8):
    """Return stars of one kind, whose fluxes are those of a table within 2 %, with parallaxes good to 2 %."""
    stars, _ = simulate(settings, model, n, seed=1)
    rng = np.random.default_rng(2)
    omega = np.exp(2.0 * (np.log(kind["radius_rsun"] / kind["dist_pc"]) + LN_RSUN_PC))
    true_jy = omega * np.exp(ln_flux(table, kind["teff_k"], 0.1))
    error_jy = np.broadcast_to(0.02 * true_jy, stars.flux_jy.shape).copy()
    parallax = np.full(n, 1e3 / kind["dist_pc"])
    return replace(
        stars,
        flux_jy=true_jy + error_jy * rng.normal(size=error_jy.shape),
        error_jy=error_jy,
        parallax_mas=parallax * (1.0 + 0.02 * rng.normal(size=n)),
        parallax_error_mas=0.02 * parallax,
    )


def without_parallax(stars):
    nothing = np.full(len(stars), np.nan)
    return replace(stars, parallax_mas=nothing, parallax_error_mas=nothing)


def test_white_dwarfs_are_blackbodies_and_dwarfs_are_not(settings, model):
    for kind, table, expected in (
        (WHITE_DWARF, model.rival.table, True),
        (DWARF, model.table, False),
        (HOT_DWARF, model.table, False),
    ):
        is_blackbody, ln_ratio = choose(stars_like(kind, table, settings, model), model, settings)
        assert (is_blackbody == expected).all(), kind
        assert (np.abs(ln_ratio) > 2.0).all(), (kind, ln_ratio)


def test_the_radius_alone_speaks_against_a_blackbody_of_the_size_of_a_dwarf(settings, model):
    large = stars_like(DWARF | {"teff_k": 8_000.0}, model.rival.table, settings, model)
    with_radius, without_radius = (choose(some, model, settings)[1] for some in (large, without_parallax(large)))
    assert (with_radius < without_radius - 5.0).all()


def test_a_star_with_little_data_is_calibrated_unless_the_odds_are_high(settings, model):
    stars = without_parallax(stars_like(WHITE_DWARF, model.rival.table, settings, model, 30))
    is_blackbody, ln_ratio = choose(stars, model, settings)
    np.testing.assert_array_equal(is_blackbody, ln_ratio > 5.0)
    few = stars_like(WHITE_DWARF, model.rival.table, settings, model, 30)
    few.usable[:, 4:] = False
    is_blackbody, ln_ratio = choose(few, model, settings)
    np.testing.assert_array_equal(is_blackbody, ln_ratio > 5.0)


def test_the_catalogue_tells_what_was_chosen(settings, model):
    few = [
        stars_like(kind, table, settings, model, 2)
        for kind, table in ((DWARF, model.table), (WHITE_DWARF, model.rival.table))
    ]
    for kind, stars in zip((DWARF, WHITE_DWARF), few, strict=True):
        catalogue = process_part(as_table(stars, settings), settings, model).catalogue
        white = kind is WHITE_DWARF
        assert set(catalogue["photosphere"].to_pylist()) == {"blackbody" if white else "calibrated"}
        flagged = (catalogue["flags"].to_numpy() & BY_NAME["blackbody_chosen"].value) > 0
        assert (flagged == white).all()
        assert ((catalogue["ln_evidence_ratio"].to_numpy() > 0.0) == white).all()
        assert catalogue["photosphere_z1_p50"].null_count == (2 if white else 0)
        np.testing.assert_allclose(catalogue["teff_p50"].to_numpy(), kind["teff_k"], rtol=0.15)
        np.testing.assert_allclose(catalogue["radius_p50"].to_numpy(), kind["radius_rsun"], rtol=0.15)
