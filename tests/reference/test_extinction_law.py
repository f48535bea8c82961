"""Extinction ratios against the table of Cardelli, Clayton & Mathis (1989, ApJ 345, 245)."""

import numpy as np
import pytest

from starkiln.physics.extinction import extinction_ratio

# Table 3: filter, x = 1/lambda [1/um], A(lambda)/A_V at R_V = 3.1, and the coefficients of a + b/R_V.
# The ratios were found in public code; the coefficients are from memory, and give the ratios.
TABLE_3 = [
    ("U", 2.78, 1.569, 0.9530, 1.9090),
    ("B", 2.27, 1.337, 0.9982, 1.0495),
    ("V", 1.82, 1.000, 1.0000, 0.0000),
    ("R", 1.43, 0.751, 0.8686, -0.3660),
    ("I", 1.11, 0.479, 0.6800, -0.6239),
    ("J", 0.80, 0.282, 0.4008, -0.3679),
    ("H", 0.63, 0.190, 0.2693, -0.2473),
    ("K", 0.46, 0.114, 0.1615, -0.1483),
]


def tolerance(band):
    # The table lists the passband fits that the paper's polynomial was fitted to. The polynomial keeps to
    # them within 0.003, but for B: 1.337 is printed, though 1 + 1/R_V = 1.323 by definition of R_V.
    return 0.015 if band == "B" else 0.003


@pytest.mark.parametrize(("band", "per_um", "ratio", "a", "b"), TABLE_3)
def test_ccm89_gives_its_table(band, per_um, ratio, a, b):
    assert a + b / 3.1 == pytest.approx(ratio, abs=6e-4)
    assert extinction_ratio("CCM89", 3.1, 1.0 / per_um) == pytest.approx(ratio, abs=tolerance(band))


@pytest.mark.parametrize(("band", "per_um", "ratio", "a", "b"), TABLE_3)
@pytest.mark.parametrize("rv", [2.5, 4.0, 5.5])
def test_ccm89_depends_on_rv_as_printed(band, per_um, ratio, a, b, rv):
    found = extinction_ratio("CCM89", rv, 1.0 / per_um)
    assert found == pytest.approx(a + b / rv, abs=1.3 * tolerance(band))


def test_the_colour_excess_defines_rv():
    # R_V = A_V / (A_B - A_V), at the wavelengths of B and V in the table.
    for rv in (2.5, 3.1, 5.0):
        blue, visual = extinction_ratio("CCM89", rv, np.array([1 / 2.27, 1 / 1.82]))
        assert visual / (blue - visual) == pytest.approx(rv, rel=0.01)


@pytest.mark.parametrize("law", ["O94", "F99", "F19", "G23"])
def test_the_laws_agree_on_the_average_dust_of_the_galaxy(law):
    # Published averages of one Galaxy at R_V = 3.1: they differ by several per cent, not by tens.
    wavelength_um = np.array([0.365, 0.44, 0.64, 0.80, 1.25])
    expected = extinction_ratio("CCM89", 3.1, wavelength_um)
    np.testing.assert_allclose(extinction_ratio(law, 3.1, wavelength_um), expected, rtol=0.15)
