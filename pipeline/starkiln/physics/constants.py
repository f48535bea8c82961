"""Physical constants as SI floats, each with its source."""

from __future__ import annotations

import math

from astropy import constants, units

PLANCK_J_S: float = constants.h.si.value  # CODATA, exact in the SI
LIGHT_SPEED_M_PER_S: float = constants.c.si.value  # CODATA, exact in the SI
BOLTZMANN_J_PER_K: float = constants.k_B.si.value  # CODATA, exact in the SI
STEFAN_BOLTZMANN_W_PER_M2_K4: float = constants.sigma_sb.si.value  # CODATA
WIEN_M_K: float = constants.b_wien.si.value  # CODATA, of the peak of B_lambda
SECOND_RADIATION_M_K: float = PLANCK_J_S * LIGHT_SPEED_M_PER_S / BOLTZMANN_J_PER_K  # hc/k

RSUN_M: float = constants.R_sun.si.value  # IAU 2015 resolution B3, nominal
LSUN_W: float = constants.L_sun.si.value  # IAU 2015 resolution B3, nominal
TSUN_K: float = 5772.0  # IAU 2015 resolution B3, nominal
LUMINOSITY_MBOL_ZERO_W: float = constants.L_bol0.si.value  # IAU 2015 resolution B2
PARSEC_M: float = constants.pc.si.value  # IAU 2015 resolution B2

JANSKY_SI: float = units.Jy.to(units.W / units.m**2 / units.Hz)  # W m-2 Hz-1 in one jansky
AB_ZERO_JY: float = 3631.0  # Oke & Gunn 1983, ApJ 266, 713, rounded as every survey rounds it
MAS_PER_RAD: float = 180.0 / math.pi * 3600.0e3
