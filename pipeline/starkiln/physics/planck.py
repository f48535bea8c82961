"""The blackbody: spectrum, total, fraction below a wavelength, peak."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from starkiln.physics.constants import (
    JANSKY_SI,
    LIGHT_SPEED_M_PER_S,
    PLANCK_J_S,
    SECOND_RADIATION_M_K,
    STEFAN_BOLTZMANN_W_PER_M2_K4,
    WIEN_M_K,
)

FloatArray = NDArray[np.float64]

# 2h/c² in W m-2 Hz-1 sr-1 per Hz³, written with the wavelength: B_nu = 2hc/λ³ / (e^x - 1), x = hc/(λkT).
_TWO_HC_SI = 2.0 * PLANCK_J_S * LIGHT_SPEED_M_PER_S
_SERIES_TERMS = np.arange(1.0, 101.0)


def planck_nu(nu_hz: ArrayLike, teff_k: ArrayLike) -> FloatArray:
    """Return the specific intensity B_nu of a blackbody [W m-2 Hz-1 sr-1], broadcasting its arguments.

    Planck's law, B_nu = 2 h nu³ / c² / (exp(h nu / k T) - 1). Underflows to 0 deep in the Wien tail;
    :func:`ln_exitance_jy` does not.
    """
    wavelength_um = LIGHT_SPEED_M_PER_S / np.asarray(nu_hz, dtype=np.float64) * 1e6
    return np.exp(ln_exitance_jy(wavelength_um, teff_k)) * (JANSKY_SI / np.pi)


def ln_exitance_jy(wavelength_um: ArrayLike, teff_k: ArrayLike) -> FloatArray:
    """Return ln(pi B_nu / Jy) of a blackbody at a wavelength [um], finite however deep in the Wien tail.

    Times (R/d)² its exponential is the flux density received from a blackbody star, without dust.
    """
    wavelength_m = np.asarray(wavelength_um, dtype=np.float64) * 1e-6
    x = SECOND_RADIATION_M_K / (wavelength_m * np.asarray(teff_k, dtype=np.float64))
    ln_front = np.log(np.pi * _TWO_HC_SI / JANSKY_SI) - 3.0 * np.log(wavelength_m)
    return np.asarray(ln_front - x - np.log(-np.expm1(-x)), dtype=np.float64)


def exitance_jy(wavelength_um: ArrayLike, teff_k: ArrayLike) -> FloatArray:
    """Return pi B_nu of a blackbody at a wavelength [um], in Jy, broadcasting its arguments."""
    return np.exp(ln_exitance_jy(wavelength_um, teff_k))


def bolometric_exitance(teff_k: ArrayLike) -> FloatArray:
    """Return sigma T⁴ [W m-2], the Stefan-Boltzmann law."""
    return STEFAN_BOLTZMANN_W_PER_M2_K4 * np.asarray(teff_k, dtype=np.float64) ** 4


def fraction_below(lambda_t_um_k: ArrayLike) -> FloatArray:
    """Return the fraction of sigma T⁴ that a blackbody emits below a wavelength, given lambda·T [um K].

    The integral of Planck's law from x = hc/(lambda k T) on, term by term in exp(-n x); below x = 1,
    where that series converges slowly, one minus the integral of the power series of x³/(eˣ - 1).
    """
    lambda_t_m_k = np.asarray(lambda_t_um_k, dtype=np.float64) * 1e-6
    x = SECOND_RADIATION_M_K / lambda_t_m_k
    return np.where(x > 1.0, _tail_fraction(np.maximum(x, 1.0)), 1.0 - _head_fraction(np.minimum(x, 1.0)))


def _tail_fraction(x: FloatArray) -> FloatArray:
    n = _SERIES_TERMS
    x = x[..., np.newaxis]
    terms = np.exp(-n * x) * (x**3 / n + 3.0 * x**2 / n**2 + 6.0 * x / n**3 + 6.0 / n**4)
    return np.asarray(15.0 / np.pi**4 * terms.sum(axis=-1))


def _head_fraction(x: FloatArray) -> FloatArray:
    # x/(eˣ - 1) = Σ B_n xⁿ/n!, with the Bernoulli numbers B_0 … B_16.
    series = (
        x**3 / 3
        - x**4 / 8
        + x**5 / 60
        - x**7 / 5_040
        + x**9 / 272_160
        - x**11 / 13_305_600
        + x**13 / 622_702_080
        - 691 * x**15 / 19_615_115_520_000
    )
    return np.asarray(15.0 / np.pi**4 * series)


def wien_peak_nm(teff_k: ArrayLike) -> FloatArray:
    """Return the wavelength [nm] at which B_lambda of a blackbody peaks, Wien's displacement law."""
    return WIEN_M_K * 1e9 / np.asarray(teff_k, dtype=np.float64)
