"""From draws of temperature, angular size and dust to radius, luminosity and distance."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.distances import GAUSSIAN, NONE, PARALLAX, DistanceData, draw_distances
from starkiln.inference.ensemble import Draws
from starkiln.inference.streams import normal_draws, star_streams
from starkiln.physics.constants import LSUN_W, MAS_PER_RAD, RSUN_M, STEFAN_BOLTZMANN_W_PER_M2_K4
from starkiln.settings import Settings
from starkiln.stages.model import LN_RSUN_PC, FitModel
from starkiln.stages.stars import Stars

LN_LUM_COEFFICIENT = float(np.log(4.0 * np.pi * RSUN_M**2 * STEFAN_BOLTZMANN_W_PER_M2_K4 / LSUN_W))


class Derived(NamedTuple):
    """Joint draws (K, N) of every reported quantity, as natural logarithms but for A_V.

    Attributes
    ----------
    z
        (n_factors, K, N): the photosphere's common factors.
    source
        (K, N): the photometric draw that each joint draw takes.
    kept_share
        (K,): effective share of the draws left by the bounds on R.
    """

    ln_teff: NDArray[np.float64]
    ln_radius: NDArray[np.float64]
    ln_lum: NDArray[np.float64]
    ln_dist: NDArray[np.float64]
    av: NDArray[np.float64]
    ln_ang_diam: NDArray[np.float64]
    ln_fbol: NDArray[np.float64]
    z: NDArray[np.float64]
    source: NDArray[np.int64]
    kept_share: NDArray[np.float64]


def derive(
    stars: Stars, draws: Draws, model: FitModel, settings: Settings, widening: NDArray[np.float64] | float = 1.0
) -> Derived:
    """Draw distances and compute every quantity of every joint draw.

    Parameters
    ----------
    stars
        The K stars of ``draws``, in its order.
    widening
        By how much the scatter of each star about the departures' scale is wider than a dwarf's.

    Notes
    -----
    R = d sqrt(Omega); L = 4 pi R^2 sigma T^4 (Stefan-Boltzmann); F_bol = Omega sigma T^4; the angular diameter
    is 2 sqrt(Omega).
    """
    ln_teff, ln_omega = scattered(stars, draws, model, settings, widening)
    streams = star_streams(stars.ids, settings.run.seed, b"distance")
    distances = draw_distances(
        ln_omega,
        distance_data(stars),
        settings.model.distance.bounds_pc,
        model.ln_radius_bounds_pc,
        streams,
    )
    photometric = draws.chain
    if (distances.source != np.arange(ln_teff.shape[1])).any():
        photometric = np.take_along_axis(photometric, distances.source[:, None], axis=2)
        ln_teff, ln_omega = (np.take_along_axis(values, distances.source, axis=1) for values in (ln_teff, ln_omega))
    av = photometric[:, 2] if model.prior.fit_av else np.broadcast_to(stars.av_mean[:, None], ln_teff.shape)
    ln_radius = distances.ln_dist_pc + 0.5 * ln_omega - LN_RSUN_PC
    return Derived(
        ln_teff=ln_teff,
        ln_radius=ln_radius,
        ln_lum=LN_LUM_COEFFICIENT + 2.0 * ln_radius + 4.0 * ln_teff,
        ln_dist=distances.ln_dist_pc,
        av=av,
        ln_ang_diam=np.log(2.0 * MAS_PER_RAD) + 0.5 * ln_omega,
        ln_fbol=np.log(STEFAN_BOLTZMANN_W_PER_M2_K4) + ln_omega + 4.0 * ln_teff,
        z=np.ascontiguousarray(
            photometric[:, model.first_factor : model.first_factor + len(model.grid.loading)].transpose(1, 0, 2)
        ),
        source=distances.source,
        kept_share=distances.kept_share,
    )


def scattered(
    stars: Stars, draws: Draws, model: FitModel, settings: Settings, widening: NDArray[np.float64] | float = 1.0
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return ln T and ln Omega (K, N) of every draw, scattered about the scale of the departures.

    What the bands see is a star's place on that scale. Stars of one such place have temperatures that scatter by tau in
    ln T at the same bolometric flux, and fluxes that scatter by gamma at the same temperature. With e, g ~ N(0, 1), T
    goes by exp(tau e), Omega by exp(gamma g - 4 tau e). No band can tell e or g, so they are drawn, and not sampled
    with the rest.
    """
    ln_teff, ln_omega = draws.chain[:, 0], np.ascontiguousarray(draws.chain[:, 1])
    if not model.off_scale.any():
        return ln_teff, ln_omega
    n = ln_teff.shape[1]
    normal = normal_draws(star_streams(stars.ids, settings.run.seed, b"off scale"), 2 * n)
    tau, gamma = (scale * np.reshape(widening, (-1, 1)) for scale in model.off_scale_at(ln_teff))
    shifted = np.clip(ln_teff + tau * normal[:, :n], model.prior.ln_teff_min, model.prior.ln_teff_max)
    return shifted, ln_omega + gamma * normal[:, n:] - 4.0 * (shifted - ln_teff)


def distance_data(stars: Stars) -> DistanceData:
    """Return what is known of each star's distance: the user's own, else the parallax, else nothing."""
    given = np.isfinite(stars.distance_pc)
    measured = np.isfinite(stars.parallax_mas) & ~given
    return DistanceData(
        kind=np.select([given, measured], [GAUSSIAN, PARALLAX], NONE),
        value=np.where(given, stars.distance_pc, stars.parallax_mas),
        error=np.where(given, stars.distance_error_pc, stars.parallax_error_mas),
        length_scale_pc=stars.length_scale_pc,
    )
