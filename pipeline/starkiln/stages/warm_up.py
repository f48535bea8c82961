"""Compiling the kernels before many processes need them at the same time."""

from __future__ import annotations

import numpy as np

from starkiln.physics.bandtable import ln_flux
from starkiln.settings import Settings
from starkiln.stages.ingest import magnitudes_to_jy
from starkiln.stages.model import FitModel
from starkiln.stages.process import fit_columns
from starkiln.stages.stars import Stars

FEWEST_STEPS = 64


def warm_up(settings: Settings, model: FitModel) -> None:
    """Call every kernel that a fit calls, so that their machine code is in the cache for other processes.

    Takes half a second, or half a minute where the cache is empty.

    Parameters
    ----------
    settings
        The settings of the fit; its chains are cut short here.
    model
        The model of the fit.
    """
    magnitudes_to_jy(np.zeros(1), np.zeros(1), 1.0)
    sampling = settings.sampling.model_copy(update={"max_steps": FEWEST_STEPS})
    short = settings.model_copy(update={"sampling": sampling})
    stars = invented_stars(model)
    fit_columns(stars, model, short)
    if model.rival is not None:
        fit_columns(stars, model.rival, short)


def invented_stars(model: FitModel) -> Stars:
    """Return two stars in the middle of the model's range: one measured well, one so badly that walkers get lost."""
    prior = model.prior
    n_bands = len(model.passbands)
    ln_teff = 0.5 * (prior.ln_teff_min + prior.ln_teff_max)
    ln_omega = 0.5 * (prior.ln_omega_min + prior.ln_omega_max)
    flux_jy = np.repeat(np.exp(ln_flux(model.table, np.exp(ln_teff), 0.0) + ln_omega), 2, axis=0)
    return Stars(
        ids=[b"good", b"bad"],
        flux_jy=flux_jy,
        error_jy=flux_jy * np.array([[0.05], [1000.0]]),
        usable=np.ones((2, n_bands), bool),
        limit=np.zeros((2, n_bands), bool),
        parallax_mas=np.array([10.0, np.nan]),
        parallax_error_mas=np.array([0.1, np.nan]),
        distance_pc=np.full(2, np.nan),
        distance_error_pc=np.full(2, np.nan),
        av_mean=np.zeros(2),
        av_scale=np.ones(2),
        length_scale_pc=np.full(2, 1000.0),
    )
