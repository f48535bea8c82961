"""Effective samples per core-second: the block ensemble beside stock emcee, in one run, on the same posterior.

The ensemble runs on bare blackbodies, as stock emcee does, and on stars with departures and a common factor z_1, one
more parameter and a longer likelihood: with smooth invented departures, and with the built-in ones, whose structure
above 9000 K gives many hot stars several peaks in temperature.

    python tests/benchmarks/samplers.py [STARS]

Thirteen bands, A_V fitted, the production likelihood. Stock emcee runs one ``EnsembleSampler(vectorize=True)`` a star
with the same kernel, 32 walkers started from the same Laplace fit, 200 steps of burn-in, then 2,000 steps. Both times
are CPU times of this process and hold everything from the data to the end of the chains, start and burn-in included.
Effective sizes are arviz's rank-normalised bulk sizes, the least of the parameters, for both.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import json
import sys
import time
import warnings
from pathlib import Path
from tempfile import TemporaryDirectory

import emcee
import numpy as np

with warnings.catch_warnings():
    warnings.simplefilter("ignore")
    import arviz

sys.path.insert(0, str(Path(__file__).parents[1]))

from simulated import invented_departures, make_settings, simulate
from starkiln.inference.ensemble import Stopping, log_prob_function, sample_block
from starkiln.inference.posterior import Block
from starkiln.inference.start import find_modes
from starkiln.inference.streams import star_streams
from starkiln.physics.departures import write_departures
from starkiln.stages.fit import pack_block
from starkiln.stages.model import FitModel, build_model

WALKERS = 32
STOCK_MOVES = {
    "stretch": lambda: emcee.moves.StretchMove(),
    "DE + snooker": lambda: [(emcee.moves.DEMove(), 0.8), (emcee.moves.DESnookerMove(), 0.2)],
}


def bulk_ess(chain: np.ndarray) -> float:
    """Return the least rank-normalised bulk effective size of a chain (P, walkers, steps)."""
    return min(float(arviz.ess(values, method="bulk")) for values in chain)


def block_ensemble(block, model, stopping: Stopping) -> dict[str, float]:
    ids = [b"%d" % k for k in range(len(block.n_bands))]
    started = time.process_time()
    finished = list(sample_block(block, model.grid, model.prior, star_streams(ids, 1, b"x"), WALKERS, stopping))
    seconds = time.process_time() - started
    ess = [
        bulk_ess(chain.reshape(len(chain), draws.n_steps, WALKERS).transpose(0, 2, 1))
        for draws in finished
        for chain in draws.chain
    ]
    return {"ess": sum(ess), "seconds": seconds, "stars": len(ess)}


def stock_emcee(block, model, moves, stars: int, burn_in: int = 200, steps: int = 2000) -> dict[str, float]:
    rng = np.random.default_rng(3)
    ess, seconds = 0.0, 0.0
    for star in range(stars):
        started = time.process_time()
        one = block.take(np.array([star]))
        modes = find_modes(one, model.grid, model.prior)
        log_prob = log_prob_function(one, model.grid, model.prior)
        start = rng.multivariate_normal(modes.coords[0, 0], modes.covariance[0, 0], 20 * WALKERS)
        start = start[np.isfinite(log_prob(start))][:WALKERS]
        sampler = emcee.EnsembleSampler(WALKERS, 3, log_prob, moves=moves, vectorize=True)
        state = emcee.State(start, random_state=np.random.RandomState(star).get_state())
        state = sampler.run_mcmc(state, burn_in)
        sampler.reset()
        sampler.run_mcmc(state, steps)
        seconds += time.process_time() - started
        ess += bulk_ess(sampler.get_chain().transpose(2, 1, 0))
    return {"ess": ess, "seconds": seconds, "stars": stars}


def simulated(n: int, **photosphere: str) -> tuple[Block, FitModel]:
    """Return stars of a model as a block."""
    settings = make_settings(
        model={
            "temperature_k": [2500.0, 20000.0],
            "radius_rsun": [0.1, 20.0],
            "distance": {"length_scale_pc": 300.0},
            **photosphere,
        },
    )
    model = build_model(settings)
    stars, _ = simulate(settings, model, n, 3, noise=(0.003, 0.03))
    return pack_block(stars, model, settings), model


def with_factor(n: int, name: str) -> dict[str, float]:
    """Return what the ensemble does with departures and their common factor."""
    with TemporaryDirectory() as folder:
        invented = Path(folder) / "invented.ecsv"
        write_departures(invented_departures(), invented)
        departures = str(invented) if name == "invented" else "builtin"
        block, model = simulated(n, photosphere="calibrated", departures=departures)
    block_ensemble(block.take(np.arange(8)), model, Stopping())
    return block_ensemble(block, model, Stopping())


def main() -> None:
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 512
    block, model = simulated(n)
    block_ensemble(block.take(np.arange(8)), model, Stopping())
    results = {
        "block ensemble": block_ensemble(block, model, Stopping()),
        **{f"the same, z_1, {name}": with_factor(n, name) for name in ("invented", "built-in")},
    }
    for name, moves in STOCK_MOVES.items():
        results[f"emcee, {name}"] = stock_emcee(block, model, moves(), stars=min(n, 24))
    ours = results["block ensemble"]["ess"] / results["block ensemble"]["seconds"]
    for name, result in results.items():
        rate = result["ess"] / result["seconds"]
        print(
            f"{name:24s} {result['stars']:5d} stars  {result['ess'] / result['stars']:7.0f} ESS/star  "
            f"{rate:10.0f} ESS per core-second  ratio {ours / rate:6.1f}"
        )
    print(json.dumps(results))


if __name__ == "__main__":
    main()
