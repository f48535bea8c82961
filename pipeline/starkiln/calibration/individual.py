"""Departures learnt from individual reference stars: a curve for each band, the common factors, and the scatter."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import repeat
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starkiln.calibration.curves import at_nodes, basis, choose_smoothness, fit_curve
from starkiln.calibration.factors import choose_n_factors, learn_factors
from starkiln.calibration.learn import departure_points, temperature_slope
from starkiln.physics.departures import LN_TEFF_NODES, Departures, Kind, extended, extended_scatter, inside_range
from starkiln.physics.passbands import Passband

FloatArray = NDArray[np.float64]

FEWEST_STARS = 20
"""A band with fewer reference stars is left out: common practice, no source."""

_STARS: Kind = "stars"
_SCATTER = 0.03  # of stars about a curve, before it is known; it only sets the weight of faint stars
_EDGE_SHARE = 0.01  # of the stars beyond each end of the range that a curve claims


class TooFewStars(ValueError):
    """No band has enough reference stars."""


@dataclass(frozen=True, eq=False)
class ReferenceStars:
    """Stars of known temperature and angular size, their fluxes free of dust.

    Attributes
    ----------
    teff_k, ln_omega
        (n,): effective temperature [K] and ln (R/d)².
    ln_flux_jy, error
        (n, n_bands): ln of the flux density / Jy and its error, NaN where missing.
    """

    teff_k: FloatArray
    ln_omega: FloatArray
    ln_flux_jy: FloatArray
    error: FloatArray

    def only(self, stars: NDArray[Any]) -> ReferenceStars:
        """Return some of the stars."""
        return ReferenceStars(self.teff_k[stars], self.ln_omega[stars], self.ln_flux_jy[stars], self.error[stars])


@dataclass(frozen=True, eq=False)
class Learnt:
    """Departures with what they were learnt from.

    Attributes
    ----------
    departures
        Of the bands with enough stars.
    points, errors
        (n, n_bands): ln D of each star in those bands.
    factor_scores
        Mean log-likelihood of left-out stars with 0 and 1 factors; empty where the number was given.
    """

    departures: Departures
    points: FloatArray
    errors: FloatArray
    factor_scores: list[float]


def learn_departures(
    passbands: Sequence[Passband], stars: ReferenceStars, n_factors: int | None, provenance: dict[str, Any]
) -> Learnt:
    """Return the departures of the bands in which enough of the stars were measured.

    Parameters
    ----------
    passbands : sequence of Passband
        The bands of ``stars``.
    stars : ReferenceStars
        The stars.
    n_factors : int or None
        Number of common factors, 0 or 1, beside the scatter of the published temperatures and luminosities about
        their scale; None leaves it to cross-validation.
    provenance : dict
        Goes into the departures' own.

    Raises
    ------
    TooFewStars
        If no band has `FEWEST_STARS` stars.
    """
    everything = departure_points(passbands, stars.teff_k, stars.ln_omega, stars.ln_flux_jy)
    chosen = np.flatnonzero(np.isfinite(everything).sum(axis=0) >= FEWEST_STARS)
    if not len(chosen):
        most = int(np.isfinite(everything).sum(axis=0).max(initial=0))
        raise TooFewStars(f"no band has {FEWEST_STARS} reference stars; the best has {most}")
    bands = [passbands[int(place)] for place in chosen]
    points, errors = everything[:, chosen], stars.error[:, chosen]
    weight = np.hypot(errors, _SCATTER)
    smoothness = choose_smoothness(stars.teff_k, points, weight)
    curves = [_curve(stars.teff_k, points[:, place], weight[:, place], smoothness) for place in range(len(bands))]
    residual = points - np.stack([basis(stars.teff_k) @ coefficients for coefficients in curves], axis=1)
    nodes_ln_d = np.stack([at_nodes(coefficients) for coefficients in curves])
    node_slope = temperature_slope(bands, nodes_ln_d)
    slope = np.stack([np.interp(np.log(stars.teff_k), LN_TEFF_NODES, row) for row in node_slope], axis=1)
    scores: list[float] = []
    if n_factors is None:
        n_factors, scores = choose_n_factors(stars.teff_k, residual, errors, largest=1, slope=slope)
    factors = learn_factors(stars.teff_k, residual, errors, n_factors, slope)
    ranges = [_range_k(stars.teff_k[np.isfinite(points[:, place])]) for place in range(len(bands))]
    inside = [inside_range(range_k) for range_k in ranges]
    loading = factors.loading(np.exp(LN_TEFF_NODES)) * _sign(factors.coefficient)
    departures = Departures(
        bands=tuple(band.name for band in bands),
        digests=tuple(band.digest() for band in bands),
        kind=tuple(repeat(_STARS, len(bands))),
        source=tuple(f"{int(np.isfinite(points[:, place]).sum())} reference stars" for place in range(len(bands))),
        pivot_um=np.array([band.pivot_um for band in bands]),
        range_k=np.array([np.exp(LN_TEFF_NODES[held])[[0, -1]] for held in inside]),
        ln_d=np.stack([extended(at_nodes(c), held) for c, held in zip(curves, inside, strict=True)]),
        loading=_held(loading, inside),
        scatter=np.stack(
            [extended_scatter(np.full(len(LN_TEFF_NODES), u), h) for u, h in zip(factors.scatter, inside, strict=True)]
        ),
        factors=("photosphere",)[:n_factors],
        temperature_scatter=np.full(len(LN_TEFF_NODES), abs(factors.shift[0])),
        luminosity_scatter=np.full(len(LN_TEFF_NODES), abs(factors.shift[1])),
        provenance=provenance | {"stars": len(stars.teff_k), "smoothness": smoothness},
    )
    return Learnt(departures, points, errors, scores)


def with_figures(departures: Departures, figures: dict[str, Any]) -> Departures:
    """Return departures that carry the figures of their held-out stars."""
    return replace(departures, provenance=departures.provenance | {"held_out": figures})


def _curve(teff_k: FloatArray, values: FloatArray, errors: FloatArray, smoothness: float) -> FloatArray:
    known = np.isfinite(values)
    return fit_curve(teff_k[known], values[known], errors[known], smoothness)


def _range_k(teff_k: FloatArray) -> FloatArray:
    """Return the temperatures that a curve may claim: all but the last per cent of the stars at each end."""
    low, high = np.quantile(teff_k, [_EDGE_SHARE, 1.0 - _EDGE_SHARE])
    step = LN_TEFF_NODES[1] - LN_TEFF_NODES[0]
    # Two nodes at least, however alike the stars are.
    return np.array([min(low, high * np.exp(-step)) * np.exp(-step), max(high, low * np.exp(step)) * np.exp(step)])


def _sign(coefficient: FloatArray) -> FloatArray:
    """Return +-1 for each factor, so that the first band's loading is negative."""
    first = np.sign(coefficient[:, 0, 0])
    return -np.where(first == 0.0, 1.0, first)[:, np.newaxis, np.newaxis]


def _held(loading: FloatArray, inside: list[NDArray[np.bool_]]) -> FloatArray:
    held = np.zeros(loading.shape)
    for factor in range(loading.shape[0]):
        for band, known in enumerate(inside):
            held[factor, band] = extended(loading[factor, band], known)
    return held
