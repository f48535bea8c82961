"""Interstellar extinction laws, A(lambda)/A_V, from the ``dust_extinction`` package."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from starkiln.errors import SettingsError, nearest

FloatArray = NDArray[np.float64]

DEFAULT_LAW = "G23"

# The laws of one parameter, R_V, that cover the V band; the package's other ones hold in the ultraviolet
# or the infrared alone and leave A(lambda)/A_V without an anchor.
_SOURCES = {
    "CCM89": "Cardelli, Clayton & Mathis 1989, ApJ 345, 245",
    "O94": "O'Donnell 1994, ApJ 422, 158",
    "F99": "Fitzpatrick 1999, PASP 111, 63",
    "F04": "Fitzpatrick 2004, ASP Conf. Ser. 309, 33",
    "M14": "Maíz Apellániz et al. 2014, A&A 564, A63",
    "F19": "Fitzpatrick et al. 2019, ApJ 886, 108",
    "G23": "Gordon et al. 2023, ApJ 950, 86",
}


def law_names() -> list[str]:
    """Return the names of the extinction laws that can be asked for."""
    return list(_SOURCES)


def law_source(law: str) -> str:
    """Return where a law was published."""
    return _SOURCES[_known(law)]


def law_range_um(law: str) -> tuple[float, float]:
    """Return the shortest and the longest wavelength [um] that a law was published for."""
    low, high = _law_class(law).x_range
    return 1.0 / high, 1.0 / low


def extinction_ratio(law: str, rv: float, wavelength_um: ArrayLike) -> FloatArray:
    """Return A(lambda)/A_V of an extinction law.

    Outside the wavelengths that a law was published for, it goes on with the shape of G23
    (0.0912 to 32 um; at the nearest R_V that it was published for), scaled to join at the end; outside
    those of G23 it holds the value at the end.

    Parameters
    ----------
    law : str
        One of :func:`law_names`.
    rv : float
        A_V / E(B-V).
    wavelength_um : array_like
        Wavelengths [um], of any shape.

    Raises
    ------
    SettingsError
        If the law is not known, or R_V is outside the range that it was published for.
    """
    wavelength_um = np.asarray(wavelength_um, dtype=np.float64)
    inside_um = np.clip(wavelength_um, *_range_within(law))
    ratio = _published_ratio(law, rv, inside_um)
    if law == DEFAULT_LAW:
        return ratio
    outside = inside_um != wavelength_um
    if np.any(outside):
        shape = extinction_ratio(DEFAULT_LAW, _rv_within(DEFAULT_LAW, rv), wavelength_um[outside])
        joint = extinction_ratio(DEFAULT_LAW, _rv_within(DEFAULT_LAW, rv), inside_um[outside])
        ratio[outside] *= shape / joint
    return ratio


def _published_ratio(law: str, rv: float, wavelength_um: FloatArray) -> FloatArray:
    from astropy import units

    law_class = _law_class(law)
    low, high = law_class.Rv_range
    if not low <= rv <= high:
        raise SettingsError(
            f"model.extinction.rv = {rv:g}: {law} was published for R_V from {low:g} to {high:g}; "
            "choose a value in that range or another law"
        )
    flat = law_class(Rv=rv)(np.atleast_1d(wavelength_um).ravel() * units.um)
    return np.asarray(flat, dtype=np.float64).reshape(wavelength_um.shape)


def _rv_within(law: str, rv: float) -> float:
    return float(np.clip(rv, *_law_class(law).Rv_range))


def _range_within(law: str) -> tuple[float, float]:
    # 1/λ and back rounds, and the package refuses what lands a hair outside its range.
    low, high = law_range_um(law)
    return low * (1 + 1e-12), high * (1 - 1e-12)


def _known(law: str) -> str:
    if law not in _SOURCES:
        raise SettingsError(
            f"model.extinction.law = {law!r} is not known{nearest(law, _SOURCES)}; "
            f"choose one of {', '.join(_SOURCES)}"
        )
    return law


def _law_class(law: str):  # type: ignore[no-untyped-def]  # a class of dust_extinction, which carries no types
    from dust_extinction import parameter_averages

    return getattr(parameter_averages, _known(law))
