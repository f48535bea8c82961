"""The blackbody functions against other implementations, quadrature and properties."""

import numpy as np
import pytest
from astropy import units as u
from astropy.modeling.physical_models import BlackBody
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.optimize import minimize_scalar

from starkiln.physics.constants import LIGHT_SPEED_M_PER_S, STEFAN_BOLTZMANN_W_PER_M2_K4
from starkiln.physics.planck import (
    bolometric_exitance,
    exitance_jy,
    fraction_below,
    ln_exitance_jy,
    planck_nu,
    wien_peak_nm,
)

TEMPERATURES_K = (1500.0, 3000.0, 5772.0, 10_000.0, 60_000.0)


@pytest.mark.parametrize("teff_k", TEMPERATURES_K)
def test_planck_agrees_with_astropy(teff_k):
    wavelength_um = np.geomspace(0.1, 30.0, 200)
    nu_hz = LIGHT_SPEED_M_PER_S / (wavelength_um * 1e-6)
    intensity = BlackBody(temperature=teff_k * u.K)(nu_hz * u.Hz)
    expected = intensity.to_value(u.W / u.m**2 / u.Hz / u.sr)
    np.testing.assert_allclose(planck_nu(nu_hz, teff_k), expected, rtol=1e-10)


def test_exitance_is_pi_times_the_intensity_in_jansky():
    nu_hz = LIGHT_SPEED_M_PER_S / 0.55e-6
    expected_jy = np.pi * planck_nu(nu_hz, 5772.0) / 1e-26
    np.testing.assert_allclose(exitance_jy(0.55, 5772.0), expected_jy, rtol=1e-13)


def test_exitance_broadcasts_and_keeps_scalars():
    assert exitance_jy(np.ones(3), np.full((2, 1), 5000.0)).shape == (2, 3)
    assert np.ndim(exitance_jy(1.0, 5000.0)) == 0


@pytest.mark.parametrize("teff_k", TEMPERATURES_K)
def test_spectrum_integrates_to_stefan_boltzmann(teff_k):
    def per_ln_nu(ln_nu):
        return np.pi * planck_nu(np.exp(ln_nu), teff_k) * np.exp(ln_nu)

    peak = np.log(5.88e10 * teff_k)  # nu of the peak, in Hz: only splits the interval
    total = quad(per_ln_nu, peak - 15.0, peak)[0] + quad(per_ln_nu, peak, peak + 5.0)[0]
    assert total == pytest.approx(float(bolometric_exitance(teff_k)), rel=1e-8)


def test_bolometric_exitance_is_sigma_t4():
    assert bolometric_exitance(1000.0) == pytest.approx(STEFAN_BOLTZMANN_W_PER_M2_K4 * 1e12)


def test_logarithm_stays_finite_deep_in_the_wien_tail():
    ln_jy = ln_exitance_jy(0.0912, 100.0)
    assert -1700.0 < ln_jy < -1400.0
    assert exitance_jy(0.0912, 100.0) == 0.0


def test_rayleigh_jeans_limit():
    # B_nu -> 2 nu² k T / c² where h nu << k T, so twice the temperature gives twice the flux.
    assert exitance_jy(1e6, 2000.0) / exitance_jy(1e6, 1000.0) == pytest.approx(2.0, rel=1e-5)


@given(lambda_t=st.floats(200.0, 1e6))
def test_fraction_below_agrees_with_quadrature(lambda_t):
    x_end = 14_387.768775 / lambda_t  # hc/k in um K, CODATA 2018
    above = quad(lambda x: x**3 / np.expm1(x), x_end, x_end + 60.0, epsabs=1e-12)[0]
    assert fraction_below(lambda_t) == pytest.approx(15.0 / np.pi**4 * above, abs=1e-9)


def test_fraction_below_joins_its_two_series():
    lambda_t = 14_387.768775 * np.array([1 - 1e-9, 1 + 1e-9])
    low, high = fraction_below(lambda_t)
    assert abs(high - low) < 1e-9
    assert fraction_below(1e9) == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize("teff_k", TEMPERATURES_K)
def test_wien_peak_is_where_the_spectrum_per_wavelength_peaks(teff_k):
    def fainter(ln_um):
        return -(ln_exitance_jy(np.exp(ln_um), teff_k) - 2.0 * ln_um)  # B_lambda = B_nu c / λ²

    found = minimize_scalar(fainter, bracket=(-4.0, 3.0), tol=1e-12)
    assert np.exp(found.x) * 1000.0 == pytest.approx(float(wien_peak_nm(teff_k)), rel=1e-6)
