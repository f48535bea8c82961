"""The scatter of stars about the scale of the departures, which no band can show."""

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from simulated import make_settings, simulate
from starkiln.stages.derive import scattered
from starkiln.stages.model import build_model

BANDS = ("gaia_dr3_g", "2mass_j", "2mass_ks")
TAU, GAMMA = 0.02, 0.03


@pytest.fixture(scope="module")
def made():
    settings = make_settings(BANDS, model={"temperature_k": [3000.0, 9000.0]})
    model = build_model(settings)
    model = replace(model, off_scale=np.tile([[TAU], [GAMMA]], model.table.n_teff))
    stars, _ = simulate(settings, model, 3, 1)
    chain = np.empty((3, 3, 20_001))  # odd: normal draws come in pairs
    chain[:, 0], chain[:, 1], chain[:, 2] = np.log(5000.0), -44.0, 0.1
    return stars, SimpleNamespace(chain=chain), model, settings


def test_temperatures_scatter_by_tau_and_bolometric_fluxes_by_gamma(made):
    stars, draws, model, settings = made
    ln_teff, ln_omega = scattered(stars, draws, model, settings)
    assert np.mean(ln_teff, axis=1) == pytest.approx(np.log(5000.0), abs=5.0 * TAU / np.sqrt(20_000))
    assert np.std(ln_teff, axis=1) == pytest.approx(TAU, rel=0.03)
    ln_fbol = ln_omega + 4.0 * ln_teff
    assert np.mean(ln_fbol, axis=1) == pytest.approx(-44.0 + 4.0 * np.log(5000.0), abs=5.0 * GAMMA / np.sqrt(20_000))
    assert np.std(ln_fbol, axis=1) == pytest.approx(GAMMA, rel=0.03)
    assert abs(np.corrcoef(ln_fbol[0], ln_teff[0])[0, 1]) < 0.04


def test_a_giant_scatters_more(made):
    stars, draws, model, settings = made
    ln_teff, _ = scattered(stars, draws, model, settings, np.array([1.0, 2.0, 1.0]))
    assert np.std(ln_teff, axis=1) == pytest.approx([TAU, 2.0 * TAU, TAU], rel=0.03)


def test_stars_scatter_alike_in_any_company_and_unlike_each_other(made):
    stars, draws, model, settings = made
    whole, _ = scattered(stars, draws, model, settings)
    alone, _ = scattered(stars.take(slice(1, 2)), SimpleNamespace(chain=draws.chain[1:2]), model, settings)
    np.testing.assert_array_equal(alone[0], whole[1])
    assert abs(np.corrcoef(whole[0], whole[1])[0, 1]) < 0.05


def test_temperatures_stay_within_their_bounds(made):
    stars, draws, model, settings = made
    hot = SimpleNamespace(chain=draws.chain.copy())
    hot.chain[:, 0] = np.log(8990.0)
    ln_teff, _ = scattered(stars, hot, model, settings)
    assert ln_teff.max() == pytest.approx(np.log(9000.0), abs=1e-12)


def test_without_scatter_nothing_moves(made):
    stars, draws, model, settings = made
    still = replace(model, off_scale=np.zeros((2, model.table.n_teff)))
    ln_teff, ln_omega = scattered(stars, draws, still, settings)
    np.testing.assert_array_equal(ln_teff, draws.chain[:, 0])
    np.testing.assert_array_equal(ln_omega, draws.chain[:, 1])
