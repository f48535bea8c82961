"""Effective samples and stars per core-second: the block ensemble beside general samplers, on the same posterior.

Chains of the others start from the Laplace fit of the highest peak, ours from its own proposal. Times are CPU times of
this process, kept on one core, from the data to the end of the chains: the search for the peaks, burn-in or adaptation,
and sampling. Effective sizes are arviz's rank-normalised ones of ln T, ln Omega, A_V and z_1, the least of the
parameters, mean over the stars; rates are by the bulk.

What another sampler would need to reach the effective size of our chains: its start and its burn-in as they are, once a
star and not lengthened with the chain, and as much of its sampling as brings the mean bulk size, in proportion. The
same is told for a bulk size of 1,000, which our chains are asked for and pass, since they go on until their tails and
their autocorrelation times are known well enough; ours counts as it is.
"""

from __future__ import annotations

import warnings
from dataclasses import asdict, dataclass, replace
from functools import partial
from typing import Any

import emcee
import numpy as np
from numpy.typing import NDArray

from benchmarks.speed import nuts
from benchmarks.speed.cases import CASES, SEED, Case, make_case
from benchmarks.speed.common import Clock, Row, Suite, one_core, print_rows
from benchmarks.speed.plain import PlainPosterior, check_plain, natural
from starkiln.inference.ensemble import Start, Stopping, log_prob_function, sample_blocks
from starkiln.inference.posterior import Block, n_parameters
from starkiln.inference.start import find_modes
from starkiln.inference.streams import star_streams
from starkiln.stages.fit import LARGEST_BLOCK

WALKERS = 32
BURN_IN = 200
STEPS = 2_000
MOVES = {
    "stretch": lambda: emcee.moves.StretchMove(),
    "DE + snooker": lambda: [(emcee.moves.DEMove(), 0.8), (emcee.moves.DESnookerMove(), 0.2)],
}
OURS, KERNEL_LOOP, PLAIN_LOOP = "block ensemble", "emcee, stretch", "emcee, stretch, NumPy"
STOCK_STARS, PLAIN_STARS, NUTS_STARS = 8, 2, 32
ASKED = Stopping().effective_samples


@dataclass
class Outcome:
    """What a sampler did with some stars: lists hold a number a star, seconds are sums."""

    sampler: str
    bulk: list[float]
    tail: list[float]
    start_s: float
    burn_in_s: float
    sampling_s: float
    compile_s: float = 0.0

    @property
    def core_s(self) -> float:
        return self.start_s + self.burn_in_s + self.sampling_s

    def stars_per_core_s(self, target: float) -> float:
        """Return the stars per core-second if chains had this mean bulk size; our own are as long as they are."""
        longer = 1.0 if self.sampler == OURS else target / float(np.mean(self.bulk))
        return len(self.bulk) / (self.start_s + self.burn_in_s + longer * self.sampling_s)

    def row(self, case: str, target: float) -> Row:
        """Return the outcome as a row of the table; ``target`` is the bulk size that our chains reach."""
        stars = len(self.bulk)
        return {
            "case": case,
            "sampler": self.sampler,
            "stars": stars,
            "bulk": float(np.mean(self.bulk)),
            "tail": float(np.mean(self.tail)),
            "ess_per_core_s": sum(self.bulk) / self.core_s,
            "stars_per_core_s": stars / self.core_s,
            "same_ess_stars_per_core_s": self.stars_per_core_s(target),
            "asked_ess_stars_per_core_s": self.stars_per_core_s(ASKED),
            "seconds": asdict(self),
        }


def effective_sizes(chain: NDArray[np.float64]) -> tuple[float, float]:
    """Return the least bulk and tail effective sizes of the parameters of a chain (P, walkers, steps)."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import arviz
    return tuple(min(float(arviz.ess(values, method=kind)) for values in chain) for kind in ("bulk", "tail"))


def block_ensemble(case: Case) -> Outcome:
    """Sample all stars of a case with the package's sampler, in blocks as a part is."""
    block, grid, prior = case.block, case.model.grid, case.model.prior
    stars = np.arange(len(block.n_bands))
    clock = Clock()
    starts = []
    for some in np.split(stars, range(LARGEST_BLOCK, len(stars), LARGEST_BLOCK)):
        streams = star_streams([b"%d" % k for k in some], 1, b"x")
        starts.append(Start(block.take(some), find_modes(block.take(some), grid, prior), streams))
    start_s = clock.lap()
    sampling_s, of_star = 0.0, {}
    for _, draws in sample_blocks(starts, grid, prior, WALKERS, Stopping()):
        sampling_s += clock.lap()
        for star, chain in zip(draws.stars, draws.chain, strict=True):
            of_star[star] = effective_sizes(chain.reshape(len(chain), draws.n_steps, WALKERS).transpose(0, 2, 1))
        clock.lap()
    sizes = np.array([of_star[star] for star in stars])
    return Outcome(OURS, *sizes.T.tolist(), start_s, 0.0, sampling_s)


def laplace_walkers(one: Block, case: Case, walkers: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """Return walkers about the first peak of the star of a block of one, all inside the bounds."""
    modes = find_modes(one, case.model.grid, case.model.prior)
    log_prob = log_prob_function(one, case.model.grid, case.model.prior)
    found = np.empty((0, modes.coords.shape[2]))
    while len(found) < walkers:
        drawn = rng.multivariate_normal(modes.coords[0, 0], modes.covariance[0, 0], 20 * walkers)
        found = np.concatenate([found, drawn[np.isfinite(log_prob(drawn))]])
    return found[:walkers]


def stock_emcee(case: Case, stars: int, name: str, moves: Any, plain: bool = False) -> Outcome:
    """Sample the first stars of a case one by one with emcee as it comes.

    Parameters
    ----------
    plain
        Whether the log-posterior is the one in NumPy, called for each walker, instead of the kernel.
    """
    model, rng = case.model, np.random.default_rng(SEED)
    outcome = Outcome(name, [], [], 0.0, 0.0, 0.0)
    for star in range(stars):
        clock = Clock()
        one = case.block.take(np.array([star]))
        start = laplace_walkers(one, case, WALKERS, rng)
        log_prob = log_prob_function(one, model.grid, model.prior)
        if plain:
            log_prob = PlainPosterior(one, 0, model.grid, model.prior)
        sampler = emcee.EnsembleSampler(
            WALKERS, n_parameters(model.grid, model.prior), log_prob, moves=moves(), vectorize=not plain
        )
        state = emcee.State(start, random_state=np.random.RandomState(star).get_state())
        outcome.start_s += clock.lap()
        state = sampler.run_mcmc(state, BURN_IN)
        sampler.reset()
        outcome.burn_in_s += clock.lap()
        sampler.run_mcmc(state, STEPS)
        outcome.sampling_s += clock.lap()
        bulk, tail = effective_sizes(natural(sampler.get_chain()).transpose(2, 1, 0))
        outcome.bulk.append(bulk)
        outcome.tail.append(tail)
    return outcome


def no_u_turn(case: Case, stars: int) -> Outcome:
    """Sample the first stars of a case with NUTS; its compilation is told apart."""
    clock = Clock()
    block = case.block.take(np.arange(stars))
    rng = np.random.default_rng(SEED)
    walkers = np.stack([laplace_walkers(block.take(np.array([k])), case, 200, rng) for k in range(stars)])
    start_s = clock.lap()
    done = nuts.sample(walkers, block, case.model.grid, case.model.prior)
    sizes = np.array([effective_sizes(chain) for chain in done.chains])
    return Outcome(
        nuts.NAME, *sizes.T.tolist(), start_s + done.start_s, done.warm_up_s, done.sampling_s, done.compile_s
    )


def check_posteriors(case: Case) -> dict[str, float]:
    """Return by how much the other log-posteriors differ from the kernel; raises where that is too much."""
    rng, stars = np.random.default_rng(SEED + 1), np.arange(min(4, len(case.block.n_bands)))
    block, grid, prior = case.block.take(stars), case.model.grid, case.model.prior
    points = np.stack([laplace_walkers(block.take(np.array([k])), case, 50, rng) for k in stars])
    wide = points + 3.0 * (points[:, ::-1] - points.mean(axis=1, keepdims=True))
    worst = {"NumPy": check_plain(np.concatenate([points, wide], axis=1), block, grid, prior)}
    if nuts.is_installed():
        worst["JAX"] = nuts.check(points, block, grid, prior)
    return worst


def contenders(case: Case, stars: int, names: tuple[str, ...] | None = None) -> list[Outcome]:
    """Return the outcome of each sampler, or of those named, with the stars of a case."""
    block_ensemble(replace(case, block=case.block.take(np.arange(min(stars, LARGEST_BLOCK)))))
    ways = {OURS: partial(block_ensemble, case)}
    for name, moves in MOVES.items():
        name = f"emcee, {name}"
        ways[name] = partial(stock_emcee, case, min(stars, STOCK_STARS), name, moves)
    ways[PLAIN_LOOP] = partial(stock_emcee, case, min(stars, PLAIN_STARS), PLAIN_LOOP, MOVES["stretch"], plain=True)
    if nuts.is_installed():
        ways[nuts.NAME] = partial(no_u_turn, case, min(stars, NUTS_STARS))
    with one_core():
        return [way() for name, way in ways.items() if names is None or name in names]


def rows_of(case: Case, outcomes: list[Outcome]) -> list[Row]:
    """Return the rows of the table of a case, with how many times our rates are each sampler's."""
    target = float(np.mean(outcomes[0].bulk))
    rows = [outcome.row(case.name, target) for outcome in outcomes]
    for row in rows:
        row["ess_ratio"] = rows[0]["ess_per_core_s"] / row["ess_per_core_s"]
        for name in ("same_ess", "asked_ess"):
            row[f"{name}_ratio"] = rows[0]["stars_per_core_s"] / row[f"{name}_stars_per_core_s"]
    return rows


COLUMNS = {
    "case": "case",
    "sampler": "sampler",
    "stars": "stars",
    "bulk": "bulk/star",
    "tail": "tail/star",
    "ess_per_core_s": "ESS/core-s",
    "ess_ratio": "ratio",
    "stars_per_core_s": "stars/core-s",
    "same_ess_stars_per_core_s": "at our ESS",
    "same_ess_ratio": "ratio",
    "asked_ess_stars_per_core_s": "at ESS 1,000",
    "asked_ess_ratio": "ratio",
}


def measure(suite: Suite) -> dict[str, Any]:
    """Compare the samplers on each case."""
    rows, differences = [], {}
    for name, what in CASES.items():
        case = make_case(name, suite.stars, suite.room(f"samplers-{name}"))
        differences[name] = check_posteriors(case)
        told = ", ".join(f"{other} {worst:.1e}" for other, worst in differences[name].items())
        print(f"{name}: {what}; log-posteriors differ from the kernel's by {told} at most")
        of_case = rows_of(case, contenders(case, suite.stars))
        print_rows(of_case, COLUMNS)
        rows += of_case
    if not nuts.is_installed():
        print(f"{nuts.NAME} is left out: {nuts.MISSING}")
    return {"rows": rows, "differences": differences}
