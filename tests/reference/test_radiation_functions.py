"""Blackbody radiation functions of a handbook, and Wien's displacement law."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from starkiln.physics.planck import fraction_below, ln_exitance_jy, wien_peak_nm

# Fraction of sigma T⁴ below lambda T [um K]: Incropera & DeWitt, Fundamentals of Heat and Mass Transfer, the
# table "Blackbody radiation functions" (12.1 in several editions); from memory, then found the same in
# public code. Three entries that are plainly misprints there (0.658970 at 5200, 0.939959 at 11 500, 0.969981
# at 15 000: off by 1e-3, against their neighbours too) are left out.
HANDBOOK = """
    600 0.000000   800 0.000016  1000 0.000321  1200 0.002134  1400 0.007790  1600 0.019718  1800 0.039341
    2000 0.066728  2200 0.100888  2400 0.140256  2600 0.183120  2800 0.227897  3000 0.273232  3200 0.318102
    3400 0.361735  3600 0.403607  3800 0.443382  4000 0.480877  4200 0.516014  4400 0.548796  4600 0.579280
    4800 0.607559  5000 0.633747  5400 0.680360  5600 0.701046  5800 0.720158  6000 0.737818  6200 0.754140
    6400 0.769234  6600 0.783199  6800 0.796129  7000 0.808109  7200 0.819217  7400 0.829527  7600 0.839102
    7800 0.848005  8000 0.856288  8500 0.874608  9000 0.890029  9500 0.903085 10000 0.914199 10500 0.923710
    11000 0.931890 12000 0.945098 13000 0.955139 14000 0.962898 16000 0.973814 18000 0.980860 20000 0.985602
    25000 0.992215 30000 0.995340 40000 0.997967 50000 0.998953 75000 0.999713 100000 0.999905
"""


def test_fraction_below_agrees_with_the_handbook():
    numbers = np.array(HANDBOOK.split(), dtype=float).reshape(-1, 2)
    # The handbook's constants make its total 1.00005: the exact series gives 0.999855 at 100 000 um K.
    np.testing.assert_allclose(fraction_below(numbers[:, 0]), numbers[:, 1], rtol=6e-5, atol=5e-7)


def test_a_quarter_of_the_light_is_below_the_peak():
    # 25.0 per cent below Wien's peak, at any temperature: textbook statement, no single source.
    lambda_t_um_k = wien_peak_nm(5000.0) * 1e-3 * 5000.0
    assert fraction_below(lambda_t_um_k) == pytest.approx(0.2501, abs=1e-4)


def test_wien_constant_is_that_of_codata():
    # CODATA 2018: 2.897 771 955e-3 m K.
    assert wien_peak_nm(1.0) == pytest.approx(2.897771955e6, rel=1e-9)


@given(teff_k=st.floats(1500.0, 60_000.0))
def test_wien_rule_of_thumb(teff_k):
    # "2.9 million over T": common practice, no source.
    assert wien_peak_nm(teff_k) == pytest.approx(2.9e6 / teff_k, rel=1e-3)


@given(
    wavelength_um=st.floats(0.1, 30.0), teff_k=st.floats(1500.0, 60_000.0), difference_k=st.floats(1.0, 1e4)
)
def test_a_hotter_blackbody_is_brighter_at_every_wavelength(wavelength_um, teff_k, difference_k):
    assert ln_exitance_jy(wavelength_um, teff_k + difference_k) > ln_exitance_jy(wavelength_um, teff_k)
