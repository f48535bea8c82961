"""Distances from parallaxes: the exponentially decreasing space density of Bailer-Jones (2015, PASP 127, 994)."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray


def log_density(
    distance_pc: NDArray[np.float64], parallax_mas: float, parallax_error_mas: float, length_scale_pc: float
) -> NDArray[np.float64]:
    """Return ln of the unnormalised posterior density of distance.

    Parameters
    ----------
    distance_pc
        Any shape, positive.

    Notes
    -----
    d^2 exp(-d/L) N(parallax | 1/d, error), Bailer-Jones (2015) equation 17.
    """
    pull = (parallax_mas - 1e3 / distance_pc) / parallax_error_mas
    return 2.0 * np.log(distance_pc) - distance_pc / length_scale_pc - 0.5 * pull * pull


def mode_pc(parallax_mas: float, parallax_error_mas: float, length_scale_pc: float) -> float:
    """Return the mode of the posterior density of distance, in parsecs.

    Notes
    -----
    The root of d^3/L - 2 d^2 + (parallax/error^2) d - 1/error^2 = 0, Bailer-Jones (2015) equation 19; of three
    roots the smallest positive one, as that paper advises.
    """
    parallax, error, scale = parallax_mas, parallax_error_mas, length_scale_pc / 1e3
    roots = np.roots([1.0 / scale, -2.0, parallax / error**2, -1.0 / error**2])
    real = roots[np.abs(roots.imag) < 1e-9 * np.abs(roots)].real
    return float(1e3 * real[real > 0.0].min())
