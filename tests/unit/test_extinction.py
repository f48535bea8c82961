"""Extinction laws: values, what happens outside their wavelengths, and errors."""

import numpy as np
import pytest
from astropy import units as u
from dust_extinction import parameter_averages

from starkiln.errors import SettingsError
from starkiln.physics.extinction import extinction_ratio, law_names, law_range_um, law_source

ALL_BANDS_UM = np.geomspace(0.13, 28.0, 500)


@pytest.mark.parametrize("law", law_names())
def test_inside_its_range_a_law_is_the_published_one(law):
    low_um, high_um = law_range_um(law)
    wavelength_um = np.geomspace(low_um * 1.001, high_um * 0.999, 50)
    expected = getattr(parameter_averages, law)(Rv=3.1)(wavelength_um * u.um)
    np.testing.assert_array_equal(extinction_ratio(law, 3.1, wavelength_um), expected)


@pytest.mark.parametrize("law", law_names())
@pytest.mark.parametrize("rv", [2.5, 3.1, 5.0])
def test_a_law_is_one_at_v_and_falls_towards_the_infrared(law, rv):
    # Only near one: "V" is a band, and the spline of F99 passes 0.972 at 0.55 um for R_V = 2.5.
    assert extinction_ratio(law, rv, 0.55) == pytest.approx(1.0, abs=0.03)
    infrared = extinction_ratio(law, rv, np.geomspace(0.8, 4.0, 100))
    assert np.all(np.diff(infrared) < 0.0)


@pytest.mark.parametrize("law", law_names())
def test_every_law_reaches_every_band(law):
    ratio = extinction_ratio(law, 3.1, ALL_BANDS_UM)
    assert np.all((ratio > 0.0) & (ratio < 8.0))


@pytest.mark.parametrize("law", [law for law in law_names() if law != "G23"])
def test_outside_its_range_a_law_joins_and_follows_g23(law):
    low_um, high_um = law_range_um(law)
    for end_um, beyond_um in ((low_um, 0.8 * low_um), (high_um, 2.0 * high_um)):
        joint = extinction_ratio(law, 3.1, end_um)
        beside = extinction_ratio(law, 3.1, [end_um * (1 - 1e-6), end_um * (1 + 1e-6)])
        np.testing.assert_allclose(beside, joint, rtol=1e-4)
        if beyond_um < 0.0912:
            continue
        g23 = extinction_ratio("G23", 3.1, [end_um, beyond_um])
        expected = joint * g23[1] / g23[0]
        assert extinction_ratio(law, 3.1, beyond_um) == pytest.approx(float(expected), rel=1e-9)


def test_outside_the_range_of_g23_the_end_is_held():
    edge = extinction_ratio("G23", 3.1, [0.0912, 32.0])
    np.testing.assert_allclose(extinction_ratio("G23", 3.1, [0.05, 100.0]), edge, rtol=1e-9)


def test_an_rv_that_g23_does_not_reach_still_continues_another_law():
    assert 0.0 < extinction_ratio("CCM89", 6.0, 12.0) < 0.1


def test_shape_is_kept():
    assert extinction_ratio("G23", 3.1, np.ones((2, 3))).shape == (2, 3)
    assert extinction_ratio("G23", 3.1, 1.0).shape == ()


def test_unknown_law_names_the_nearest():
    with pytest.raises(SettingsError, match=r"model\.extinction\.law = 'G32'.*did you mean 'G23'"):
        extinction_ratio("G32", 3.1, 0.55)


def test_rv_outside_the_published_range_is_refused():
    with pytest.raises(SettingsError, match=r"model\.extinction\.rv = 1\.5: G23 .* from 2\.3 to 5\.6"):
        extinction_ratio("G23", 1.5, 0.55)


def test_every_law_has_a_source():
    assert all("," in law_source(law) for law in law_names())
