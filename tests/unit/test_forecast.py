"""Forecasts: known precision, what must grow with faintness, the settings, and the command."""

import json
import tomllib

import numpy as np
import pytest
from astropy import units as u
from astropy.table import Table
from matplotlib.image import imread
from typer.testing import CliRunner

import starkiln.settings
from starkiln import cli
from starkiln.errors import SettingsError
from starkiln.physics.bandtable import ln_flux as ln_flux_at
from starkiln.physics.constants import PARSEC_M, RSUN_M, TSUN_K
from starkiln.physics.passbands import load_passband
from starkiln.physics.planck import planck_nu
from starkiln.report.forecast import describe_forecast, save_forecast
from starkiln.settings import dump_toml
from starkiln.settings.forecast import build_forecast, forecast_schema, load_forecast
from starkiln.settings.models import Extinction
from starkiln.stages.forecast import draw_extinction, fits_in, forecast, grid_points, invent, is_misled, plan_survey

BANDS = ("panstarrs_g", "panstarrs_r", "panstarrs_i", "panstarrs_z", "2mass_ks")
PLAIN = {
    "photosphere": "blackbody",
    "outliers": False,
    "temperature_k": [2500.0, 20000.0],
    "extinction": {"prior": "fixed", "mean": 0.0},
}


def example(model=PLAIN, sampling=None, depth_mag=23.0, zero_point_error=0.0, **keys):
    """Settings of a small forecast as nested dictionaries; keys replace those of [forecast]."""
    band = {"depth_mag": depth_mag, "system": "AB"}
    if zero_point_error is not None:
        band["zero_point_error"] = zero_point_error
    values = {
        "temperature_k": [5000.0],
        "radius_rsun": 0.8,
        "brightness": {"label": "panstarrs_r", "mag": [18.0], "system": "AB"},
        "parallax_error_mas": 0.01,
        "stars": 8,
        "band": [{"passband": name, **band} for name in BANDS],
    }
    return {
        "run": {"name": "forecast", "output": "/nowhere/forecast", "seed": 5},
        "forecast": values | keys,
        "model": model,
        "sampling": sampling or {"effective_samples": 500},
    }


def brightness(*mags):
    return {"label": "panstarrs_r", "mag": list(mags), "system": "AB"}


def fisher_widths(teff_k, mag, depth_mag, radius_rsun, parallax_error_mas):
    """Relative errors of T, R and L by Cramer & Rao, from passbands and Planck's law alone."""

    def ln_flux(name, ln_t, ln_omega):
        band = load_passband(name)
        return np.log(band.average(lambda um: np.pi * planck_nu(299792458e6 / um, np.exp(ln_t)) * 1e26)) + ln_omega

    ln_t = np.log(teff_k)
    ln_omega = np.log(3631.0) - 0.4 * np.log(10.0) * mag - ln_flux("panstarrs_r", ln_t, 0.0)
    sigma_jy = 3631.0 * 10.0 ** (-0.4 * depth_mag) / 5.0
    information = np.zeros((2, 2))
    for name in BANDS:
        flux_jy = np.exp(ln_flux(name, ln_t, ln_omega))
        slope = (ln_flux(name, ln_t + 1e-3, 0.0) - ln_flux(name, ln_t - 1e-3, 0.0)) / 2e-3
        gradient = flux_jy / sigma_jy * np.array([slope, 1.0])
        information += np.outer(gradient, gradient)
    covariance = np.linalg.inv(information)
    parallax_mas = 1e3 * np.exp(0.5 * ln_omega) * PARSEC_M / (radius_rsun * RSUN_M)
    ln_distance = (parallax_error_mas / parallax_mas) ** 2
    lum = np.array([4.0, 1.0])
    return {
        "teff": np.sqrt(covariance[0, 0]),
        "radius": np.sqrt(0.25 * covariance[1, 1] + ln_distance),
        "lum": np.sqrt(lum @ covariance @ lum + 4.0 * ln_distance),
    }


class TestKnownAnswers:
    def test_small_errors_give_the_widths_of_cramer_and_rao(self):
        settings = example(
            temperature_k=[4000.0, 9000.0], parallax_error_mas=0.001, sampling={"effective_samples": 1000}
        )
        table = forecast(build_forecast(settings))
        for row in table:
            expected = fisher_widths(row["teff"], 18.0, 23.0, 0.8, 0.001)
            assert expected["teff"] < 0.02
            for quantity, width in expected.items():
                # Half of the 68 % interval of a Gaussian, 16 % to 84 %, is 0.9945 sigma.
                assert row[f"{quantity}_half_width"] == pytest.approx(0.9945 * width, rel=0.04)

    def test_the_brightness_is_that_of_the_stars(self):
        model = PLAIN | {"extinction": {"prior": "half-normal", "scale": 0.5}}
        survey = plan_survey(build_forecast(example(model, depth_mag=30.0, stars=50)))
        stars = invent(grid_points(survey.settings)[0], survey)
        flux_jy = stars["flux_jy"][:, BANDS.index("panstarrs_r")]
        assert np.ptp(stars["av"]) > 0.5
        assert flux_jy == pytest.approx(3631.0 * 10.0 ** (-0.4 * 18.0), rel=1e-4)
        assert stars["lum"] == pytest.approx(0.8**2 * (5000.0 / TSUN_K) ** 4, rel=1e-3)

    def test_scatter_is_that_of_the_settings(self):
        bands = [{"passband": name, "depth_mag": 18.8, "system": "AB", "floor": 0.1} for name in BANDS]
        model = PLAIN | {"outliers": {"fraction": 0.2, "width": 10.0}}
        survey = plan_survey(build_forecast(example(model, band=bands, stars=20000)))
        stars = invent(grid_points(survey.settings)[0], survey)
        zero_point_error = load_passband("panstarrs_r").zero_point_error
        true_jy = 3631.0 * 10.0 ** (-0.4 * 18.0)
        depth_jy = 3631.0 * 10.0 ** (-0.4 * 18.8)
        sigma_jy = np.sqrt((depth_jy / 5.0) ** 2 + (0.1**2 + zero_point_error**2) * true_jy**2)
        spread = np.std(stars["flux_jy"][:, BANDS.index("panstarrs_r")])
        assert spread == pytest.approx(sigma_jy * np.sqrt(0.8 + 0.2 * 100.0), rel=0.03)
        assert np.std(stars["parallax"] - stars["true_parallax"]) == pytest.approx(0.01, rel=0.03)

    def test_bands_of_a_star_share_the_factors_of_its_photosphere(self):
        model = PLAIN | {"photosphere": "calibrated"}
        survey = plan_survey(build_forecast(example(model, depth_mag=30.0, stars=4000)))
        ln_flux = np.log(invent(grid_points(survey.settings)[0], survey)["flux_jy"])
        at = survey.model.departures.at(5000.0)
        loading, scatter = at.loading[:, :, 0], at.scatter[:, 0]
        table, step = survey.model.table, 1e-3
        slope = (ln_flux_at(table, 5000.0 * np.exp(step), 0.0) - ln_flux_at(table, 5000.0 * np.exp(-step), 0.0))[0]
        reference = list(survey.model.passbands).index(survey.settings.forecast.brightness.label)
        off_scale = at.temperature_scatter[0] * (slope - slope[reference]) / (2.0 * step)  # at one magnitude there
        expected = loading.T @ loading + np.diag(scatter**2) + np.outer(off_scale, off_scale)
        assert np.cov(ln_flux.T) == pytest.approx(expected, abs=0.1 * expected.max())

    @pytest.mark.parametrize(
        ("prior", "median"),
        [
            ({"prior": "half-normal", "scale": 0.3}, 0.3 * 0.67449),
            ({"prior": "exponential", "scale": 0.3}, 0.3 * np.log(2.0)),
            ({"prior": "gaussian", "mean": 2.0, "scale": 0.1}, 2.0),
            ({"prior": "fixed", "mean": 1.5}, 1.5),
        ],
    )
    def test_dust_is_drawn_from_its_prior(self, prior, median):
        av = draw_extinction(Extinction(**prior), np.array([0.5, 0.0, 1.0]))
        assert av[0] == pytest.approx(median, rel=1e-4)
        assert (av >= 0.0).all()
        assert (av <= 6.0).all()


class TestGrid:
    def test_fainter_stars_have_wider_intervals(self):
        table = forecast(build_forecast(example(brightness=brightness(17.0, 19.0, 21.0))))
        for quantity in ("teff", "radius", "lum"):
            assert (np.diff(table[f"{quantity}_half_width"]) > 0.0).all()

    def test_a_band_left_out_widens_and_is_set_beside_the_rest(self):
        table = forecast(build_forecast(example(without=[["2mass_ks"], ["panstarrs_g", "2mass_ks"]])))
        assert list(table["bands"]) == ["all", "without 2mass_ks", "without panstarrs_g, 2mass_ks"]
        assert table["teff_ratio"][0] == 1.0
        assert (np.diff(table["teff_half_width"]) > 0.0).all()
        assert table["teff_ratio"][1:] == pytest.approx(
            table["teff_half_width"][1:] / table["teff_half_width"][0], rel=0.1
        )

    def test_a_point_does_not_know_the_others(self):
        both = forecast(build_forecast(example(temperature_k=[4000.0, 5000.0], brightness=brightness(19.0, 18.0))))
        alone = forecast(build_forecast(example()))
        same = both[(both["teff"] == 5000.0) & (both["mag"] == 18.0)]
        assert list(same[0].values()) == list(alone[0].values())

    def test_empty_sky_is_not_detected(self):
        table = forecast(build_forecast(example(brightness=brightness(18.0, 27.0), parallax_error_mas=[0.01, 1.0])))
        assert list(table["not_detected"]) == [0.0, 1.0]
        assert np.isnan(table["teff_half_width"][1])
        assert "-" in describe_forecast(table).splitlines()[-1].split()

    def test_without_a_parallax_there_is_a_temperature_only(self):
        keys = example()
        del keys["forecast"]["parallax_error_mas"]
        row = forecast(build_forecast(keys))[0]
        assert row["teff_half_width"] < 0.02
        assert np.isnan(row["radius_half_width"])

    def test_what_the_priors_decide_is_marked(self):
        table = forecast(
            build_forecast(example(brightness=brightness(15.0, 20.0), parallax_error_mas=[0.01, 2.0], stars=16))
        )
        assert list(is_misled(table, "radius")) == [False, True]
        assert not is_misled(table, "teff").any()
        *_, near, far, note = describe_forecast(table).splitlines()
        assert "*" not in near
        assert far.count("*") == 2
        assert note.startswith("* fewer than a third of the stars")

    def test_the_same_seed_gives_the_same_table_and_picture(self, tmp_path):
        settings = build_forecast(example(without=[["2mass_ks"]], stars=3))
        first, second = (save_forecast(forecast(settings), tmp_path / name) for name in ("a", "b"))
        for one, other in zip(first, second, strict=True):
            assert one.read_bytes() == other.read_bytes()
        run = settings.run.model_copy(update={"seed": 6})
        other = settings.model_copy(update={"run": run})
        point = grid_points(settings)[0]
        assert (invent(point, plan_survey(other))["flux_jy"] != invent(point, plan_survey(settings))["flux_jy"]).all()

    def test_auto_invents_ordinary_stars(self):
        automatic, calibrated = (
            plan_survey(build_forecast(example(PLAIN | {"photosphere": name}))) for name in ("auto", "calibrated")
        )
        point = grid_points(automatic.settings)[0]
        assert (invent(point, automatic)["flux_jy"] == invent(point, calibrated)["flux_jy"]).all()
        assert np.isfinite(forecast(automatic.settings)["lum_half_width"]).all()


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"temperature_k": []}, "forecast.temperature_k should be a list of different numbers"),
        ({"temperature_k": [5000.0, 5000.0]}, "forecast.temperature_k should be a list of different numbers"),
        (
            {"temperature_k": [30000.0]},
            r"forecast.temperature_k holds 30000, outside model.temperature_k, \[2500, 20000",
        ),
        ({"radius_rsun": [1.0, 2.0]}, "forecast.radius_rsun has 2 values for 1 temperatures: give one for each"),
        ({"radius_rsun": "r"}, "forecast.radius_rsun = 'r': should be a number, or a list of numbers"),
        ({"radius_rsun": 4000.0}, "forecast.radius_rsun holds 4000, outside model.radius_rsun"),
        ({"parallax_error_mas": 0.0}, "forecast.parallax_error_mas = 0.0: should be greater than 0"),
        ({"parallax_error_mas": [0.1, 0.2]}, "forecast.parallax_error_mas has 2 values for 1 magnitudes"),
        ({"brightness": {"label": "panstarrs_x", "mag": [18.0], "system": "AB"}}, "brightness.label 'panstarrs_x' is"),
        ({"without": [["2mass_k"]]}, r"without\[0\] '2mass_k' is the label of no band \(did you mean '2mass_ks'\?\)"),
        ({"without": [[]]}, r"forecast.without\[0\] should name bands to leave out"),
        ({"without": [["2mass_ks"], ["2mass_ks"]]}, r"forecast.without\[1\] should name bands"),
        ({"without": [list(BANDS[:4])]}, r"forecast.without\[0\] leaves fewer than two bands"),
        ({"without": ["2mass_ks"]}, r"forecast.without\[0\] = '2mass_ks': should be a list in square brackets"),
        ({"band": []}, "forecast.band should hold two bands at least"),
        ({"magnitudes": [18.0]}, "forecast.magnitudes: unknown key"),
    ],
)
def test_wrong_settings_are_told(changes, message):
    with pytest.raises(SettingsError, match=message):
        build_forecast(example(**changes))


def test_problems_of_bands_name_the_passband():
    keys = example()
    del keys["forecast"]["band"][1]["depth_mag"]
    keys["forecast"]["band"][2]["depth"] = 23.0
    keys["forecast"]["band"].append(keys["forecast"]["band"][0])
    with pytest.raises(SettingsError) as caught:
        build_forecast(keys)
    assert "forecast.band[1].depth_mag (panstarrs_r) is missing: Magnitude of a star measured at 5 sigma" in str(
        caught.value
    )
    assert "forecast.band[2].depth (panstarrs_i): unknown key (did you mean 'depth_mag'?)" in str(caught.value)
    del keys["forecast"]["band"][1:3]
    with pytest.raises(SettingsError, match=r"forecast.band\[3\].label \(panstarrs_g\) 'panstarrs_g' is taken"):
        build_forecast(example(band=[*example()["forecast"]["band"][:3], example()["forecast"]["band"][0]]))


@pytest.mark.parametrize("section", ["extinction", "distance"])
def test_columns_are_refused(section):
    key = {"extinction": "scale", "distance": "length_scale_pc"}[section]
    with pytest.raises(SettingsError, match=f"model.{section}.{key} names the column 'x', and a forecast has no table"):
        build_forecast(example({section: {key: "x"}}))


def test_draws_are_refused():
    with pytest.raises(SettingsError, match=r"sampling.keep_draws has no use in a forecast"):
        build_forecast(example(sampling={"keep_draws": 5}))


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"passband": "panstarrs_gg"}, r"forecast.band\[0\].passband: .*panstarrs_g"),
        ({"system": "Vega"}, r"forecast.band\[0\].system: passband 'panstarrs_g' has no Vega zero point"),
    ],
)
def test_bands_that_are_not_known_are_told(change, message):
    keys = example()
    keys["forecast"]["band"][0] |= change
    with pytest.raises(SettingsError, match=message):
        plan_survey(build_forecast(keys))


def test_stars_beyond_the_bounds_are_told():
    model = PLAIN | {"distance": {"bounds_pc": [1.0, 500.0]}}
    with pytest.raises(
        SettingsError, match=r"a star of 5000 K and 0.8 solar radii at 18 mag lies at 2.68e\+03 pc, beyond"
    ):
        forecast(build_forecast(example(model)))


class TestCommand:
    @pytest.fixture
    def config(self, tmp_path):
        keys = example(
            {"photosphere": "calibrated"},
            {"effective_samples": 200},
            zero_point_error=None,
            temperature_k=[4000.0, 6000.0],
            brightness=brightness(16.0, 20.0),
            stars=2,
            without=[["2mass_ks"]],
        )
        keys["run"]["output"] = str(tmp_path / "out")
        path = tmp_path / "forecast.toml"
        path.write_text(dump_toml(build_forecast(keys)))
        return path

    def test_a_forecast_leaves_a_table_and_pictures(self, config, tmp_path):
        shown = CliRunner().invoke(cli.app, ["forecast", str(config)])
        assert shown.exit_code == 0, shown.output
        lines = shown.stdout.splitlines()
        assert lines[-1] == f"The table is {tmp_path}/out/forecast.ecsv, the picture {tmp_path}/out/forecast.pdf"
        assert [line.split()[:2] for line in lines[4:8]] == [[t, m] for t in ("4000", "6000") for m in ("16", "20")]
        assert sorted(path.name for path in (tmp_path / "out").iterdir()) == [
            "forecast.ecsv",
            "forecast.pdf",
            "forecast.png",
        ]
        table = Table.read(tmp_path / "out" / "forecast.ecsv")
        assert len(table) == 2 * 2 * 2
        assert [table[name].unit for name in ("teff", "mag", "radius", "parallax")] == [u.K, u.mag, u.R_sun, u.mas]
        assert np.isfinite(table["lum_half_width"]).all()
        assert table["teff_half_width"].description
        assert table.meta["settings"]["run"] == {"name": "forecast", "seed": 5}
        assert np.ptp(imread(tmp_path / "out" / "forecast.png")) > 0.5
        assert (tmp_path / "out" / "forecast.pdf").read_bytes().startswith(b"%PDF")

    def test_quiet_is_silent(self, config):
        shown = CliRunner().invoke(cli.app, ["forecast", str(config), "--quiet"])
        assert (shown.exit_code, shown.output) == (0, "")

    def test_the_directory_of_a_run_is_refused(self, config, tmp_path):
        (tmp_path / "out" / "generations").mkdir(parents=True)
        shown = CliRunner().invoke(cli.app, ["forecast", str(config)])
        assert shown.exit_code == 2
        assert "is the directory of a run" in shown.stderr

    def test_help_has_an_example(self):
        assert "Example: starkiln forecast" in CliRunner().invoke(cli.app, ["forecast", "--help"]).output


class TestShippedFiles:
    def test_schema_is_the_models(self):
        shipped = (starkiln.settings.__path__[0], "forecast.schema.json")
        with open("/".join(shipped)) as file:
            assert json.load(file) == forecast_schema(), (
                "the models changed: write json.dumps(forecast_schema(), indent=2) to forecast.schema.json"
            )

    def test_the_example_holds_every_key_of_its_sections(self, repository):
        path = repository / "configs" / "forecast.toml"
        settings = load_forecast(path)
        keys = tomllib.loads(path.read_text())["forecast"]
        assert set(keys) == set(type(settings.forecast).model_fields)
        text = path.read_text()
        for key in type(settings.forecast.band[0]).model_fields:
            assert f"\n{key} = " in text or f"\n# {key} = " in text
        assert fits_in(settings) == 4 * 4 * settings.forecast.stars * 3
        assert settings.run.output == repository / "runs" / "tamarin-strip-forecast"
        plan_survey(settings)
