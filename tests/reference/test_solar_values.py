"""The IAU nominal solar values through the Stefan-Boltzmann law."""

import math

import pytest

from starkiln.physics.constants import (
    LSUN_W,
    LUMINOSITY_MBOL_ZERO_W,
    PARSEC_M,
    RSUN_M,
    TSUN_K,
)
from starkiln.physics.planck import bolometric_exitance, wien_peak_nm

ASTRONOMICAL_UNIT_M = 149_597_870_700.0  # IAU 2012 resolution B2, exact


def test_nominal_values_are_those_of_the_resolutions():
    # IAU 2015 resolutions B2 and B3.
    assert (RSUN_M, LSUN_W, TSUN_K, LUMINOSITY_MBOL_ZERO_W) == (6.957e8, 3.828e26, 5772.0, 3.0128e28)


def test_the_sun_obeys_stefan_boltzmann():
    luminosity_w = 4.0 * math.pi * RSUN_M**2 * float(bolometric_exitance(TSUN_K))
    assert luminosity_w == pytest.approx(LSUN_W, rel=1e-4)  # four digits are printed


def test_solar_constant():
    # IAU 2015 resolution B3: 1361 W m-2 at one astronomical unit.
    received = float(bolometric_exitance(TSUN_K)) * (RSUN_M / ASTRONOMICAL_UNIT_M) ** 2
    assert received == pytest.approx(1361.0, abs=0.5)


def test_solar_bolometric_magnitude():
    # IAU 2015 resolution B2: 4.74, from the zero point that it defines.
    assert -2.5 * math.log10(LSUN_W / LUMINOSITY_MBOL_ZERO_W) == pytest.approx(4.74, abs=5e-4)


def test_apparent_bolometric_zero_point():
    # IAU 2015 resolution B2: m_bol = 0 at 2.518 021 002e-8 W m-2, that is L_0 at 10 pc.
    received = LUMINOSITY_MBOL_ZERO_W / (4.0 * math.pi * (10.0 * PARSEC_M) ** 2)
    assert received == pytest.approx(2.518021002e-8, rel=1e-9)


def test_the_sun_peaks_in_the_green():
    assert wien_peak_nm(TSUN_K) == pytest.approx(502.0, abs=0.1)  # 2.897772e6 / 5772
