"""AB magnitudes of blackbodies in every built-in band against synphot."""

import importlib.resources
import warnings

import numpy as np
import pytest
from astropy import units as u
from astropy.table import Table

from starkiln.physics.bandtable import build_band_table, ln_flux
from starkiln.physics.builtin_bands import BUILTIN_BANDS
from starkiln.physics.passbands import load_passband

with warnings.catch_warnings():
    warnings.simplefilter("ignore")  # what the reference package warns of on import is its own affair
    synphot = pytest.importorskip("synphot")
    from synphot.models import BlackBody1D, Empirical1D

TEMPERATURES_K = (1500.0, 3000.0, 5772.0, 10_000.0, 30_000.0, 60_000.0)
BANDS = {band.name: band for band in BUILTIN_BANDS}


def synphot_ab_mag(band, teff_k):
    """Return the AB magnitude, per steradian, of a blackbody in a curve read from its file."""
    file = importlib.resources.files("speclite") / "data" / "filters" / f"{band.curve}.ecsv"
    curve = Table.read(str(file), format="ascii.ecsv")
    wavelength = np.asarray(curve["wavelength"]) * u.Unit(curve["wavelength"].unit)
    response = np.asarray(curve["response"], dtype=float)
    nonzero = np.flatnonzero(response > 0.0)
    stretch = slice(max(nonzero[0] - 1, 0), nonzero[-1] + 2)
    wavelength_a, response = wavelength.to_value(u.AA)[stretch], response[stretch]
    for zero_um in band.zeros_um:
        place = np.searchsorted(wavelength_a, zero_um * 1e4)
        wavelength_a, response = (
            np.insert(wavelength_a, place, zero_um * 1e4),
            np.insert(response, place, 0.0),
        )
    fine_a = np.union1d(np.geomspace(wavelength_a[0], wavelength_a[-1], 8_000), wavelength_a)
    fine = np.interp(fine_a, wavelength_a, response)
    if band.detector == "energy":
        fine = fine / fine_a  # synphot counts photons
    bandpass = synphot.SpectralElement(Empirical1D, points=fine_a * u.AA, lookup_table=fine)
    # The model's own wavelengths leave out its faint ends, so it is sampled over the band first.
    model = synphot.SourceSpectrum(BlackBody1D, temperature=teff_k * u.K)
    source = synphot.SourceSpectrum(Empirical1D, points=fine_a * u.AA, lookup_table=model(fine_a * u.AA))
    observation = synphot.Observation(source, bandpass, binset=fine_a * u.AA)
    return observation.effstim("abmag", wavelengths=fine_a * u.AA).value


@pytest.mark.parametrize("name", BANDS)
def test_blackbody_magnitudes_agree_with_synphot(name):
    table = build_band_table([load_passband(name)], 1500.0, 60_000.0, 1.0, "G23", 3.1)
    for teff_k in TEMPERATURES_K:
        ln_jy = ln_flux(table, teff_k, 0.0)[0, 0]
        mag = -2.5 / np.log(10.0) * (ln_jy - np.log(np.pi * 3631.0))
        assert mag == pytest.approx(synphot_ab_mag(BANDS[name], teff_k), abs=1e-3), teff_k
