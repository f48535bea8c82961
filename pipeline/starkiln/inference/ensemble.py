"""Sampling a block of stars: start, burn-in, a frozen proposal, and stopping star by star."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import NamedTuple

import emcee
import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import exp, log, put
from starkiln.inference.compile import kernel
from starkiln.inference.convergence import Convergence, autocorrelation_times, diagnose
from starkiln.inference.moves import (
    INFLATION,
    BlockMove,
    Proposal,
    draw_independent,
    learn_proposal,
    make_scratch,
    proposal_axes,
)
from starkiln.inference.posterior import LN_HEAT_K, Block, Grid, Prior, log_posterior
from starkiln.inference.start import Modes, cholesky, find_modes
from starkiln.inference.streams import uniform

BURN_IN = (16, 16, 16, 24)
INDEPENDENCE = (0.4, 0.5, 0.6, 0.7, 0.85)
MIN_STEPS = 60
MIN_TAUS = 50.0
TAIL_SHARE = 0.4
RHAT_LIMIT = 1.10


@dataclass(frozen=True)
class Stopping:
    """When a star's chain is long enough."""

    effective_samples: float = 1000.0
    max_steps: int = 4000

    def lengths(self) -> list[int]:
        """Return the chain lengths at which stars are looked at: even, each up to half as long again."""
        lengths = [length for k in range(40) for length in (64 << k, 96 << k) if length < self.max_steps]
        return [*sorted(set(lengths)), self.max_steps - self.max_steps % 2]


class Draws(NamedTuple):
    """The finished chains of some stars of a block, all of one length.

    Attributes
    ----------
    stars
        (K,) int64, their places in the block.
    chain
        (K, P, N): ln T, ln Omega and, where it is fitted, A_V; N = n_steps * walkers draws.
    log_prob
        (K, N), in the sampler's coordinates.
    n_steps
        Steps kept, without burn-in.
    accept_frac
        (K,).
    convergence, converged
        Diagnostics, and whether the stopping rule was met.
    """

    stars: NDArray[np.int64]
    chain: NDArray[np.float64]
    log_prob: NDArray[np.float64]
    n_steps: int
    accept_frac: NDArray[np.float64]
    convergence: Convergence
    converged: NDArray[np.bool_]


def log_prob_function(block: Block, grid: Grid, prior: Prior) -> Callable[[NDArray[np.float64]], NDArray[np.float64]]:
    """Return the log-posterior of a block as emcee calls it, vectorised."""

    def log_prob(coords: NDArray[np.float64]) -> NDArray[np.float64]:
        out = np.empty(len(coords))
        log_posterior(coords, block, grid, prior, out)
        return out

    return log_prob


def sample_block(
    block: Block,
    grid: Grid,
    prior: Prior,
    streams: NDArray[np.uint64],
    walkers: int,
    stopping: Stopping,
    memory_bytes: float = 1e9,
    modes: Modes | None = None,
) -> Iterator[Draws]:
    """Sample every star of a block until it is done; yield stars as they finish.

    Parameters
    ----------
    streams
        (S, 4) uint64, each star's own stream, advanced in place.
    memory_bytes
        When the chains would outgrow this, the stars left are sampled in two halves, one after the other.
    modes
        The peaks of the posteriors, if they have been found already.
    """
    run = burn_in(block, grid, prior, streams, walkers, modes or find_modes(block, grid, prior))
    waiting = [(run, stopping.lengths())]
    while waiting:
        run, (length, *longer) = waiting.pop()
        if run.n_stars > 1 and run.n_stars * chain_bytes(length, walkers, run.coords.shape[1]) > memory_bytes:
            middle = run.n_stars // 2
            halves = run.taking(np.arange(middle)), run.taking(np.arange(middle, run.n_stars))
            waiting += [(half, [length, *longer]) for half in halves]
            continue
        run.extend(length, INDEPENDENCE[-1])
        done, run = run.judge(stopping)
        if done is not None:
            yield done
        if run.n_stars:
            waiting.append((run, longer))


def burn_in(block: Block, grid: Grid, prior: Prior, streams: NDArray[np.uint64], walkers: int, modes: Modes) -> _Run:
    """Return the run of a block after the burn-in, its proposal learnt and frozen."""
    run = _Run(block, grid, prior, streams, walkers, *_first_walkers(block, grid, prior, modes, streams, walkers))
    for length, share in zip(BURN_IN, INDEPENDENCE, strict=False):
        window, _ = run.advance(length, share)
        run.proposal = learn_proposal(window[length // 4 :], run.n_stars, prior.fit_av)
    run.forget()
    return run


def chain_bytes(n_steps: int, walkers: int, ndim: int) -> int:
    """Return the memory one star takes at its largest: its chain, the copies and orders made of it, its summaries."""
    return n_steps * walkers * 8 * (5 * ndim + 16)


def _first_walkers(
    block: Block, grid: Grid, prior: Prior, modes: Modes, streams: NDArray[np.uint64], walkers: int
) -> tuple[Proposal, NDArray[np.float64], NDArray[np.float64]]:
    """Draw each star's first walkers from its Laplace fit, and again where one falls outside the bounds."""
    n_stars, _, ndim = modes.coords.shape
    proposal = _laplace_proposal(modes, prior.fit_av)
    coords = np.empty((n_stars * walkers, ndim))
    _draw_walkers(proposal, modes, streams, coords)
    log_prob_of = log_prob_function(block, grid, prior)
    log_prob = log_prob_of(coords)
    for _ in range(6):
        lost = ~np.isfinite(log_prob)
        if not lost.any():
            break
        _pull_in(coords, lost, modes)
        log_prob = log_prob_of(coords)
    return proposal, coords, log_prob


def _laplace_proposal(modes: Modes, fit_av: bool) -> Proposal:
    n_stars, _, ndim = modes.coords.shape
    axes = proposal_axes(ndim, fit_av)
    centre = np.ascontiguousarray(modes.coords[:, 0][:, axes])
    factor = np.empty((n_stars, ndim, ndim))
    _factor_modes(modes.covariance, axes, factor)
    return Proposal(axes, fit_av, centre, factor, np.zeros((n_stars, ndim)))


@kernel
def _factor_modes(covariance, axes, factor):
    ndim = axes.size
    ordered = np.empty((ndim, ndim))
    for star in range(covariance.shape[0]):
        for k in range(ndim):
            for m in range(ndim):
                ordered[k, m] = INFLATION * covariance[star, 0, axes[k], axes[m]]
        lower = cholesky(ordered)
        for k in range(ndim):
            put(lower[k], factor[star, k])


@kernel
def _draw_walkers(proposal, modes, streams, coords):
    """Draw walkers about a star's peaks, each peak's share by its height; the spread is the first peak's."""
    n_stars = streams.shape[0]
    walkers = coords.shape[0] // n_stars
    ndim = coords.shape[1]
    scratch = make_scratch(ndim, walkers)
    for star in range(n_stars):
        draw_independent(proposal, star, streams[star], scratch, coords[star * walkers : (star + 1) * walkers])
        total = 0.0
        for m in range(modes.n_modes[star]):
            total += exp(modes.log_density[star, m] - modes.log_density[star, 0])
        for i in range(walkers):
            row = star * walkers + i
            pick = uniform(streams[star]) * total
            mode = 0
            for m in range(modes.n_modes[star]):
                pick -= exp(modes.log_density[star, m] - modes.log_density[star, 0])
                mode = m
                if pick <= 0.0:
                    break
            for k in range(ndim):
                coords[row, k] += modes.coords[star, mode, k] - modes.coords[star, 0, k]


@kernel
def _pull_in(coords, lost, modes):
    """Move lost walkers most of the way to their star's highest peak."""
    walkers = coords.shape[0] // modes.n_modes.size
    for row in range(coords.shape[0]):
        if lost[row]:
            for k in range(coords.shape[1]):
                peak = modes.coords[row // walkers, 0, k]
                coords[row, k] = peak + 0.3 * (coords[row, k] - peak)


class _Run:
    """The stars of a block that are still sampled, and their chains so far."""

    def __init__(
        self,
        block: Block,
        grid: Grid,
        prior: Prior,
        streams: NDArray[np.uint64],
        walkers: int,
        proposal: Proposal,
        coords: NDArray[np.float64],
        log_prob: NDArray[np.float64],
    ) -> None:
        self.block, self.grid, self.prior = block, grid, prior
        self.streams, self.walkers, self.proposal = streams, walkers, proposal
        self.coords, self.log_prob = coords, log_prob
        self.stars = np.arange(len(streams))
        self.forget()

    @property
    def n_stars(self) -> int:
        return len(self.stars)

    def forget(self) -> None:
        """Drop the chains so far."""
        n_walkers, ndim = self.coords.shape
        self.chain = np.empty((0, n_walkers, ndim))
        self.chain_log_prob = np.empty((0, n_walkers))
        self.accepted = np.zeros(self.n_stars, np.int64)

    def advance(self, n_steps: int, independence: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Take steps of every star's ensemble; return positions and log densities."""
        n_walkers, ndim = self.coords.shape
        move = BlockMove(self.streams, self.proposal, independence)
        sampler = emcee.EnsembleSampler(
            n_walkers, ndim, log_prob_function(self.block, self.grid, self.prior), moves=move, vectorize=True
        )
        state = emcee.State(self.coords, log_prob=self.log_prob)
        chain = np.empty((n_steps, n_walkers, ndim))
        log_prob = np.empty((n_steps, n_walkers))
        steps = sampler.sample(state, iterations=n_steps, store=False, skip_initial_state_check=True)
        for step, state in enumerate(steps):
            chain[step] = state.coords
            log_prob[step] = state.log_prob
        self.coords, self.log_prob = state.coords, state.log_prob
        self.accepted += move.accepted_per_star
        return chain, log_prob

    def extend(self, length: int, independence: float) -> None:
        """Sample until the chains are ``length`` steps long."""
        chain, log_prob = self.advance(length - len(self.chain), independence)
        self.chain = np.concatenate([self.chain, chain])
        self.chain_log_prob = np.concatenate([self.chain_log_prob, log_prob])

    def judge(self, stopping: Stopping) -> tuple[Draws | None, _Run]:
        """Diagnose every star; return the finished ones, and the run of those that go on."""
        n_steps = len(self.chain)
        chain = np.empty((self.n_stars, self.coords.shape[1], n_steps, self.walkers))
        _natural_parameters(self.chain, chain)
        # Autocorrelation is cheap to look at; the rest only where it has become short enough.
        last = n_steps >= stopping.lengths()[-1]
        taus = autocorrelation_times(chain)
        candidates = np.flatnonzero(last | (n_steps >= MIN_TAUS * taus).all(axis=1))
        if not len(candidates):
            return None, self
        flat = chain[candidates].reshape(len(candidates), chain.shape[1], -1)
        order = np.argsort(flat, axis=-1)
        convergence = diagnose(chain[candidates], order, taus[candidates])
        enough = _long_enough(convergence, n_steps, stopping)
        done = np.flatnonzero(enough | last)
        if not len(done):
            return None, self
        leaving = candidates[done]
        log_prob = self.chain_log_prob.reshape(n_steps, self.n_stars, self.walkers)[:, leaving]
        draws = Draws(
            stars=self.stars[leaving],
            chain=flat[done],
            log_prob=np.ascontiguousarray(log_prob.transpose(1, 0, 2)).reshape(len(leaving), -1),
            n_steps=n_steps,
            accept_frac=self.accepted[leaving] / (n_steps * self.walkers),
            convergence=convergence.take(done),
            converged=enough[done],
        )
        return draws, self.taking(np.setdiff1d(np.arange(self.n_stars), leaving))

    def taking(self, stars: NDArray[np.int64]) -> _Run:
        """Return the run of some of the stars, from where they are."""
        walkers = (stars[:, None] * self.walkers + np.arange(self.walkers)).ravel()
        run = _Run(
            self.block.take(stars),
            self.grid,
            self.prior,
            self.streams[stars],
            self.walkers,
            self.proposal.take(stars),
            self.coords[walkers],
            self.log_prob[walkers],
        )
        run.chain, run.chain_log_prob = self.chain[:, walkers], self.chain_log_prob[:, walkers]
        run.accepted, run.stars = self.accepted[stars], self.stars[stars]
        return run


def _long_enough(convergence: Convergence, n_steps: int, stopping: Stopping) -> NDArray[np.bool_]:
    target = stopping.effective_samples
    enough = (
        (convergence.ess_bulk >= target).all(axis=1)
        & (convergence.ess_tail >= TAIL_SHARE * target).all(axis=1)
        & (n_steps >= MIN_TAUS * convergence.autocorr_steps).all(axis=1)
        & (n_steps >= MIN_STEPS)
        & (convergence.rhat <= RHAT_LIMIT).all(axis=1)
        & ~convergence.stray_walker
    )
    return np.asarray(enough)


@kernel
def _natural_parameters(steps, chain):
    """Reorder (n, S * W, ndim) sampler coordinates into (S, ndim, n, W) of ln T, ln Omega and the rest."""
    n_stars, ndim, n_steps, walkers = chain.shape
    for star in range(n_stars):
        for n in range(n_steps):
            for w in range(walkers):
                row = star * walkers + w
                ln_teff = LN_HEAT_K - log(steps[n, row, 0])
                chain[star, 0, n, w] = ln_teff
                chain[star, 1, n, w] = steps[n, row, 1] - ln_teff
                for k in range(2, ndim):
                    chain[star, k, n, w] = steps[n, row, k]
