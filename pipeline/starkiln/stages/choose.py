"""Which photosphere a star has, for photosphere = "auto": the evidence of both, and a broad prior of R given T."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from starkiln.inference.evidence import WeightedDraws, importance_draws, log_mean_exp
from starkiln.inference.posterior import LN_HEAT_K
from starkiln.inference.streams import star_streams
from starkiln.settings import Settings
from starkiln.stages.fit import block_stars, start_block
from starkiln.stages.model import LN_RSUN_PC, FitModel
from starkiln.stages.stars import Stars

COMPACT_RSUN = (0.003, 0.05)
HOT_COMPACT_RSUN = (0.003, 0.4)
HOT_COMPACT_K = 20_000.0
ORDINARY_RSUN = (0.07, 3e3)
PARALLAX_SIGMA = 3.0  # below this the radius says nothing
ENOUGH_BANDS = 5
LEAK = 1e-10  # share of either kind that has any radius at all, so that no odds are infinite
UNLESS_ABOVE = 5.0  # log ratio that a star with too little data needs


def choose(stars: Stars, model: FitModel, settings: Settings) -> tuple[NDArray[np.bool_], NDArray[np.float64]]:
    """Return for each star whether it is taken for a blackbody, and the log ratio of the odds, blackbody to calibrated.

    The odds hold the expected fraction of blackbodies. Without a parallax of 3 sigma, or below five bands, a star is
    calibrated unless the log ratio exceeds 5.
    """
    assert model.rival is not None
    ratio = np.empty(len(stars))
    size = block_stars(settings)
    for first in range(0, len(stars), size):
        rows = slice(first, first + size)
        some = stars.take(rows)
        ratio[rows] = log_evidence(some, model.rival, settings) - log_evidence(some, model, settings)
    fraction = settings.model.blackbody.fraction
    ratio += np.log(fraction) - np.log1p(-fraction)
    informed = (_relative_distance_error(stars) < 1.0 / PARALLAX_SIGMA) & (stars.usable.sum(axis=1) >= ENOUGH_BANDS)
    return ratio > np.where(informed, 0.0, UNLESS_ABOVE), ratio


def log_evidence(stars: Stars, model: FitModel, settings: Settings) -> NDArray[np.float64]:
    """Return each star's log evidence under a model, up to constants that all models share."""
    block, modes = start_block(stars, model, settings)
    streams = star_streams(stars.ids, settings.run.seed, b"evidence")
    draws = importance_draws(block, model.grid, model.prior, streams, settings.sampling.walkers, modes)
    return log_mean_exp(draws.log_weight + _ln_radius_prior(draws, stars, model))


def _relative_distance_error(stars: Stars) -> NDArray[np.float64]:
    """Return the fractional error of the distance, infinite where there is none or it is negative."""
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        by_parallax = np.where(stars.parallax_mas > 0.0, stars.parallax_error_mas / stars.parallax_mas, np.inf)
        given = stars.distance_error_pc / stars.distance_pc
    return np.nan_to_num(np.where(np.isfinite(given), given, by_parallax), nan=np.inf)


def _ln_radius_prior(draws: WeightedDraws, stars: Stars, model: FitModel) -> NDArray[np.float64]:
    """Return (S, N) the log prior density of ln R that a model expects at its temperature, smeared by the distance.

    Compact stars, for the blackbody: 0.003 to 0.05 solar radii, to 0.4 above 20000 K; others above 0.07. Zero for
    stars whose distance says nothing of the radius.
    """
    error = _relative_distance_error(stars)
    known = error < 1.0 / PARALLAX_SIGMA
    distance_pc = np.where(
        np.isfinite(stars.distance_pc), stars.distance_pc, 1e3 / np.where(known, stars.parallax_mas, 1.0)
    )
    distance_pc = np.where(known, distance_pc, 1.0)
    smear = np.where(known, np.maximum(error, 0.02), 1.0)[:, None]
    # Draws beyond the hottest temperature have no weight; they only must not spoil the logarithm.
    ln_teff = LN_HEAT_K - np.log(np.maximum(draws.coords[:, :, 0], 1e-9))
    ln_radius = np.log(distance_pc)[:, None] + 0.5 * (draws.coords[:, :, 1] - ln_teff) - LN_RSUN_PC
    if model.departures is None:
        hot = ln_teff > np.log(HOT_COMPACT_K)
        low_rsun, high_rsun = COMPACT_RSUN[0], np.where(hot, HOT_COMPACT_RSUN[1], COMPACT_RSUN[1])
    else:
        low_rsun, high_rsun = ORDINARY_RSUN[0], np.full(ln_teff.shape, ORDINARY_RSUN[1])
    low, high = float(np.log(low_rsun)), np.asarray(np.log(high_rsun))
    share = ndtr((high - ln_radius) / smear) - ndtr((low - ln_radius) / smear)
    return np.where(known[:, None], np.log((share + LEAK) / (high - low)), 0.0)
