"""Sampling blocks of stars: start, burn-in, a frozen proposal, and stopping star by star."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from typing import NamedTuple

import emcee
import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import log
from starkiln.inference.compile import kernel
from starkiln.inference.convergence import Convergence, autocorrelation_times, diagnose
from starkiln.inference.knots import fit_proposal
from starkiln.inference.moves import BlockMove
from starkiln.inference.posterior import LN_HEAT_K, Block, Grid, Prior, log_posterior
from starkiln.inference.proposal import Proposal, draw_independent, learn_others, make_scratch
from starkiln.inference.start import Modes, find_modes

LEARNING = (4, 12)  # the proposal learns from these steps of the burn-in; those before forget where walkers began
TRYING = 6  # steps after these, which show how good the proposal is
INDEPENDENCE = 0.85  # of the steps; the others are differential evolution, for what the proposal has missed
LESS_INDEPENDENCE = 0.5  # where fewer than POOR_ACCEPTANCE of the last steps of the burn-in were accepted
POOR_ACCEPTANCE = 0.45
PATIENCE = 128  # steps that a star may take in its own block
WAITING_SHARE = 0.2  # of the memory, for the chains of those who go on together
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
        lengths = [*range(64, PATIENCE + 1, 16), *(length << k for k in range(40) for length in (160, 224))]
        last = self.max_steps - self.max_steps % 2
        lengths = [length for length in lengths if length < last]
        return [*sorted(lengths), last]


class Draws(NamedTuple):
    """The finished chains of some stars, all of one length.

    Attributes
    ----------
    stars
        (K,) int64, their places among all stars of the blocks.
    chain
        (K, P, N): ln T, ln Omega, A_V in magnitudes where it is fitted, factors, and ln jitter where it is fitted;
        N = n_steps * walkers draws.
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


class Start(NamedTuple):
    """A block of S stars to be sampled.

    Attributes
    ----------
    block, modes
        The data, and the peaks of the posteriors.
    streams
        (S, 4) uint64, advanced in place.
    proposal
        What walkers are first drawn from; without, that of a walk from the peaks.
    """

    block: Block
    modes: Modes
    streams: NDArray[np.uint64]
    proposal: Proposal | None = None


def sample_blocks(
    starts: Iterable[Start], grid: Grid, prior: Prior, walkers: int, stopping: Stopping, memory_bytes: float = 1e9
) -> Iterator[tuple[Block, Draws]]:
    """Sample every star of some blocks until it is done; yield stars as they finish, with their part of the block.

    Stars number on from block to block. Those that take longer than PATIENCE steps go on together at the end, or when
    their chains take more than WAITING_SHARE of the memory.

    Parameters
    ----------
    memory_bytes
        When the chains would outgrow this, the stars left are sampled in two halves, one after the other.
    """
    patient = [length for length in stopping.lengths() if length <= PATIENCE]
    longer = stopping.lengths()[len(patient) :]
    waiting: list[_Run] = []
    first = 0
    for start in starts:
        run = burn_in(start, grid, prior, walkers)
        run.stars += first
        first += run.n_stars
        yield from _sample(run, patient, stopping, memory_bytes, waiting)
        if sum(run.chain.nbytes for run in waiting) > WAITING_SHARE * memory_bytes:
            yield from _sample(_joined(waiting), longer, stopping, memory_bytes, [])
    if waiting:
        yield from _sample(_joined(waiting), longer, stopping, memory_bytes, [])


def _sample(
    run: _Run, lengths: list[int], stopping: Stopping, memory_bytes: float, unfinished: list[_Run]
) -> Iterator[tuple[Block, Draws]]:
    """Sample to one length after another; who is not done then is added to the unfinished."""
    halves = [(run, lengths)]
    while halves:
        run, lengths = halves.pop()
        if not lengths:
            unfinished.append(run)
            continue
        need = run.n_stars * chain_bytes(lengths[0], run.walkers, run.coords.shape[1])
        if run.n_stars > 1 and need > memory_bytes:
            middle = run.n_stars // 2
            halves += [(run.taking(np.arange(middle, run.n_stars)), lengths), (run.taking(np.arange(middle)), lengths)]
            continue
        run.extend(lengths[0])
        done, block, run = run.judge(stopping)
        if done is not None:
            yield block, done
        if run.n_stars:
            halves.append((run, lengths[1:]))


def _joined(runs: list[_Run]) -> _Run:
    """Return runs of chains of one length as one; the list is emptied, as their chains are copied."""
    fields = [np.concatenate(columns) for columns in zip(*(run.block for run in runs), strict=True)]
    proposals = [np.concatenate(columns) for columns in zip(*(run.proposal for run in runs), strict=True)]
    kept = ("chain", "chain_log_prob", "accepted", "independence", "stars")
    names = ("streams", "coords", "log_prob", *kept)
    whole = {name: np.concatenate([getattr(run, name) for run in runs]) for name in names}
    first = runs[0]
    joined = _Run(
        Block(*fields),
        first.grid,
        first.prior,
        whole["streams"],
        first.walkers,
        Proposal(*proposals),
        whole["coords"],
        whole["log_prob"],
    )
    for name in kept:
        setattr(joined, name, whole[name])
    runs.clear()
    return joined


def sample_block(
    block: Block,
    grid: Grid,
    prior: Prior,
    streams: NDArray[np.uint64],
    walkers: int,
    stopping: Stopping,
    modes: Modes | None = None,
    proposal: Proposal | None = None,
) -> Iterator[Draws]:
    """Sample every star of one block, whose peaks may be known already; yield stars as they finish."""
    start = Start(block, modes or find_modes(block, grid, prior), streams, proposal)
    for _, draws in sample_blocks([start], grid, prior, walkers, stopping):
        yield draws


def burn_in(start: Start, grid: Grid, prior: Prior, walkers: int) -> _Run:
    """Return the run of a block after the burn-in, its proposal frozen."""
    run = _first_run(start, grid, prior, walkers)
    first, last = LEARNING
    window = np.empty((last - first, *run.coords.shape))
    for step, _ in enumerate(run.steps(last)):
        if step >= first:
            window[step - first] = run.coords
    learn_others(window, prior.fit_av, run.proposal)
    run.accepted[:] = 0
    for _ in run.steps(TRYING):
        pass
    is_poor = run.accepted < POOR_ACCEPTANCE * TRYING * walkers
    run.independence = np.where(is_poor, LESS_INDEPENDENCE, INDEPENDENCE)
    run.accepted[:] = 0
    return run


def chain_bytes(n_steps: int, walkers: int, ndim: int) -> int:
    """Return the memory one star takes at its largest: its chain, the copies and orders made of it, its summaries."""
    return n_steps * walkers * 8 * (5 * ndim + 16)


def _first_run(start: Start, grid: Grid, prior: Prior, walkers: int) -> _Run:
    """Draw each star's first walkers from its proposal, and pull in those that fall outside the bounds."""
    block, modes, streams, _ = start
    proposal = start.proposal or fit_proposal(block, grid, prior, modes)
    coords = np.empty((len(streams) * walkers, modes.coords.shape[2]))
    _draw_walkers(proposal, prior.fit_av, streams, coords)
    log_prob_of = log_prob_function(block, grid, prior)
    log_prob = log_prob_of(coords)
    for _ in range(6):
        lost = ~np.isfinite(log_prob)
        if not lost.any():
            break
        _pull_in(coords, lost, modes)
        log_prob = log_prob_of(coords)
    return _Run(block, grid, prior, streams, walkers, proposal, coords, log_prob)


@kernel
def _draw_walkers(proposal, fit_av, streams, coords):
    n_stars = streams.shape[0]
    walkers = coords.shape[0] // n_stars
    scratch = make_scratch(proposal.centre.shape[1], walkers)
    for star in range(n_stars):
        draw_independent(proposal, star, fit_av, streams[star], scratch, coords[star * walkers : (star + 1) * walkers])


@kernel
def _pull_in(coords, lost, modes):
    """Move lost walkers most of the way to their star's highest peak."""
    walkers = coords.shape[0] // modes.n_modes.size
    for row in range(coords.shape[0]):
        if lost[row]:
            for k in range(coords.shape[1]):
                peak = modes.coords[row // walkers, 0, k]
                coords[row, k] = peak + 0.3 * (coords[row, k] - peak)


class _Sampler(emcee.EnsembleSampler):
    """emcee's sampler without a copy of the state of its own generator, which draws nothing here, in every step."""

    random_state = None


class _Run:
    """The stars of a block that are still sampled, and their chains so far: (S, P, n, W) of the natural parameters."""

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
        self.chain = np.empty((self.n_stars, coords.shape[1], 0, walkers))
        self.chain_log_prob = np.empty((self.n_stars, 0, walkers))
        self.accepted = np.zeros(self.n_stars, np.int64)
        self.independence = np.full(self.n_stars, INDEPENDENCE)

    @property
    def n_stars(self) -> int:
        return len(self.stars)

    @property
    def n_steps(self) -> int:
        return self.chain.shape[2]

    def steps(self, n_steps: int) -> Iterator[None]:
        """Take steps of every star's ensemble, and let the caller look at each."""
        move = BlockMove(self.streams, self.proposal, self.prior.fit_av, self.independence, self.accepted, self.walkers)
        log_prob_of = log_prob_function(self.block, self.grid, self.prior)
        sampler = _Sampler(*self.coords.shape, log_prob_of, moves=move, vectorize=True)
        state = emcee.State(self.coords, log_prob=self.log_prob)
        for reached in sampler.sample(state, iterations=n_steps, store=False, skip_initial_state_check=True):
            self.coords, self.log_prob = reached.coords, reached.log_prob
            yield

    def extend(self, length: int) -> None:
        """Sample until the chains are ``length`` steps long."""
        before = self.n_steps
        chain, log_prob = self.chain, self.chain_log_prob
        self.chain = np.empty((*chain.shape[:2], length, self.walkers))
        self.chain_log_prob = np.empty((self.n_stars, length, self.walkers))
        self.chain[:, :, :before], self.chain_log_prob[:, :before] = chain, log_prob
        for step, _ in enumerate(self.steps(length - before), start=before):
            _record(self.coords, self.log_prob, step, self.chain, self.chain_log_prob)

    def judge(self, stopping: Stopping) -> tuple[Draws | None, Block, _Run]:
        """Diagnose every star; return the finished ones and their block, and the run of those that go on."""
        n_steps, chain = self.n_steps, self.chain
        # Autocorrelation is cheap to look at; the rest only where it has become short enough.
        last = n_steps >= stopping.lengths()[-1]
        taus = autocorrelation_times(chain)
        candidates = np.flatnonzero(last | (n_steps >= MIN_TAUS * taus).all(axis=1))
        if not len(candidates):
            return None, self.block, self
        some = chain if len(candidates) == self.n_stars else chain[candidates]
        flat = some.reshape(len(candidates), chain.shape[1], -1)
        convergence = diagnose(some, np.argsort(flat, axis=-1), taus[candidates])
        enough = _long_enough(convergence, n_steps, stopping)
        done = np.flatnonzero(enough | last)
        if not len(done):
            return None, self.block, self
        leaving = candidates[done]
        draws = Draws(
            stars=self.stars[leaving],
            chain=flat[done],
            log_prob=self.chain_log_prob[leaving].reshape(len(leaving), -1),
            n_steps=n_steps,
            accept_frac=self.accepted[leaving] / (n_steps * self.walkers),
            convergence=convergence.take(done),
            converged=enough[done],
        )
        return draws, self.block.take(leaving), self.taking(np.setdiff1d(np.arange(self.n_stars), leaving))

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
        run.chain, run.chain_log_prob = self.chain[stars], self.chain_log_prob[stars]
        run.accepted, run.independence, run.stars = self.accepted[stars], self.independence[stars], self.stars[stars]
        return run


def _long_enough(convergence: Convergence, n_steps: int, stopping: Stopping) -> NDArray[np.bool_]:
    target = stopping.effective_samples
    enough = (
        (convergence.ess_bulk >= target).all(axis=1)
        & (convergence.ess_tail >= TAIL_SHARE * target).all(axis=1)
        & (n_steps >= MIN_TAUS * convergence.autocorr_steps).all(axis=1)
        & (convergence.rhat <= RHAT_LIMIT).all(axis=1)
        & ~convergence.stray_walker
    )
    return np.asarray(enough)


@kernel
def _record(coords, log_prob, step, chain, chain_log_prob):
    """Write the walkers' ln T, ln Omega and the rest, and their log densities, as a step of the chains."""
    n_stars, ndim, _, walkers = chain.shape
    for star in range(n_stars):
        first = star * walkers
        for w in range(walkers):
            ln_teff = LN_HEAT_K - log(coords[first + w, 0])
            chain[star, 0, step, w] = ln_teff
            chain[star, 1, step, w] = coords[first + w, 1] - ln_teff
            chain_log_prob[star, step, w] = log_prob[first + w]
        for k in range(2, ndim):
            for w in range(walkers):
                chain[star, k, step, w] = coords[first + w, k]
