"""The chain of stages: the same bits for a star wherever it stands, and what odd stars come out as."""

from dataclasses import replace

import numpy as np
import pyarrow as pa
import pytest

from simulated import make_settings, simulate
from starkiln.flags import BY_NAME
from starkiln.inference import ensemble
from starkiln.stages import fit as fit_stage
from starkiln.stages.model import build_model
from starkiln.stages.process import process_part


@pytest.fixture(scope="module")
def settings():
    return make_settings(
        model={"temperature_k": [2500.0, 20000.0], "distance": {"length_scale_pc": 300.0}},
        sampling={"effective_samples": 300, "keep_draws": 20},
    )


@pytest.fixture(scope="module")
def model(settings):
    return build_model(settings)


@pytest.fixture(scope="module")
def table(settings, model):
    return as_table(simulate(settings, model, 70, seed=6, noise=(0.005, 0.1), shallow=0.2)[0], model)


def as_table(stars, model):
    n = len(stars)
    columns = {"id": pa.array([int(star_id) for star_id in stars.ids], pa.int64())}
    for place, label in enumerate(model.passbands):
        columns[f"flux_{label}"] = stars.flux_jy[:, place]
        columns[f"error_{label}"] = stars.error_jy[:, place]
        columns[f"limit_{label}"] = stars.limit[:, place]
    columns |= {"parallax": stars.parallax_mas, "parallax_error": stars.parallax_error_mas}
    columns |= {"_input_file": ["stars.parquet"] * n, "_input_row": np.arange(n), "_duplicate": np.zeros(n, np.int8)}
    return pa.table(columns)


@pytest.fixture(scope="module")
def whole(table, settings, model):
    return process_part(table, settings, model)


def test_a_star_alone_first_or_last_has_the_same_bits(table, whole, settings, model):
    for row in (0, 33, 69):
        alone = process_part(table.slice(row, 1), settings, model)
        assert alone.catalogue.equals(whole.catalogue.slice(row, 1))
        assert alone.draws.equals(whole.draws.slice(row, 1))
    backwards = process_part(table.take(np.arange(69, -1, -1)), settings, model)
    assert backwards.catalogue.take(np.arange(69, -1, -1)).equals(whole.catalogue)


def test_stars_that_take_long_go_on_together_with_the_same_bits(table, whole, settings, model, monkeypatch):
    late = np.flatnonzero(whole.catalogue["n_steps"].to_numpy() > ensemble.PATIENCE)
    assert len(late) > 2
    for row in late[:4]:
        assert process_part(table.slice(row, 1), settings, model).catalogue.equals(whole.catalogue.slice(row, 1))
    # Blocks of three: those that are late come from many, and some of these have none.
    monkeypatch.setattr(fit_stage, "block_stars", lambda settings: 3)
    assert len(np.unique(late // 3)) > 2
    some = table.take(late)
    together = process_part(some, settings, model)
    assert together.catalogue.equals(whole.catalogue.take(late))
    assert together.draws.equals(whole.draws.take(late))
    assert process_part(table, settings, model).draws.equals(whole.draws)


def test_size_of_blocks_and_memory_change_no_bit(table, whole, settings, model, monkeypatch):
    monkeypatch.setattr(fit_stage, "block_stars", lambda settings: 9)
    assert process_part(table, settings, model).catalogue.equals(whole.catalogue)
    monkeypatch.undo()
    monkeypatch.setattr(ensemble, "chain_bytes", lambda *args: 10**9)  # every block is split to single stars
    assert process_part(table, settings, model).catalogue.equals(whole.catalogue)


def test_another_seed_gives_other_draws_of_the_same_posterior(table, whole, settings, model):
    other = replace_seed(settings, 99)
    again = process_part(table, other, model).catalogue
    sigma = 0.5 * (whole.catalogue["teff_hi68"].to_numpy() - whole.catalogue["teff_lo68"].to_numpy())
    offset = (again["teff_p50"].to_numpy() - whole.catalogue["teff_p50"].to_numpy()) / sigma
    seen = np.isfinite(offset)
    assert seen.sum() > 50
    assert (offset[seen] != 0.0).all()
    assert np.sqrt(np.mean(offset[seen] ** 2)) < 0.2


def replace_seed(settings, seed):
    return settings.model_copy(update={"run": settings.run.model_copy(update={"seed": seed})})


def test_quantiles_are_in_order_and_diagnostics_are_sound(whole):
    catalogue = whole.catalogue
    for name in ("teff", "radius", "lum", "dist", "av", "ang_diam", "fbol"):
        quantiles = np.array([catalogue[f"{name}_{q}"].to_numpy() for q in ("lo95", "lo68", "p50", "hi68", "hi95")])
        seen = np.isfinite(quantiles[2])
        assert (np.diff(quantiles[:, seen], axis=0) >= 0.0).all()
    converged = (catalogue["flags"].to_numpy() & BY_NAME["not_converged"].value) == 0
    assert converged.mean() > 0.9
    detected = (catalogue["flags"].to_numpy() & BY_NAME["no_detection"].value) == 0
    assert (catalogue["ess_bulk"].to_numpy()[converged & detected] >= 300.0).all()
    assert (catalogue["ess_bulk"].to_numpy()[converged] >= 30.0).all()
    assert catalogue["row_hash"].null_count == 0


def test_stefan_boltzmann_holds_between_the_medians_of_sharp_posteriors(settings, model):
    sharp, _ = simulate(settings, model, 20, seed=2, noise=(1e-4, 2e-4), parallax_error_mas=(1e-4, 2e-4))
    columns = process_part(as_table(sharp, model), settings, model).catalogue
    teff, radius, lum = (columns[f"{name}_p50"].to_numpy() for name in ("teff", "radius", "lum"))
    np.testing.assert_allclose(lum, radius**2 * (teff / 5772.0) ** 4, rtol=0.02)
    np.testing.assert_allclose(columns["lambda_peak_p50"].to_numpy(), 2.8977719e6 / teff, rtol=1e-5)


def odd_star(table, **values):
    """Return the first star with some of its columns replaced."""
    one = table.slice(0, 1)
    for name, value in values.items():
        one = one.set_column(one.column_names.index(name), name, pa.array([value], one[name].type))
    return one


def flagged(part, name):
    return bool(part.catalogue["flags"][0].as_py() & BY_NAME[name].value)


def test_without_a_parallax_only_what_needs_a_distance_is_null(table, settings, model):
    part = process_part(odd_star(table, parallax=None), settings, model)
    row = part.catalogue.to_pylist()[0]
    assert flagged(part, "no_parallax")
    assert row["dist_p50"] is None
    assert row["radius_p50"] is None
    assert row["lum_p50"] is None
    assert row["mbol_p50"] is None
    assert row["teff_p50"] > 0.0
    assert row["ang_diam_p50"] > 0.0


def test_a_negative_parallax_is_used_and_flagged(table, settings, model):
    part = process_part(odd_star(table, parallax=-1.0, parallax_error=0.3), settings, model)
    assert flagged(part, "negative_parallax")
    assert flagged(part, "poor_parallax")
    assert part.catalogue["radius_p50"][0].as_py() > 0.0


def test_noise_alone_is_kept_flagged_and_null(table, settings, model):
    noise = {f"flux_{label}": (-1.0) ** k * 1e-9 for k, label in enumerate(model.passbands)}
    errors = {f"error_{label}": 1e-6 for label in model.passbands}
    limits = {f"limit_{label}": False for label in model.passbands}
    part = process_part(odd_star(table, **noise, **errors, **limits), settings, model)
    assert flagged(part, "no_detection")
    row = part.catalogue.to_pylist()[0]
    assert row["teff_p50"] is None
    assert row["radius_p50"] is None
    assert row["lum_p50"] is None


def test_an_infrared_excess_is_seen_as_such(settings, model):
    stars, _ = simulate(settings, model, 30, seed=8, noise=(0.002, 0.01))
    bright = int(np.argmax(stars.flux_jy[:, 0] / stars.error_jy[:, 0]))
    stars.flux_jy[bright, -1] *= 3.0
    one = stars.at(np.array([bright]))
    part = process_part(as_table(replace(one, limit=np.zeros_like(one.limit)), model), settings, model)
    assert flagged(part, "infrared_excess")
    assert flagged(part, "band_outlier")
    assert part.catalogue["outlier_wise_w2"][0].as_py() > 0.9


def test_an_empty_table_gives_empty_tables_of_the_same_schema(table, whole, settings, model):
    part = process_part(table.slice(0, 0), settings, model)
    assert part.catalogue.num_rows == 0
    assert part.catalogue.schema.equals(whole.catalogue.schema)
    assert part.draws.schema.equals(whole.draws.schema)


def test_garbage_harms_its_own_row_alone(table, whole, settings, model):
    bad = odd_star(table, flux_2mass_j=1.7e308, error_2mass_j=5e-324, parallax=1e300, parallax_error=1e-300)
    part = process_part(pa.concat_tables([bad, table.slice(1, 5)]), settings, model)
    assert part.catalogue.num_rows + part.rejected.num_rows == 6
    assert part.catalogue.slice(part.catalogue.num_rows - 5).equals(whole.catalogue.slice(1, 5))


def test_an_upper_limit_is_no_excess(settings, model):
    stars, _ = simulate(settings, model, 30, seed=8, noise=(0.002, 0.01))
    bright = int(np.argmax(stars.flux_jy[:, 0] / stars.error_jy[:, 0]))
    one = stars.at(np.array([bright]))
    one.limit[:] = np.arange(len(model.passbands)) == len(model.passbands) - 1
    one.flux_jy[0, -1] *= 10.0
    part = process_part(as_table(one, model), settings, model)
    assert not flagged(part, "infrared_excess")
    assert part.catalogue["residual_wise_w2"][0].as_py() is None


def test_limits_alone_are_quick_to_come_to_nothing(table, settings, model):
    limits = {f"limit_{label}": True for label in model.passbands}
    part = process_part(odd_star(table, **limits), settings, model)
    assert flagged(part, "no_detection")
    assert not flagged(part, "not_converged")
    assert part.draws["teff"][0].as_py() is None


def test_a_distance_piled_on_its_bound_is_flagged(table):
    near = make_settings(model={"distance": {"length_scale_pc": 300.0, "bounds_pc": [0.1, 20.0]}})
    part = process_part(odd_star(table, parallax=1.0, parallax_error=0.1), near, build_model(near))
    assert flagged(part, "distance_at_bound")
