"""The ways in which a run can be told more, or less: each against an answer that is known."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import binom, expon, halfnorm, norm, truncnorm

from simulated import as_table, make_settings, simulate
from starkiln.physics.bandtable import ln_flux
from starkiln.physics.constants import MAS_PER_RAD
from starkiln.stages.model import build_model
from starkiln.stages.process import process_part

PROBABILITIES = {"lo95": 0.025, "lo68": 0.16, "p50": 0.5, "hi68": 0.84, "hi95": 0.975}
CHANCE = 1e-4  # of a binomial bound being passed at either end by luck


def settings_with(extinction=None, effective_samples=400, **sections):
    model = {
        "temperature_k": [2500.0, 20000.0],
        "radius_rsun": [0.1, 20.0],
        "distance": {"length_scale_pc": 300.0},
        **({"extinction": extinction} if extinction else {}),
    } | sections.pop("model", {})
    return make_settings(model=model, sampling={"effective_samples": effective_samples}, **sections)


def catalogue_of(stars, settings, **columns):
    part = process_part(as_table(stars, settings, **columns), settings, build_model(settings))
    assert part.catalogue.num_rows == len(stars)
    return part.catalogue


def values(catalogue, name):
    return catalogue[name].to_numpy(zero_copy_only=False).astype(float)


def same_fit(one, other):
    """Tell whether two catalogues hold the same bits, but for the hash of what was read."""
    return one.drop_columns(["row_hash"]).equals(other.drop_columns(["row_hash"]))


def inside(catalogue, name, truth, level):
    """Return how many intervals hold the truth, and of how many."""
    low, high = (values(catalogue, f"{name}_{end}{level}") for end in ("lo", "hi"))
    known = np.isfinite(low)
    return int(((low <= truth) & (truth <= high))[known].sum()), int(known.sum())


def assert_covers(catalogue, name, truth):
    for level in (68, 95):
        found, of = inside(catalogue, name, truth, level)
        least, most = binom.ppf([CHANCE, 1.0 - CHANCE], of, level / 100.0)
        assert least <= found <= most, (name, level, found, of)


def test_extinction_known_star_by_star_covers_the_truth():
    settings = settings_with({"prior": "gaussian", "mean": "av_known", "scale": "av_known_error"})
    stars, truth = simulate(settings, build_model(settings), 120, seed=31, noise=(0.003, 0.02))
    catalogue = catalogue_of(stars, settings)
    for name in ("av", "teff", "radius", "lum"):
        assert_covers(catalogue, name, truth[name])
    # An extinction known to 0.05 mag is not known worse afterwards.
    sigma = 0.5 * (values(catalogue, "av_hi68") - values(catalogue, "av_lo68"))
    assert (sigma < 1.15 * stars.av_scale).all()


def test_a_column_of_one_extinction_is_that_number():
    number = settings_with({"prior": "gaussian", "mean": 0.7, "scale": 0.1})
    column = settings_with({"prior": "gaussian", "mean": "av_known", "scale": "av_known_error"})
    stars, _ = simulate(number, build_model(number), 20, seed=32, noise=(0.003, 0.02))
    assert same_fit(catalogue_of(stars, number), catalogue_of(stars, column))


@pytest.mark.parametrize(
    ("extinction", "prior"),
    [
        ({"prior": "exponential", "scale": 0.4}, expon(0.0, 0.4)),
        ({"prior": "half-normal", "scale": 0.4}, halfnorm(0.0, 0.4)),
        ({"prior": "gaussian", "mean": 0.5, "scale": 0.4}, truncnorm(-1.25, 99.0, 0.5, 0.4)),
    ],
    ids=lambda value: value["prior"] if isinstance(value, dict) else "",
)
def test_without_information_extinction_is_as_it_was_thought_to_be(extinction, prior):
    settings = settings_with(extinction, effective_samples=2000)
    stars, _ = simulate(settings, build_model(settings), 16, seed=33)
    blind = replace(stars, flux_jy=np.zeros_like(stars.flux_jy), error_jy=np.full_like(stars.error_jy, 1e20))
    catalogue = catalogue_of(replace(blind, limit=np.zeros_like(stars.limit)), settings)
    for end, probability in PROBABILITIES.items():
        found = values(catalogue, f"av_{end}")
        assert np.mean(found) == pytest.approx(prior.ppf(probability), rel=0.04, abs=0.004), end


def test_exponential_extinction_covers_the_truth():
    settings = settings_with({"prior": "exponential", "scale": 0.4})
    stars, truth = simulate(settings, build_model(settings), 120, seed=34, noise=(0.003, 0.02))
    catalogue = catalogue_of(stars, settings)
    for name in ("av", "teff", "radius"):
        assert_covers(catalogue, name, truth[name])


def test_a_fixed_extinction_is_taken_from_its_column():
    settings = settings_with({"prior": "fixed", "mean": "av_known"})
    stars, truth = simulate(settings, build_model(settings), 120, seed=35, noise=(0.003, 0.02))
    assert truth["av"].std() > 0.2
    catalogue = catalogue_of(stars, settings)
    for end in PROBABILITIES:
        np.testing.assert_allclose(values(catalogue, f"av_{end}"), truth["av"], rtol=1e-6)
    for name in ("teff", "ang_diam", "lum"):
        assert_covers(catalogue, name, truth[name])
    same = replace(stars, av_mean=np.full(len(stars), 0.4))
    number = settings_with({"prior": "fixed", "mean": 0.4})
    assert same_fit(catalogue_of(same, settings), catalogue_of(same, number))


def test_radius_follows_a_distance_of_the_users_own():
    distance = {"value": "distance", "error": "distance_error", "unit": "pc"}
    inner, wide = (
        settings_with(input={"distance": distance}, effective_samples=2000, model={"radius_rsun": bounds})
        for bounds in ([0.1, 20.0], [0.01, 200.0])
    )
    stars, truth = simulate(inner, build_model(inner), 12, seed=36, noise=(1e-4, 3e-4))
    near = replace(stars, distance_pc=truth["dist"], distance_error_pc=0.1 * truth["dist"])
    far = replace(near, distance_pc=2.0 * near.distance_pc, distance_error_pc=2.0 * near.distance_error_pc)
    catalogue, doubled = catalogue_of(near, wide), catalogue_of(far, wide)
    # A Gaussian in the distance itself; the quantiles of some 2,000 samples.
    for end, probability in PROBABILITIES.items():
        expected = 1.0 + 0.1 * norm.ppf(probability)
        np.testing.assert_allclose(values(catalogue, f"dist_{end}") / truth["dist"], expected, atol=0.015)
    theta = values(catalogue, "ang_diam_p50") / truth["ang_diam"]
    radius = theta * values(catalogue, "dist_p50") / truth["dist"] * truth["radius"]
    np.testing.assert_allclose(values(catalogue, "radius_p50"), radius, rtol=0.01)
    for end in PROBABILITIES:
        np.testing.assert_allclose(
            values(doubled, f"radius_{end}"), 2.0 * values(catalogue, f"radius_{end}"), rtol=2e-3
        )
        np.testing.assert_allclose(values(doubled, f"lum_{end}"), 4.0 * values(catalogue, f"lum_{end}"), rtol=4e-3)
        assert (values(doubled, f"teff_{end}") == values(catalogue, f"teff_{end}")).all()


def test_a_distance_in_kiloparsecs_is_the_same_distance():
    in_pc, in_kpc = (
        settings_with(input={"distance": {"value": "distance", "error": "distance_error", "unit": unit}})
        for unit in ("pc", "kpc")
    )
    stars, truth = simulate(in_pc, build_model(in_pc), 6, seed=37)
    given = replace(stars, distance_pc=truth["dist"], distance_error_pc=0.05 * truth["dist"])
    small = replace(given, distance_pc=1e-3 * given.distance_pc, distance_error_pc=1e-3 * given.distance_error_pc)
    one, other = catalogue_of(given, in_pc), catalogue_of(small, in_kpc)
    np.testing.assert_allclose(values(one, "radius_p50"), values(other, "radius_p50"), rtol=1e-5)


def test_zero_point_and_error_scale_as_columns_are_corrections_made_beforehand():
    plain = settings_with()
    columns = settings_with(
        input={
            "parallax": {
                "value": "parallax",
                "error": "parallax_error",
                "unit": "mas",
                "zero_point": "parallax_zero_point",
                "error_scale": "parallax_error_scale",
            }
        }
    )
    stars, _ = simulate(plain, build_model(plain), 40, seed=38)
    rng = np.random.default_rng(1)
    zero_point, scale = rng.normal(-0.02, 0.05, 40), rng.uniform(0.8, 1.5, 40)
    corrected = replace(
        stars,
        parallax_mas=stars.parallax_mas - zero_point,
        parallax_error_mas=stars.parallax_error_mas * scale,
    )
    by_columns = catalogue_of(stars, columns, parallax_zero_point=zero_point, parallax_error_scale=scale)
    assert same_fit(catalogue_of(corrected, plain), by_columns)
    assert not same_fit(catalogue_of(stars, plain), by_columns)


@pytest.fixture(scope="module")
def scattered():
    """Stars whose fluxes scatter by 10 % about the model, though their stated errors are 0.1 to 1 %."""
    settings = settings_with(model={"outliers": False})
    model = build_model(settings)
    stars, truth = simulate(settings, model, 120, seed=39, noise=(1e-4, 1e-3))
    omega = (truth["ang_diam"] / 2.0 / MAS_PER_RAD) ** 2
    true_jy = omega[:, None] * np.exp(ln_flux(model.table, truth["teff"], truth["av"]))
    extra = 0.1 * true_jy * np.random.default_rng(2).normal(size=true_jy.shape)
    return replace(stars, flux_jy=stars.flux_jy + extra), truth


def test_jitter_finds_the_scatter_that_the_errors_leave_out(scattered):
    stars, truth = scattered
    catalogue = catalogue_of(stars, settings_with(model={"outliers": False, "jitter": True}))
    for name in ("teff", "ang_diam", "av"):
        assert_covers(catalogue, name, truth[name])
    # Thirteen bands, of which temperature, size and dust take some.
    assert 7.0 < np.median(values(catalogue, "chi2")) < 14.0
    assert np.median(values(catalogue, "ppp_value")) > 0.3


def test_without_jitter_the_intervals_are_too_narrow_and_chi_squared_says_so(scattered):
    stars, truth = scattered
    catalogue = catalogue_of(stars, settings_with(model={"outliers": False}))
    for name in ("teff", "ang_diam"):
        found, of = inside(catalogue, name, truth[name], 68)
        assert found < 0.4 * of
    assert np.median(values(catalogue, "chi2")) > 100.0
    assert np.median(values(catalogue, "ppp_value")) < 1e-6


def test_jitter_does_no_harm_where_the_errors_are_right():
    settings = settings_with(model={"outliers": False, "jitter": True})
    plain = settings_with(model={"outliers": False})
    stars, truth = simulate(plain, build_model(plain), 60, seed=40, noise=(0.003, 0.02))
    with_jitter, without = catalogue_of(stars, settings), catalogue_of(stars, plain)
    assert_covers(with_jitter, "teff", truth["teff"])
    width = [np.log(values(c, "teff_hi68") / values(c, "teff_lo68")) for c in (with_jitter, without)]
    assert 0.95 < np.nanmedian(width[0] / width[1]) < 1.5
