"""The audit of zero points: a linear toy with a known answer, parts in any order, and what stars cannot tell."""

import numpy as np
import pytest

from simulated import THIRTEEN_BANDS, as_table, invented_departures, make_settings, simulate
from starkiln.inference import audit
from starkiln.inference.audit import (
    MAG_PER_LN_FLUX,
    add_equations,
    combined,
    no_equations,
    no_stars,
    sample_stars,
    solve_offsets,
)
from starkiln.inference.posterior import LN_HEAT_K
from starkiln.physics.departures import write_departures
from starkiln.stages.audit import zero_point_audit
from starkiln.stages.fit import start_block
from starkiln.stages.model import build_model, zero_point_error
from starkiln.stages.process import process_part

EIGHT_BANDS = tuple(band for band in THIRTEEN_BANDS if not band.startswith("panstarrs"))
FIVE_BANDS = ("gaia_dr3_bp", "gaia_dr3_rp", "2mass_j", "2mass_ks", "wise_w1")
OPTICAL_BANDS = ("panstarrs_g", "panstarrs_r", "panstarrs_i", "panstarrs_z", "2mass_j")
FOUR_BANDS = ("panstarrs_g", "gaia_dr3_rp", "2mass_j", "2mass_ks")
QUOTED = np.full(6, 0.01)


def toy_equations(offset, n=400, error=0.02, seed=3, unexplained=0.0):
    """Return the equations of stars with six bands, linear in two parameters each: a level, and a slope of its own."""
    rng = np.random.default_rng(seed)
    equations = no_equations(6)
    for _ in range(n):
        jacobian = np.stack([np.ones(6), np.linspace(-1.0, 1.0, 6) ** 2 * rng.normal() + rng.normal(size=6)], axis=1)
        residual = jacobian @ rng.normal(size=2) + offset + error * rng.normal(size=6)
        residual += unexplained * rng.normal(size=6)
        audit._add_star(jacobian, np.full(6, error**-2.0), residual, np.arange(6), equations)
        equations.stars[:] += 1
    return equations


def test_a_linear_toy_gives_the_offset_of_the_one_wrong_band():
    offset = np.array([0.0, 0.0, 0.08, 0.0, 0.0, 0.0])
    found = solve_offsets(toy_equations(offset), QUOTED)
    assert found.determined.all()
    assert found.offset_mag[2] == pytest.approx(MAG_PER_LN_FLUX * 0.08, abs=0.006)
    np.testing.assert_allclose(np.delete(found.offset_mag, 2), 0.0, atol=0.006)


def test_the_errors_are_those_of_many_toys():
    quoted = np.full(6, 0.03)
    rng = np.random.default_rng(9)
    pulls = []
    for seed in range(400):
        offset = quoted * rng.normal(size=6)
        found = solve_offsets(toy_equations(offset, n=20, seed=seed), quoted)
        pulls.append((found.offset_mag - MAG_PER_LN_FLUX * offset) / found.error_mag)
    assert 0.75 < np.std(pulls) < 1.2


def test_an_offset_of_all_bands_is_a_size_and_stays_within_the_quoted_errors():
    found = solve_offsets(toy_equations(np.full(6, 0.1)), QUOTED)
    np.testing.assert_allclose(found.offset_mag, 0.0, atol=0.005)


def test_misfit_beyond_the_errors_enlarges_them():
    quoted = np.full(6, 0.1)
    calm = solve_offsets(toy_equations(np.zeros(6), n=30), quoted)
    rough = solve_offsets(toy_equations(np.zeros(6), n=30, unexplained=0.06), quoted)
    assert (rough.error_mag > 1.02 * calm.error_mag).all()


def test_bands_that_agree_leave_little_doubt_about_one_that_does_not():
    quoted, wrong = np.full(6, 0.03), np.array([0.0, 0.0, 0.08, 0.0, 0.0, 0.0])
    exact = solve_offsets(toy_equations(wrong), quoted)
    usual = solve_offsets(toy_equations(wrong + quoted * np.random.default_rng(5).normal(size=6)), quoted)
    assert exact.error_mag[2] < 0.2 * usual.error_mag[2]


def test_offsets_are_about_those_already_taken_out():
    offset = np.array([0.0, 0.0, 0.08, 0.0, 0.0, 0.0])
    whole = solve_offsets(toy_equations(offset), QUOTED)
    rest = solve_offsets(toy_equations(0.25 * offset), QUOTED, 0.75 * offset)
    np.testing.assert_allclose(rest.offset_mag, whole.offset_mag, atol=1e-4)
    np.testing.assert_allclose(rest.error_mag, whole.error_mag, rtol=1e-2)


def test_without_stars_nothing_is_determined():
    found = solve_offsets(no_equations(6), QUOTED)
    assert not found.determined.any()
    assert (found.offset_mag == 0.0).all()


def survey(bands, folder, n, photosphere="calibrated"):
    write_departures(invented_departures(bands), folder / "departures.ecsv")
    settings = make_settings(
        bands,
        model={
            "photosphere": photosphere,
            "departures": str(folder / "departures.ecsv"),
            "temperature_k": [3000.0, 9000.0],
            "radius_rsun": [0.1, 20.0],
            "distance": {"length_scale_pc": 300.0},
        },
    )
    model = build_model(settings)
    return settings, model, simulate(settings, model, n, seed=4)[0]


def peaks(stars, model, settings):
    block, modes = start_block(stars, model, settings)
    coords = modes.coords[:, 0]
    ln_teff = LN_HEAT_K - np.log(coords[:, 0])
    points = np.stack([ln_teff, coords[:, 1] - ln_teff, *coords[:, 2:].T], axis=1)
    return block, np.ascontiguousarray(points[:, :, None])


def sums_of(points, block, model):
    return sample_stars(points, block, is_blackbody=model.photosphere == "blackbody")


def audit_with(stars_at_peaks, offset_mag):
    """Return the audit's table when every star's fluxes are off by some magnitudes in each band."""
    settings, model, block, points = stars_at_peaks
    off = block._replace(scaled_flux=block.scaled_flux * 10.0 ** (-0.4 * offset_mag[block.band]))
    return zero_point_audit(sums_of(points, off, model), model, settings)


def one_wrong(n_bands, wrong, by_mag):
    return np.where(np.arange(n_bands) == wrong, by_mag, 0.0)


def equal(one, other):
    return all(np.array_equal(mine, theirs) for mine, theirs in zip(flat(one), flat(other), strict=True))


def flat(sums):
    return [*sums[:3], *sums.block]


@pytest.fixture(scope="module")
def eight(tmp_path_factory):
    return survey(EIGHT_BANDS, tmp_path_factory.mktemp("eight"), 4000)


@pytest.fixture(scope="module")
def eight_at_peaks(eight):
    settings, model, stars = eight
    return settings, model, *peaks(stars, model, settings)


@pytest.fixture(scope="module", params=[FIVE_BANDS, OPTICAL_BANDS], ids=["BP RP J Ks W1", "griz J"])
def five_at_peaks(request, tmp_path_factory):
    settings, model, stars = survey(request.param, tmp_path_factory.mktemp("five"), 4000)
    return settings, model, *peaks(stars, model, settings)


@pytest.fixture(scope="module")
def thirteen_at_peaks(tmp_path_factory):
    settings, model, stars = survey(THIRTEEN_BANDS, tmp_path_factory.mktemp("thirteen"), 4000)
    return settings, model, *peaks(stars, model, settings)


def test_parts_in_any_order_give_the_bits_of_the_whole(eight, monkeypatch):
    settings, model, stars = eight
    block, points = peaks(stars.take(slice(0, 1000)), model, settings)

    def sums(rows):
        return sums_of(points[rows], block.take(rows), model)

    rows = np.random.default_rng(1).permutation(1000)
    first, second, third = (sums(some) for some in (rows[:137], rows[137:600], rows[600:]))
    for enough in (10_000, 300):
        monkeypatch.setattr(audit, "ENOUGH_STARS", enough)
        whole = sums(np.arange(1000))
        assert len(whole.key) == min(enough, 1000)
        assert equal(combined(combined(first, second), third), whole)
        assert equal(combined(combined(third, no_stars(8)), combined(second, first)), whole)


def test_a_table_in_parts_of_any_size_adds_up_to_the_same_bits(eight):
    settings, model, stars = eight
    quick = settings.model_copy(
        update={"sampling": settings.sampling.model_copy(update={"effective_samples": 100, "max_steps": 128})}
    )
    table = as_table(stars.take(slice(0, 12)), settings)
    whole = process_part(table, quick, model).audit
    first, second = (process_part(rows, quick, model).audit for rows in (table.slice(0, 5), table.slice(5)))
    assert equal(combined(second, first), whole)
    assert len(whole.key) == 12


def test_stars_of_both_photospheres_are_audited_together(eight):
    settings, model, stars = eight
    auto = build_model(settings.model_copy(update={"model": settings.model.model_copy(update={"photosphere": "auto"})}))
    block, points = peaks(stars.take(slice(0, 300)), model, settings)
    bare_block, bare_points = peaks(stars.take(slice(300, 400)), auto.rival, settings)
    both = combined(sums_of(points, block, model), sums_of(bare_points, bare_block, auto.rival))
    rows = zero_point_audit(both, auto, settings)
    assert both.is_blackbody.sum() == 100
    assert max(row["stars"] for row in rows) > 300


@pytest.mark.parametrize("by_mag", [0.05, -0.05])
@pytest.mark.parametrize("wrong", range(8))
def test_one_of_eight_zero_points_wrong_by_a_twentieth_magnitude_is_found(eight_at_peaks, wrong, by_mag):
    rows = audit_with(eight_at_peaks, one_wrong(8, wrong, by_mag))
    for row, true in zip(rows, one_wrong(8, wrong, by_mag), strict=True):
        assert row["determined"]
        assert row["offset_mag"] == pytest.approx(true, abs=0.01)
        assert abs(row["offset_mag"] - true) < 3.0 * row["error_mag"]
        assert 3600 < row["stars"] <= 4000


@pytest.mark.slow
@pytest.mark.parametrize("by_mag", [0.05, -0.05])
@pytest.mark.parametrize("wrong", range(13))
def test_one_of_thirteen_zero_points_wrong_by_a_twentieth_magnitude_is_found(thirteen_at_peaks, wrong, by_mag):
    rows = audit_with(thirteen_at_peaks, one_wrong(13, wrong, by_mag))
    for row, true in zip(rows, one_wrong(13, wrong, by_mag), strict=True):
        assert row["determined"]
        assert row["offset_mag"] == pytest.approx(true, abs=0.01)
        assert abs(row["offset_mag"] - true) < 3.0 * row["error_mag"]


@pytest.mark.parametrize("by_mag", [0.05, -0.05])
@pytest.mark.parametrize("wrong", range(5))
def test_one_of_five_zero_points_wrong_by_a_twentieth_magnitude_is_found(five_at_peaks, wrong, by_mag):
    row = audit_with(five_at_peaks, one_wrong(5, wrong, by_mag))[wrong]
    assert row["determined"]
    assert row["offset_mag"] == pytest.approx(by_mag, abs=0.03)
    assert abs(row["offset_mag"] - by_mag) < 3.0 * row["error_mag"]


@pytest.mark.parametrize("by_mag", [0.4, -0.4])
def test_a_large_offset_is_found_as_well_as_a_small_one(eight_at_peaks, by_mag):
    row = audit_with(eight_at_peaks, one_wrong(8, 3, by_mag))[3]
    assert row["determined"]
    assert row["offset_mag"] == pytest.approx(by_mag, abs=0.01)


def test_errors_are_honest_where_all_bands_are_as_wrong_as_quoted(eight_at_peaks):
    settings, model, block, points = eight_at_peaks
    quoted_mag = abs(MAG_PER_LN_FLUX) * np.array(
        [zero_point_error(band, model.passbands[band.label]) for band in settings.input.photometry]
    )
    rng = np.random.default_rng(2)
    pulls = []
    for trial in range(24):
        stars = np.arange(trial % 4, 4000, 4)
        true = quoted_mag * rng.normal(size=8)
        rows = audit_with((settings, model, block.take(stars), points[stars]), true)
        pulls.append([(row["offset_mag"] - was) / row["error_mag"] for row, was in zip(rows, true, strict=True)])
    assert 0.7 < np.sqrt(np.mean(np.square(pulls))) < 1.3


def test_four_bands_cannot_tell(tmp_path):
    settings, model, stars = survey(FOUR_BANDS, tmp_path, 200)
    rows = audit_with((settings, model, *peaks(stars, model, settings)), one_wrong(4, 1, -0.1))
    assert not any(row["determined"] for row in rows)


def test_a_wild_band_of_one_star_says_no_more_than_its_share(eight):
    settings, model, stars = eight
    block, points = peaks(stars.take(slice(0, 1)), model, settings)
    calm = equations_of(points, block, model)
    flux = block.scaled_flux.copy()
    flux[0, 2] *= 50.0
    wild = equations_of(points, block._replace(scaled_flux=flux), model)
    assert np.abs(wild.right - calm.right).max() < np.sqrt(calm.normal.max() * audit.FIXED_POINT) * audit.HUBER_SIGMA


def test_limits_and_bands_below_their_error_are_left_out(eight):
    settings, model, stars = eight
    one, points = peaks(stars.take(slice(0, 1)), model, settings)
    limit = one.limit.copy()
    limit[0, 1] = True
    error = one.inverse_error.copy()
    error[0, 4] *= 1e-9
    equations = equations_of(points, one._replace(limit=limit, inverse_error=error), model)
    np.testing.assert_array_equal(equations.stars, [1, 0, 1, 1, 0, 1, 1, 1])


def test_stars_with_too_few_measured_bands_are_not_in_the_sample(eight):
    settings, model, stars = eight
    block, points = peaks(stars.take(slice(0, 3)), model, settings)
    limit = block.limit.copy()
    limit[1, :4] = True
    assert len(sums_of(points, block._replace(limit=limit), model).key) == 2


def equations_of(points, block, model):
    equations = no_equations(len(model.passbands))
    add_equations(points, block, model.grid, model.prior, equations)
    return equations
