"""The least that a draw can cost: one evaluation of the kernel, at positions as the ensemble proposes them."""

from __future__ import annotations

import time
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchmarks.speed.cases import CASES, SEED, Case, make_case
from benchmarks.speed.common import Row, Suite, one_core, print_rows
from benchmarks.speed.samplers import WALKERS, block_ensemble
from starkiln.inference.ensemble import Stopping, log_prob_function, sample_block
from starkiln.inference.posterior import HEAT_K
from starkiln.inference.streams import star_streams

LANES = WALKERS // 2
LEAST_S = 0.5
SETS = 16


def positions(case: Case) -> NDArray[np.float64]:
    """Return sets (SETS, S * LANES, ndim) of walkers drawn from every star's posterior."""
    block, model, rng = case.block, case.model, np.random.default_rng(SEED)
    streams = star_streams([b"%d" % k for k in range(len(block.n_bands))], 1, b"x")
    finished = sample_block(block, model.grid, model.prior, streams, WALKERS, Stopping(max_steps=256))
    drawn = {}
    for draws in finished:
        for star, chain in zip(draws.stars, draws.chain, strict=True):
            some = rng.choice(chain.shape[1], (SETS, LANES))
            drawn[star] = np.moveaxis(chain[:, some], 0, -1)
    coords = np.concatenate([drawn[star] for star in range(len(drawn))], axis=1)
    ln_teff = coords[..., 0].copy()
    coords[..., 0], coords[..., 1] = HEAT_K / np.exp(ln_teff), coords[..., 1] + ln_teff
    return coords


def seconds_per_evaluation(case: Case) -> float:
    """Return the CPU seconds of one evaluation of the log-posterior, LANES walkers a star side by side."""
    sets = positions(case)
    log_prob = log_prob_function(case.block, case.model.grid, case.model.prior)
    log_prob(sets[0])
    began, calls = time.process_time(), 0
    while (passed := time.process_time() - began) < LEAST_S:
        log_prob(sets[calls % SETS])
        calls += 1
    return passed / (calls * sets.shape[1])


def floor_row(case: Case) -> Row:
    """Return the floor of a case, and how far our rate is above it."""
    cost_s = seconds_per_evaluation(case)
    ours = block_ensemble(case)
    rate = sum(ours.bulk) / ours.core_s
    return {
        "case": case.name,
        "evaluation_us": 1e6 * cost_s,
        "draws_per_core_s": 1.0 / cost_s,
        "ess_per_core_s": rate,
        "share": rate * cost_s,
    }


COLUMNS = {
    "case": "case",
    "evaluation_us": "us an evaluation",
    "draws_per_core_s": "independent draws/core-s",
    "ess_per_core_s": "our ESS/core-s",
    "share": "ours over the floor's",
}


def measure(suite: Suite) -> dict[str, Any]:
    """Measure the floor of each case."""
    with one_core():
        rows = [floor_row(make_case(name, suite.stars, suite.room(f"floor-{name}"))) for name in CASES]
    print_rows(rows, COLUMNS)
    return {"rows": rows}
