"""Compiling the kernels before many processes need them at the same time."""

from __future__ import annotations

import os
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from contextlib import contextmanager, suppress

import numpy as np

from starkiln.inference.compile import FOUND_EMPTY
from starkiln.inference.ensemble import Stopping, sample_block
from starkiln.inference.evidence import importance_draws
from starkiln.inference.knots import MAX_KNOTS, fit_proposal
from starkiln.inference.posterior import LN_HEAT_K, n_parameters
from starkiln.inference.proposal import Proposal, empty_proposal
from starkiln.inference.start import MAX_MODES, Modes, climb
from starkiln.inference.streams import star_streams
from starkiln.physics.bandtable import ln_flux
from starkiln.settings import Settings, build_settings, dump_toml
from starkiln.stages.derive import derive
from starkiln.stages.fit import pack_block, start_block
from starkiln.stages.ingest import magnitudes_to_jy
from starkiln.stages.model import FitModel, build_model
from starkiln.stages.process import fit_columns
from starkiln.stages.stars import Stars

FEWEST_STEPS = 64
LONGEST_SECONDS = 60.0
"""How long to wait for the other process when this one's share is done."""


def warm_up(settings: Settings, model: FitModel) -> None:
    """Call every kernel that a fit calls, so that their machine code is in the cache for other processes.

    Takes a quarter of a second, or a quarter of a minute where the cache is empty.

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


def compile_in_two(settings: Settings, model: FitModel) -> None:
    """Compile most kernels into an empty cache by two processes at once; `warm_up` then compiles what they left.

    Does nothing where something is in the cache already, or where there is but one processor.
    """
    if FOUND_EMPTY and _processors() > 1:
        with suppress(OSError), _finding_peaks(settings) as other:
            sample_from_anywhere(settings, model)
            with suppress(subprocess.TimeoutExpired):
                other.wait(LONGEST_SECONDS)


def _processors() -> int:
    # Not every system tells which processors this process may use.
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


@contextmanager
def _finding_peaks(settings: Settings) -> Iterator[subprocess.Popen[bytes]]:
    """Run `find_peaks` in a new process, which does not outlive the context; its failure costs time only."""
    command = [sys.executable, "-m", "starkiln.stages.warm_up"]
    silent = subprocess.DEVNULL
    process = subprocess.Popen(command, stdin=subprocess.PIPE, stdout=silent, stderr=silent)
    try:
        assert process.stdin is not None
        with suppress(BrokenPipeError), process.stdin:
            process.stdin.write(dump_toml(settings).encode())
        yield process
    finally:
        process.kill()
        process.wait()


def find_peaks(settings: Settings, model: FitModel) -> None:
    """Call the kernels that find peaks, climb them and walk along them."""
    block, modes = start_block(invented_stars(model), model, settings)
    fit_proposal(block, model.grid, model.prior, modes)
    climb(block, model.grid, model.prior, modes.coords[:, 0].copy())


def sample_from_anywhere(settings: Settings, model: FitModel) -> None:
    """Call the kernels that sample and derive, without those that find peaks."""
    stars = invented_stars(model)
    block = pack_block(stars, model, settings)
    modes = _middle_as_peak(model, len(stars))
    proposal = _about_the_middle(modes, model)
    walkers = settings.sampling.walkers
    streams = star_streams(stars.ids, settings.run.seed, b"warm up")
    stopping = Stopping(settings.sampling.effective_samples, FEWEST_STEPS)
    grid, prior = model.grid, model.prior
    for draws in sample_block(block, grid, prior, streams, walkers, stopping, modes=modes, proposal=proposal):
        derive(stars.at(draws.stars), draws, model, settings)
    if model.rival is not None:
        importance_draws(block, grid, prior, streams, walkers, modes, proposal)


def _middle_as_peak(model: FitModel, n_stars: int) -> Modes:
    """Return the middle of the model's range as the only peak of every star's posterior."""
    prior = model.prior
    ndim = n_parameters(model.grid, prior)
    ln_teff, ln_omega = _middle(model)
    coords = np.zeros((n_stars, MAX_MODES, ndim))
    coords[:, :, 0] = np.exp(LN_HEAT_K - ln_teff)
    coords[:, :, 1] = ln_omega + ln_teff
    if prior.fit_jitter:
        coords[:, :, -1] = 0.5 * prior.ln_jitter_min
    covariance = np.zeros((n_stars, MAX_MODES, ndim, ndim)) + 1e-4 * np.eye(ndim)
    return Modes(np.ones(n_stars, np.int64), coords, np.zeros((n_stars, MAX_MODES)), covariance)


def _about_the_middle(modes: Modes, model: FitModel) -> Proposal:
    """Return a proposal that is flat in heat about the middle, not normalised: nobody looks at the result."""
    n_stars, _, ndim = modes.coords.shape
    proposal = empty_proposal(n_stars, MAX_KNOTS + 2, ndim, model.prior.fit_av)
    proposal.n_knots[:] = 3
    proposal.heat[:, :3] = modes.coords[:, :1, 0] * np.array([0.9, 1.0, 1.1])
    proposal.mass[:, :3] = 0.0, 0.5, 1.0
    proposal.av[:, 1:] = 0.5
    proposal.centre[:, 0] = modes.coords[:, :1, 1]
    proposal.factor[:] = 0.1 * np.eye(proposal.factor.shape[1])[:, :, np.newaxis]
    return proposal


def _middle(model: FitModel) -> tuple[float, float]:
    """Return ln T and ln Omega in the middle of the model's range."""
    prior = model.prior
    return 0.5 * (prior.ln_teff_min + prior.ln_teff_max), 0.5 * (prior.ln_omega_min + prior.ln_omega_max)


def invented_stars(model: FitModel) -> Stars:
    """Return two stars in the middle of the model's range: one measured well, one so badly that walkers get lost."""
    n_bands = len(model.passbands)
    ln_teff, ln_omega = _middle(model)
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


def main() -> None:
    """Find peaks with the settings on standard input."""
    settings = build_settings(tomllib.loads(sys.stdin.read()))
    find_peaks(settings, build_model(settings))


if __name__ == "__main__":
    main()
