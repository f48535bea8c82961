"""What settings make of the model: errors of zero points that are left to the fit, and departures that are refused."""

import numpy as np
import pytest

from simulated import make_settings
from starkiln.physics.departures import DepartureMismatch
from starkiln.physics.passbands import load_passband
from starkiln.settings import Settings
from starkiln.stages.model import build_model

BANDS = ("gaia_dr3_g", "johnson_v", "2mass_ks")
QUOTED = np.array([load_passband(band).zero_point_error for band in BANDS])


def settings_of(photosphere: str, **first_band: object) -> Settings:
    settings = make_settings(BANDS, floor=0.01, model={"photosphere": photosphere})
    first, *others = settings.input.photometry
    photometry = [first.model_copy(update=first_band), *others]
    return settings.model_copy(update={"input": settings.input.model_copy(update={"photometry": photometry})})


def test_a_blackbody_has_floor_and_zero_point_error():
    np.testing.assert_allclose(build_model(settings_of("blackbody")).floor, np.hypot(0.01, QUOTED))


def test_departures_have_the_error_of_the_zero_point_in_them():
    model = build_model(settings_of("auto"))
    np.testing.assert_allclose(model.floor, 0.01)
    np.testing.assert_allclose(model.rival.floor, np.hypot(0.01, QUOTED))


def test_an_error_of_ones_own_is_kept():
    model = build_model(settings_of("calibrated", zero_point_error=0.05))
    np.testing.assert_allclose(model.floor, [np.hypot(0.01, 0.05), 0.01, 0.01])


def test_departures_learnt_with_another_zero_point_are_refused():
    flux = {"unit": "mag", "system": "Vega"}
    known = load_passband(BANDS[0]).zero_point_jy
    assert build_model(settings_of("calibrated", zero_point_jy=known, **flux)).departures is not None
    with pytest.raises(DepartureMismatch, match="gaia_dr3_g"):
        build_model(settings_of("calibrated", zero_point_jy=1.01 * known, **flux))
