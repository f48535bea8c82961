"""The smaller parts of the page: colours of blackbodies, words, verdicts and the pictures of stars."""

import numpy as np
import pytest

from published_run import publish
from starkiln.flags import BY_NAME
from starkiln.physics.constants import MAS_PER_RAD
from starkiln.physics.planck import exitance_jy
from starkiln.report import page_stars, page_verdict, page_words
from starkiln.report.page import read_run
from starkiln.report.page_colours import blackbody_hex, blackbody_rgb, blackbody_xyz
from starkiln.report.page_figures import inline_svg
from starkiln.report.page_sources import sources
from starkiln.report.page_stats import FLAG_WEIGHTS, gather


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    return read_run(publish(tmp_path_factory.mktemp("parts") / "run", rows=200))


# ---- colours


@pytest.mark.parametrize(
    ("teff_k", "x", "y"),
    # CIE 15: illuminant A is the blackbody of 2856 K; the Planckian locus at 6504 K (both from memory).
    [(2856.0, 0.4476, 0.4074), (6504.0, 0.3135, 0.3237)],
)
def test_chromaticity_of_blackbodies(teff_k, x, y):
    assert blackbody_xyz(teff_k)[0, :2] == pytest.approx([x, y], abs=0.002)


def test_hot_is_blue_and_cool_is_red():
    red, _, blue = blackbody_rgb(np.geomspace(2000.0, 50_000.0, 30)).T
    assert (np.diff(red) <= 1e-12).all()
    assert (np.diff(blue) >= -1e-12).all()
    assert blackbody_hex(2500.0).startswith("#ff")
    assert blackbody_hex(20_000.0).endswith("ff")


# ---- words


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (12345.6, "12,300"),
        (0.012345, "0.0123"),
        (-3.14159, "-3.14"),
        (0.0, "0"),
        (None, "–"),
        (float("nan"), "–"),
        (2.5e-8, "2.50e-08"),
    ],
)
def test_number(value, text):
    assert page_words.number(value) == text


@pytest.mark.parametrize(
    ("value", "text"), [(20000.0, "20,000"), (0.01, "0.01"), (1e-3, "10⁻³"), (3e-4, "3×10⁻⁴"), (1e6, "10⁶")]
)
def test_axis_number(value, text):
    assert page_words.axis_number(value) == text


@pytest.mark.parametrize(
    ("seconds", "text"), [(8.2, "8 s"), (119.0, "119 s"), (300.0, "5 min"), (3600.0 * 5 + 60, "5 h 1 min")]
)
def test_duration(seconds, text):
    assert page_words.duration(seconds) == text


def test_percent_and_size():
    assert (page_words.percent(0.0123), page_words.percent(1.0)) == ("1.2\xa0%", "100\xa0%")
    assert (page_words.size(999), page_words.size(5_088_912), page_words.size(2.5e9)) == ("999 bytes", "5 MB", "2.5 GB")


# ---- verdicts


def test_a_sound_run_is_no_worry(run):
    assert page_verdict.worries(run.facts, gather(run.folder)) == []
    assert page_verdict.worry_sentence([]) == "Nothing stands out."


@pytest.mark.parametrize(
    ("change", "text"),
    [
        ({"rows": {"set_aside": 3}}, "3 rows were set aside for faults"),
        ({"input": {"skipped": ["a.parquet: broken"]}}, "1 input files were left out"),
        (
            {
                "zero_point_audit": [
                    {"label": "j", "offset_mag": -0.1, "error_mag": 0.01, "determined": True, "stars": 9},
                    {"label": "h", "offset_mag": -0.1, "error_mag": 0.01, "determined": False, "stars": 9},
                    {"label": "k", "offset_mag": -0.1, "error_mag": 0.1, "determined": True, "stars": 9},
                ]
            },
            "the zero points of j look wrong",
        ),
    ],
)
def test_worries_of_a_run(run, change, text):
    assert page_verdict.worries({**run.facts, **change}, gather(run.folder)) == [text]


def test_worries_of_a_catalogue(run):
    stats = gather(run.folder)
    stats.flags["not_converged"] = 20
    stats.histograms["p_value"][0] += 50
    band = stats.bands["2mass_j"]
    band.counts[:] = np.roll(band.counts, 20, axis=1)  # two sigma
    found = " | ".join(page_verdict.worries(run.facts, stats))
    assert "10.0\xa0% of the stars did not converge" in found
    assert "20.0\xa0% of the predictive p-values lie below 0.01" in found
    assert "2mass_j (+2." in found


def test_exit_codes_are_told():
    counts = {"selected": 10, "catalogue": 9, "rejected": 1, "pending": 0}
    assert page_verdict.job_answer({"counts": counts, "exit_code": 0}).startswith("Yes. Of 10 ")
    assert page_verdict.job_answer({"counts": counts, "exit_code": 4}).startswith("Yes, but not for all rows:")


def test_every_flag_has_its_meaning_and_scores_name_flags(run):
    table = page_verdict.flag_table(gather(run.folder))
    assert {row["name"]: row["meaning"] for row in table} == {name: flag.sentence for name, flag in BY_NAME.items()}
    assert set(FLAG_WEIGHTS) <= set(BY_NAME)


def test_sources_follow_the_settings(run):
    found = dict(sources(run.sections, {"2mass_j": {"source": "zero", "curve_source": "curve"}}))
    assert found["Passband 2mass_j"] == "curve; zero point: zero"
    assert "Gordon" in found["Extinction law G23"]
    model = run.sections["model"] | {"photosphere": "blackbody", "outliers": False}
    bare = dict(sources(dict(run.sections) | {"model": model}, {}))
    assert not any("departures" in what or "Mixture" in what for what in bare)


# ---- pictures of stars


def test_the_model_of_a_blackbody_is_planck_through_the_band(run):
    star = {"teff_p50": 5772.0, "ang_diam_p50": 0.1, "av_p50": 0.0, "photosphere": "blackbody"}
    fluxes = page_stars.model_fluxes(star, run.bands)
    omega = (0.05 / MAS_PER_RAD) ** 2
    for label in ("2mass_j", "2mass_ks"):
        pivot_um = run.bands.passbands[label].pivot_um
        assert fluxes[label] == pytest.approx(omega * exitance_jy(pivot_um, 5772.0), rel=0.02)


def test_a_calibrated_star_departs_from_the_blackbody(run):
    star = {"teff_p50": 3500.0, "ang_diam_p50": 0.1, "av_p50": 0.0, "photosphere": "blackbody"}
    bare, calibrated = (page_stars.model_fluxes(star | {"photosphere": kind}, run.bands) for kind in ("blackbody", "x"))
    assert abs(np.log(calibrated["panstarrs_g"] / bare["panstarrs_g"])) > 0.1


@pytest.mark.parametrize("missing", [{"teff_p50": None}, {"av_p50": 99.0}])
def test_a_star_without_a_model_has_no_picture(run, missing):
    star = {"teff_p50": 5000.0, "ang_diam_p50": 0.1, "av_p50": 0.0, "photosphere": "calibrated"} | missing
    assert page_stars.model_fluxes(star, run.bands) is None


def test_residuals_go_up_when_positive_and_stay_in_the_picture():
    zero, up, far, farther = (page_stars.residual_y(sigma) for sigma in (0.0, 3.0, 8.0, 80.0))
    assert far == farther < up < zero


def test_observed_fluxes_are_those_of_the_input(run):
    stats = gather(run.folder)
    observed = page_stars.read_observed(stats.worst, stats.id_name, run.settings, run.bands)
    assert set(observed) == {star["place"] for star in stats.worst}
    first = observed[stats.worst[0]["place"]]
    assert set(first) == set(run.bands.passbands)
    for seen in first.values():
        assert seen.error_jy == pytest.approx(0.03 * seen.flux_jy)


# ---- SVG


def test_inline_svg_has_its_own_ids_and_the_pages_colours():
    text = (
        '<?xml version="1.0"?><svg width="9pt" viewBox="0 0 90 45.5"><!-- x --><metadata><a/></metadata>'
        '<path id="p1" style="stroke: #0072b2"/><use xlink:href="#p1" style="fill: #123456; clip-path: url(#p1)"/>'
        "</svg>"
    )
    found = inline_svg(text, "name")
    assert 'viewBox="0 0 90 45.5"' in found
    assert 'id="name-p1"' in found
    assert 'xlink:href="#name-p1"' in found
    assert "url(#name-p1)" in found
    assert "stroke: var(--blue)" in found
    assert "#123456" in found
    assert "metadata" not in found
    assert "<!--" not in found
