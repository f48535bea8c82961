"""Learning departures from reference stars: invented ones of known departures come back."""

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
import tomlkit
from typer.testing import CliRunner

from starkiln.cli import app
from starkiln.errors import SettingsError
from starkiln.physics.bandtable import build_band_table, ln_flux
from starkiln.physics.constants import PARSEC_M, RSUN_M
from starkiln.physics.departures import read_departures
from starkiln.physics.passbands import load_passband
from starkiln.settings import build_settings

BANDS = ("gaia_dr3_bp", "gaia_dr3_rp", "2mass_j", "2mass_ks", "wise_w1")
LOADING = np.array([-0.06, -0.03, 0.0, 0.02, 0.03])


def true_ln_d(teff_k):
    """Return (n, B): a slope with temperature that differs from band to band."""
    return np.outer(np.log(teff_k / 4500.0), [-0.5, -0.2, 0.1, 0.2, 0.15]) + np.array([-0.1, 0.0, 0.1, 0.05, 0.0])


@pytest.fixture(scope="module")
def survey(tmp_path_factory):
    """Write 240 invented reference stars and their settings; return the settings as a dictionary and its path."""
    folder = tmp_path_factory.mktemp("references")
    rng = np.random.default_rng(4)
    n = 240
    teff_k = np.exp(rng.uniform(np.log(3300.0), np.log(6500.0), n))
    radius = np.exp(rng.uniform(np.log(0.3), np.log(1.2), n))
    dist_pc = rng.uniform(10.0, 60.0, n)
    table = build_band_table([load_passband(band) for band in BANDS], 1500.0, 60000.0, 6.0, "G23", 3.1)
    ln_omega = 2.0 * np.log(radius * RSUN_M / (dist_pc * PARSEC_M))
    z, own = rng.normal(size=n), rng.normal(0.0, 0.01, (n, len(BANDS)))
    flux = np.exp(ln_flux(table, teff_k, 0.0) + ln_omega[:, None] + true_ln_d(teff_k) + np.outer(z, LOADING) + own)
    columns = {"id": np.arange(n), "teff": teff_k, "radius": radius}
    columns |= {"parallax": 1e3 / dist_pc, "parallax_error": np.full(n, 0.01), "good": np.ones(n, bool)}
    for place, band in enumerate(BANDS):
        columns[f"flux_{band}"] = flux[:, place] * (1.0 + 0.003 * rng.normal(size=n))
        columns[f"error_{band}"] = 0.003 * flux[:, place]
    # Bad reference stars, which the robust curve must not follow.
    columns["flux_2mass_j"][:6] *= 3.0
    pq.write_table(pa.table(columns), folder / "stars.parquet")
    photometry = [
        {"passband": b, "value": f"flux_{b}", "error": f"error_{b}", "unit": "Jy", "zero_point_error": 0.0}
        for b in BANDS
    ]
    settings = {
        "run": {"name": "references", "output": str(folder / "run")},
        "input": {
            "tables": str(folder / "stars.parquet"),
            "id": "id",
            "parallax": {"value": "parallax", "error": "parallax_error", "unit": "mas"},
            "photometry": photometry,
        },
        "model": {"extinction": {"prior": "fixed"}},
        "sampling": {"effective_samples": 200},
        "calibrate": {
            "output": str(folder / "learnt.ecsv"),
            "teff": "teff",
            "radius": "radius",
            "good": "good",
            "factors": 1,
        },
    }
    return settings, folder


@pytest.fixture(scope="module")
def learnt(survey):
    settings, folder = survey
    config = folder / "calibrate.toml"
    config.write_text(tomlkit.dumps(settings))
    result = CliRunner().invoke(app, ["calibrate", str(config), "--debug"])
    assert result.exit_code == 0, result.output
    return read_departures(folder / "learnt.ecsv"), result.output, folder


def test_the_curve_and_the_factor_come_back(learnt):
    departures = learnt[0]
    assert departures.bands == BANDS
    teff_k = np.array([3600.0, 4500.0, 6000.0])
    at = departures.at(teff_k)
    np.testing.assert_allclose(at.ln_d, true_ln_d(teff_k).T, atol=0.02)
    np.testing.assert_allclose(np.abs(at.loading[0, :, 1]), np.abs(LOADING), atol=0.012)
    assert at.loading[0, 0, 1] < 0.0
    assert (at.scatter < 0.02).all()
    assert (departures.range_k[:, 0] < 3500.0).all()
    assert (departures.range_k[:, 1] > 6200.0).all()


def test_held_out_stars_are_right_and_covered(learnt):
    figures = learnt[0].provenance["held_out"]
    assert figures["teff"]["stars"] > 100
    assert abs(figures["teff"]["median"]) < 0.01
    assert abs(figures["lum"]["median"]) < 0.02
    assert 0.5 < figures["teff"]["inside_68"] < 0.85
    assert figures["teff"]["inside_95"] > 0.85
    assert abs(figures["fbol"]["median"]) < 0.02
    assert 0.5 < figures["fbol"]["inside_68"] < 0.9


def test_pictures_and_text_are_left(learnt):
    _, text, folder = learnt
    assert "held out, T" in text
    assert "held out, F_bol" in text
    assert "scatter about the scale by" in text
    for band in BANDS:
        assert (folder / "learnt" / f"departure_{band}.png").stat().st_size > 5000
    assert (folder / "learnt" / "departure_correlations.pdf").stat().st_size > 5000


def changed(survey, **values):
    settings, _ = survey
    return {**settings, "calibrate": {**settings["calibrate"], **values}}


def test_two_sizes_or_none_are_refused(survey):
    with pytest.raises(SettingsError, match="needs one of radius, angular_diameter and fbol, and has radius and fbol"):
        build_settings(changed(survey, fbol="f"))


def test_a_run_without_the_section_says_so(survey, tmp_path):
    settings = {name: section for name, section in survey[0].items() if name != "calibrate"}
    config = tmp_path / "a.toml"
    config.write_text(tomlkit.dumps(settings))
    result = CliRunner().invoke(app, ["calibrate", str(config)])
    assert result.exit_code == 2
    assert "[calibrate]" in result.stderr


def test_too_few_stars_say_so(survey, tmp_path):
    settings, folder = survey
    pq.write_table(pq.read_table(folder / "stars.parquet").slice(0, 15), tmp_path / "few.parquet")
    few = {**settings, "input": {**settings["input"], "tables": str(tmp_path / "few.parquet")}}
    config = tmp_path / "a.toml"
    config.write_text(tomlkit.dumps(few))
    result = CliRunner().invoke(app, ["calibrate", str(config)])
    assert result.exit_code == 3
    assert "reference stars" in result.stderr
