"""The evidence from the sampler's own proposal against the integral over a grid."""

import numpy as np
import pytest

from plain_posterior import log_evidence as log_evidence_by_grid
from simulated import invented_departures, make_settings, simulate
from starkiln.inference.arithmetic import HALF_LN_2PI
from starkiln.inference.evidence import importance_draws, log_mean_exp
from starkiln.inference.posterior import LN_HEAT_K
from starkiln.inference.start import find_modes
from starkiln.inference.streams import star_streams
from starkiln.physics.departures import write_departures
from starkiln.stages.fit import fit, pack_block
from starkiln.stages.model import build_model

BANDS = ("gaia_dr3_bp", "gaia_dr3_rp", "panstarrs_g", "panstarrs_y", "2mass_j", "2mass_ks")


@pytest.mark.parametrize("photosphere", ["blackbody", "calibrated"])
@pytest.mark.parametrize("dust", ["half-normal", "fixed"])
def test_evidence_is_the_integral_of_the_posterior(photosphere, dust, tmp_path):
    write_departures(invented_departures(BANDS), tmp_path / "invented.ecsv")
    settings = make_settings(
        BANDS,
        model={
            "photosphere": photosphere,
            "departures": str(tmp_path / "invented.ecsv"),
            "temperature_k": [2500.0, 20000.0],
            "radius_rsun": [0.1, 2.0],
            "distance": {"length_scale_pc": 300.0},
            "extinction": {"prior": dust},
        },
    )
    model = build_model(settings)
    stars, _ = simulate(settings, model, 30, seed=3, noise=(0.003, 0.02))
    seen = np.flatnonzero((stars.flux_jy > 8.0 * stars.error_jy).all(axis=1))[:6]
    assert len(seen) == 6
    stars = stars.at(seen)
    block = pack_block(stars, model, settings)
    streams = star_streams(stars.ids, 1, b"evidence")
    modes = find_modes(block, model.grid, model.prior)
    draws = importance_draws(block, model.grid, model.prior, streams, 32, modes, n_draws=4096)
    # What the kernel leaves out is the same for every model: the unit of heat, and the density of A_V at zero.
    found = log_mean_exp(draws.log_weight) - LN_HEAT_K
    if dust == "half-normal":
        found -= np.log(stars.av_scale) + HALF_LN_2PI
    for fitted in fit(stars, model, settings):
        for place, star in enumerate(fitted.draws.stars):
            exact = log_evidence_by_grid(stars, star, model, settings, fitted.draws.chain[place])
            assert found[star] == pytest.approx(exact, abs=0.04)


def test_log_mean_exp_of_large_numbers():
    values = np.array([[1000.0, 1000.0 + np.log(3.0)], [-np.inf, -np.inf], [-2000.0, -np.inf]])
    np.testing.assert_allclose(log_mean_exp(values), [1000.0 + np.log(2.0), -np.inf, -2000.0 - np.log(2.0)])
