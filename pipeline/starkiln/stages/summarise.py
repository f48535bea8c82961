"""From joint draws to the columns of the catalogue: quantiles, diagnostics and flags."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import binom, gammaincc

from starkiln.flags import BY_NAME
from starkiln.inference.arithmetic import exp_array, log_array
from starkiln.inference.checks import Agreement, compare
from starkiln.inference.posterior import LN_HEAT_K, Block, Prior
from starkiln.inference.start import climb
from starkiln.inference.summaries import correlations, has_gap, means, quantiles
from starkiln.physics.constants import LSUN_W, LUMINOSITY_MBOL_ZERO_W
from starkiln.physics.planck import wien_peak_nm
from starkiln.settings import Settings
from starkiln.stages.derive import Derived
from starkiln.stages.fit import Fitted
from starkiln.stages.model import FitModel
from starkiln.stages.stars import Stars
from starkiln.tables.columns import QUANTITIES

QUANTILE_NAMES = ("lo95", "lo68", "p50", "hi68", "hi95")
PREDICTIVE_DRAWS = 64
DETECTION_SIGMA = 3.0
FEW_BANDS = 5
POOR_PARALLAX = 5.0
POOR_FIT = 0.001
ODD_SIGMA = 2.0
LEAST_KEPT_SHARE = 0.5
OUTLIER = 0.9
EXCESS_SIGMA = 3.0
CONTRADICTION_SIGMA = 1.0
INFRARED_UM = 3.0
ULTRAVIOLET_UM = 0.32
NOT_WITHOUT_DETECTION = ("teff", "radius", "lum", "ang_diam", "fbol")

Columns = dict[str, NDArray[Any]]


def summarise(
    stars: Stars,
    fitted: Fitted,
    derived: Derived,
    mode: NDArray[np.float64],
    model: FitModel,
    settings: Settings,
) -> Columns:
    """Return the fitted columns of K stars, all but ``row_hash``, as float64, integer or string arrays.

    Parameters
    ----------
    stars
        The K stars of ``fitted.draws``, in its order.
    mode
        Their :func:`mode_points`.
    """
    columns: Columns = {}
    no_detection = _detections(stars) < 2
    plain = {name: quantiles(draws) for name, draws, _ in _reported(derived)}
    for name, _, logarithmic in _reported(derived):
        values = exp_array(plain[name]) if logarithmic else plain[name].copy()
        if name in NOT_WITHOUT_DETECTION:
            values[no_detection] = np.nan
        for place, suffix in enumerate(QUANTILE_NAMES):
            columns[f"{name}_{suffix}"] = values[:, place]
    columns["lambda_peak_p50"] = wien_peak_nm(columns["teff_p50"])
    columns["mbol_p50"] = -2.5 * np.log10(columns["lum_p50"] * (LSUN_W / LUMINOSITY_MBOL_ZERO_W))
    columns |= _correlations(derived, no_detection)
    columns |= _agreement(fitted, derived, mode, model)
    columns |= _diagnostics(fitted, derived)
    columns |= _factors(derived, no_detection, model)
    columns["photosphere"] = np.full(len(stars), model.photosphere)
    columns["ln_evidence_ratio"] = np.full(len(stars), np.nan)
    columns["n_bands"] = stars.usable.sum(axis=1)
    columns["n_limits"] = stars.limit.sum(axis=1)
    columns["flags"] = _flags(stars, fitted, derived, columns, model, settings)
    for name, rows in _at_bounds(plain, derived.kept_share, model.prior, settings).items():
        columns["flags"] |= _flag(name, rows)
    return columns


def kept_draws(stars: Stars, derived: Derived, settings: Settings) -> dict[str, NDArray[np.float32]]:
    """Return evenly spaced joint draws (K, keep_draws) of each quantity; NaN where the catalogue is null."""
    no_detection = _detections(stars) < 2
    n = derived.ln_teff.shape[1]
    places = np.linspace(0, n - 1, settings.sampling.keep_draws).astype(np.int64)
    kept = {}
    for name, draws, logarithmic in _reported(derived):
        some = np.ascontiguousarray(draws[:, places])
        kept[name] = (exp_array(some) if logarithmic else some).astype(np.float32)
        if name in NOT_WITHOUT_DETECTION:
            kept[name][no_detection] = np.nan
    return kept


def _reported(derived: Derived) -> list[tuple[str, NDArray[np.float64], bool]]:
    by_name = {
        "teff": derived.ln_teff,
        "radius": derived.ln_radius,
        "lum": derived.ln_lum,
        "dist": derived.ln_dist,
        "av": derived.av,
        "ang_diam": derived.ln_ang_diam,
        "fbol": derived.ln_fbol,
    }
    return [(quantity.name, by_name[quantity.name], quantity.name != "av") for quantity in QUANTITIES]


def _detections(stars: Stars) -> NDArray[np.int64]:
    measured = stars.usable & ~stars.limit
    return np.asarray((measured & (stars.flux_jy > DETECTION_SIGMA * stars.error_jy)).sum(axis=1))


def _correlations(derived: Derived, no_detection: NDArray[np.bool_]) -> Columns:
    pairs = {
        "corr_teff_radius": correlations(derived.ln_teff, derived.ln_radius),
        "corr_teff_lum": correlations(derived.ln_teff, derived.ln_lum),
        "corr_teff_av": correlations(derived.ln_teff, derived.av),
        "corr_radius_lum": correlations(derived.ln_radius, derived.ln_lum),
    }
    return {name: np.where(no_detection, np.nan, values) for name, values in pairs.items()}


def mode_points(fitted: Fitted, derived: Derived, model: FitModel) -> NDArray[np.float64]:
    """Return the posterior mode of each star, (K, 3 or more, 1) as `_points`: the best joint draw, climbed from."""
    log_prob = np.take_along_axis(fitted.draws.log_prob, derived.source, axis=1)
    best = np.take_along_axis(derived.source, np.argmax(log_prob, axis=1)[:, None], axis=1)[:, 0]
    chain = np.take_along_axis(fitted.draws.chain, best[:, None, None], axis=2)[:, :, 0]
    coords = chain.copy()
    coords[:, 0] = exp_array(LN_HEAT_K - chain[:, 0])
    coords[:, 1] = chain[:, 1] + chain[:, 0]
    climb(fitted.block, model.grid, model.prior, coords)
    natural = coords.copy()
    natural[:, 0] = LN_HEAT_K - log_array(coords[:, 0])
    natural[:, 1] = coords[:, 1] - natural[:, 0]
    return _points(natural[:, :, None], derived, model)


def _thinned(fitted: Fitted, derived: Derived, model: FitModel) -> NDArray[np.float64]:
    """Return PREDICTIVE_DRAWS evenly spaced joint draws, as `_points` lays them out."""
    places = np.linspace(0, derived.source.shape[1] - 1, PREDICTIVE_DRAWS).astype(np.int64)
    chain = np.take_along_axis(fitted.draws.chain, derived.source[:, None, places], axis=2)
    return _points(chain, derived, model)


def _points(chain: NDArray[np.float64], derived: Derived, model: FitModel) -> NDArray[np.float64]:
    """Return (K, 3 or more, L) of ln T, ln Omega, A_V and the rest: A_V put in where it is not among the draws."""
    if model.prior.fit_av:
        return np.ascontiguousarray(chain)
    av = np.broadcast_to(derived.av[:, :1], (len(chain), chain.shape[2]))[:, None]
    return np.ascontiguousarray(np.concatenate([chain[:, :2], av, chain[:, 2:]], axis=1))


def _factors(derived: Derived, no_detection: NDArray[np.bool_], model: FitModel) -> Columns:
    """Return the quantiles of the first factor learnt from stars; NaN without one."""
    values = np.full((len(no_detection), len(QUANTILE_NAMES)), np.nan)
    if model.departures is not None and model.departures.factors[:1] not in ((), ("fallback",)):
        values = quantiles(derived.z[0])
        values[no_detection] = np.nan
    return {f"photosphere_z1_{name}": values[:, place] for name, place in (("lo68", 1), ("p50", 2), ("hi68", 3))}


def _agreement(fitted: Fitted, derived: Derived, mode: NDArray[np.float64], model: FitModel) -> Columns:
    n_bands = len(model.floor)
    at_mode = compare(mode, fitted.block, model.grid, model.prior, n_bands)
    drawn: Agreement = compare(_thinned(fitted, derived, model), fitted.block, model.grid, model.prior, n_bands)
    measured = _measured_bands(fitted.block)
    chance = predictive_chance(drawn.chi2, measured, model.prior)
    columns: Columns = {
        "chi2": at_mode.chi2[:, 0],
        "ppp_value": np.where(measured > 0, means(chance), np.nan),
    }
    for place, label in enumerate(model.passbands):
        columns[f"residual_{label}"] = at_mode.residual[:, place]
        columns[f"outlier_{label}"] = drawn.outlier[:, place]
    return columns


def predictive_chance(chi2: NDArray[np.float64], n_bands: NDArray[np.int64], prior: Prior) -> NDArray[np.float64]:
    """Return the chance of a chi squared at least as large under the likelihood, outliers included.

    Parameters
    ----------
    chi2
        (K, L), each star's at L draws.
    n_bands
        (K,), measured bands.

    Notes
    -----
    Without outliers this is the chi-square distribution's own. With them the number k of outlying bands is binomial;
    for k > 0 their w^2 chi2_k is taken to outweigh the others, which count by their mean n - k.
    """
    n = n_bands[:, None].astype(np.float64)
    none = gammaincc(np.maximum(n, 1.0) / 2.0, chi2 / 2.0)
    total = (1.0 - prior.outlier_fraction) ** n * none
    for k in range(1, int(n_bands.max(initial=0)) + 1):
        rest = np.maximum(chi2 - (n - k), 0.0) / prior.outlier_width**2
        weight = binom(n, k) * prior.outlier_fraction**k * (1.0 - prior.outlier_fraction) ** np.maximum(n - k, 0.0)
        total += weight * gammaincc(k / 2.0, rest / 2.0)
    return np.asarray(total)


def _measured_bands(block: Block) -> NDArray[np.int64]:
    used = np.arange(block.band.shape[1]) < block.n_bands[:, None]
    return np.asarray((used & ~block.limit).sum(axis=1))


def _diagnostics(fitted: Fitted, derived: Derived) -> Columns:
    draws, convergence = fitted.draws, fitted.draws.convergence
    return {
        "ess_bulk": convergence.ess_bulk.min(axis=1) * derived.kept_share,
        "ess_tail": convergence.ess_tail.min(axis=1) * derived.kept_share,
        "autocorr_steps": convergence.autocorr_steps.max(axis=1),
        "rhat_max": convergence.rhat.max(axis=1),
        "n_steps": np.full(len(draws.stars), draws.n_steps),
        "accept_frac": draws.accept_frac,
    }


def _flags(
    stars: Stars, fitted: Fitted, derived: Derived, columns: Columns, model: FitModel, settings: Settings
) -> NDArray[np.int32]:
    """Return the flags that the data and the sampling raise."""
    given = np.isfinite(stars.distance_pc)
    has_parallax = np.isfinite(stars.parallax_mas) & ~given
    no_detection = _detections(stars) < 2
    with np.errstate(invalid="ignore"):
        raised = {
            "few_bands": columns["n_bands"] < FEW_BANDS,
            "poor_parallax": has_parallax & (stars.parallax_mas < POOR_PARALLAX * stars.parallax_error_mas),
            "negative_parallax": has_parallax & (stars.parallax_mas < 0.0),
            "no_parallax": ~has_parallax & ~given,
            "not_converged": ~fitted.draws.converged | _lost_draws(columns, derived, settings),
            "several_modes": _several_modes(fitted) & ~no_detection,
            "no_detection": no_detection,
            "poor_fit": columns["ppp_value"] < POOR_FIT,
            "band_outlier": _any_band(columns, "outlier", list(model.passbands), OUTLIER),
            "infrared_excess": _excess(stars, columns, model, is_infrared=True),
            "odd_photosphere": np.abs(columns["photosphere_z1_p50"]) > ODD_SIGMA,
            "outside_calibration": _outside_calibration(stars, columns, model) & ~no_detection,
            "blackbody_chosen": np.full(len(stars), settings.model.photosphere == "auto" and model.departures is None),
            "ultraviolet_excess": _excess(stars, columns, model, is_infrared=False),
        }
    flags = np.zeros(len(stars), np.int32)
    for name, rows in raised.items():
        flags |= _flag(name, rows)
    return flags


def _flag(name: str, rows: NDArray[np.bool_]) -> NDArray[np.int32]:
    return np.where(rows, np.int32(BY_NAME[name].value), np.int32(0))


def _outside_calibration(stars: Stars, columns: Columns, model: FitModel) -> NDArray[np.bool_]:
    """Return whether more than half of a star's bands rest on a guess, or on departures of other temperatures."""
    if model.departures is None:
        return np.zeros(len(stars), bool)
    teff_k = np.nan_to_num(columns["teff_p50"], nan=1.0)
    good = model.departures.holds(teff_k).T & model.departures.served
    return np.asarray((stars.usable & ~good).sum(axis=1) > 0.5 * stars.usable.sum(axis=1))


def _lost_draws(columns: Columns, derived: Derived, settings: Settings) -> NDArray[np.bool_]:
    """Return whether the bounds on R have left fewer effective draws than half of what was asked for."""
    too_few = columns["ess_bulk"] < LEAST_KEPT_SHARE * settings.sampling.effective_samples
    return np.asarray(too_few & (derived.kept_share < 1.0))


def _several_modes(fitted: Fitted) -> NDArray[np.bool_]:
    # The chain itself: joint draws may repeat, which looks like gaps.
    return has_gap(np.sort(fitted.draws.chain[:, 0], axis=-1))


def _at_bounds(
    plain: dict[str, NDArray[np.float64]], kept_share: NDArray[np.float64], prior: Prior, settings: Settings
) -> dict[str, NDArray[np.bool_]]:
    """Return the flags of quantities whose quantiles, as :class:`Derived` has them, reach the bounds."""
    ln_teff, av, ln_radius, ln_dist = (plain[name] for name in ("teff", "av", "radius", "dist"))
    ln_radius_min, ln_radius_max = np.log(settings.model.radius_rsun)
    nearest, farthest = np.log(settings.model.distance.bounds_pc)
    return {
        "temperature_at_bound": (ln_teff[:, 0] < prior.ln_teff_min + 0.01) | (ln_teff[:, 4] > prior.ln_teff_max - 0.01),
        "extinction_at_bound": (av[:, 4] > 0.98 * prior.av_max) & prior.fit_av,
        "distance_at_bound": (ln_dist[:, 0] < nearest + 0.05) | (ln_dist[:, 4] > farthest - 0.05),
        "radius_at_bound": (ln_radius[:, 0] < ln_radius_min + 0.05)
        | (ln_radius[:, 4] > ln_radius_max - 0.05)
        | (kept_share == 0.0),
    }


def _any_band(columns: Columns, prefix: str, labels: list[str], level: float) -> NDArray[np.bool_]:
    values = np.stack([columns[f"{prefix}_{label}"] for label in labels])
    return np.asarray((values > level).any(axis=0))


def excess(residual: NDArray[np.float64], limit: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Return whether stars outshine the model in a region of the spectrum.

    The band with the largest residual must be measured and above 3 sigma. Whatever is cooler, or hotter, than the star
    outshines it the more the further out, so no band beyond that one, measured or limit, may lie 1 sigma below.

    Parameters
    ----------
    residual, limit
        (K, n): residuals in sigma of the total error, NaN where unused, and which are those of upper limits; the
        region's bands from the optical outwards.
    """
    height = np.where(limit | np.isnan(residual), -np.inf, residual)
    highest = height.argmax(axis=1)
    beyond = np.arange(residual.shape[1]) > highest[:, None]
    contradicted = (beyond & (residual < -CONTRADICTION_SIGMA)).any(axis=1)
    return np.asarray((height.max(axis=1) > EXCESS_SIGMA) & ~contradicted)


def _excess(stars: Stars, columns: Columns, model: FitModel, is_infrared: bool) -> NDArray[np.bool_]:
    pivot_um = np.array([passband.pivot_um for passband in model.passbands.values()])
    in_region = pivot_um > INFRARED_UM if is_infrared else pivot_um < ULTRAVIOLET_UM
    order = np.argsort(pivot_um if is_infrared else -pivot_um, kind="stable")
    places = order[in_region[order]]
    if not len(places):
        return np.zeros(len(stars), bool)
    labels = list(model.passbands)
    residual = np.stack([columns[f"residual_{labels[place]}"] for place in places], axis=1)
    return excess(residual, stars.limit[:, places])
