"""The Sun from its published magnitudes: even as a blackbody it comes out within a few per cent.

Apparent AB magnitudes of the Sun at one astronomical unit, Willmer (2018, ApJS 236, 47, table 3), as copied in public
code; his error is 0.03 to 0.04 mag. The IAU 2015 B3 nominal values are T 5772 K, R 1, L 1.
"""

import numpy as np
import pandas as pd
import pytest

import starkiln

AB_MAG = {
    "johnson_b": -26.26,
    "johnson_v": -26.77,
    "cousins_r": -26.97,
    "cousins_i": -27.06,
    "sdss_g": -26.47,
    "sdss_r": -26.93,
    "sdss_i": -27.05,
    "sdss_z": -27.07,
    "panstarrs_g": -26.54,
    "panstarrs_r": -26.93,
    "panstarrs_i": -27.05,
    "panstarrs_z": -27.07,
    "panstarrs_y": -27.07,
    "2mass_j": -27.03,
    "2mass_h": -26.91,
    "2mass_ks": -26.49,
}
TO_TEN_PARSEC = 5.0 * np.log10(10.0 * 648000.0 / np.pi)


@pytest.fixture(scope="module")
def sun():
    row = {"id": "sun", "parallax": 100.0, "parallax_error": 0.001}
    bands = []
    for band, mag in AB_MAG.items():
        row |= {band: mag + TO_TEN_PARSEC, f"{band}_error": 0.04}
        bands.append({"passband": band, "value": band, "error": f"{band}_error", "unit": "mag", "system": "AB"})
    settings = {
        "run": {"name": "sun", "output": "/nowhere"},
        "input": {
            "tables": "/nowhere/sun.parquet",
            "id": "id",
            "parallax": {"value": "parallax", "error": "parallax_error", "unit": "mas"},
            "photometry": bands,
        },
        "model": {"photosphere": "blackbody", "extinction": {"prior": "fixed"}},
    }
    return starkiln.fit_table(pd.DataFrame([row]), settings).iloc[0]


def test_temperature_radius_and_luminosity(sun):
    # A pure blackbody is within 4 % in T for F and G stars; R goes as T to about -2.
    assert sun["teff_p50"] == pytest.approx(5772.0, rel=0.04)
    assert sun["radius_p50"] == pytest.approx(1.0, rel=0.08)
    assert sun["lum_p50"] == pytest.approx(1.0, rel=0.08)


def test_absolute_bolometric_magnitude(sun):
    # IAU 2015 resolution B2: the nominal solar luminosity is M_bol = 4.74.
    assert sun["mbol_p50"] == pytest.approx(4.74, abs=0.09)
    assert sun["mbol_p50"] == pytest.approx(4.74 - 2.5 * np.log10(sun["lum_p50"]), abs=1e-3)
