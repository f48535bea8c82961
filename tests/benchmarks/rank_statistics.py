"""Simulation-based calibration (Talts et al. 2018, arXiv:1804.06788): the rank of the truth among posterior draws.

    python tests/benchmarks/rank_statistics.py [STARS] [CONFIGURATION ...]

Truth comes from the priors, data from the likelihood: outliers, floors, upper limits, departures with a common factor,
own scatter and scatter about the scale, jitter; invented departures, and the built-in ones. If sampler and likelihood
are right, the rank of the truth among draws of its posterior is uniform. Every star counts, also one that nothing has
detected: no cut, on data or on truth, touches the ranks.

Chains run to a bulk effective size of 1,000; 63 draws, evenly spaced in steps and each of another walker, leave 64
ranks. The bounds on R can make the distance step take one draw of the photometry twice, so equal values are possible;
a tie is broken by lot. Each histogram of 32 bins is tested against the uniform one by chi square, and a family of
tests by Holm's correction: the bar is no corrected p below 0.01.

Factors have the width of dwarfs for all: the fit widens those of giants by a look at the data, which is no part of a
generative model.
"""

from __future__ import annotations

import sys
import time
from dataclasses import replace
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chisquare

sys.path.insert(0, str(Path(__file__).parents[1]))

from simulated import THIRTEEN_BANDS, invented_departures, make_settings, simulate
from starkiln.inference.ensemble import Stopping, sample_block
from starkiln.inference.streams import star_streams
from starkiln.physics.departures import LN_TEFF_NODES, write_departures
from starkiln.stages.derive import derive
from starkiln.stages.fit import pack_block
from starkiln.stages.model import build_model

DRAWS = 63
BINS = 32
BAR = 0.01
BLOCK = 250
SEED = 41
TAU, GAMMA = np.full(len(LN_TEFF_NODES), 0.012), np.full(len(LN_TEFF_NODES), 0.02)
FOUR_BANDS = ("panstarrs_g", "gaia_dr3_rp", "2mass_j", "2mass_ks")
NO_DUST = {"extinction": {"prior": "fixed"}}
POOR_PARALLAX_MAS = (0.3, 5.0)

CONFIGURATIONS: dict[str, dict[str, Any]] = {
    "13 bands": {},
    "13 bands, no dust": {"model": NO_DUST},
    "13 bands, poor parallaxes": {"parallax_error_mas": POOR_PARALLAX_MAS},
    "13 bands, jitter": {"model": {"jitter": True}},
    "13 bands, blackbody": {"model": {"photosphere": "blackbody"}},
    "13 bands, built-in": {"departures": "builtin"},
    "4 bands": {"bands": FOUR_BANDS},
    "4 bands, no dust": {"bands": FOUR_BANDS, "model": NO_DUST},
    "4 bands, poor parallaxes": {"bands": FOUR_BANDS, "parallax_error_mas": POOR_PARALLAX_MAS},
    "4 bands, built-in": {"bands": FOUR_BANDS, "departures": "builtin"},
}


def ranks(n: int, configuration: dict[str, Any], seed: int = SEED) -> dict[str, NDArray[np.int64]]:
    """Return the rank of each star's truth among 63 draws, 0 to 63, by quantity."""
    bands = configuration.get("bands", THIRTEEN_BANDS)
    with TemporaryDirectory() as folder:
        departures = Path(folder) / "invented.ecsv"
        off_scale = {"temperature_scatter": TAU, "luminosity_scatter": GAMMA}
        write_departures(replace(invented_departures(bands), **off_scale), departures)
        settings = make_settings(
            bands,
            model={
                "photosphere": "calibrated",
                "departures": configuration.get("departures", str(departures)),
                "temperature_k": [2500.0, 20000.0],
                "radius_rsun": [0.1, 20.0],
                "distance": {"length_scale_pc": 300.0},
            }
            | configuration.get("model", {}),
        )
        model = build_model(settings)
    errors = {key: configuration[key] for key in ("parallax_error_mas",) if key in configuration}
    stars, truth = simulate(settings, model, n, seed, shallow=0.1, **errors)
    lots = np.random.default_rng(seed + 1)
    walkers, stopping = settings.sampling.walkers, Stopping(settings.sampling.effective_samples)
    found: dict[str, NDArray[np.int64]] = {}
    for first in range(0, n, BLOCK):
        some = stars.take(slice(first, first + BLOCK))
        block = pack_block(some, model, settings)
        streams = star_streams(some.ids, settings.run.seed, b"photometry")
        for draws in sample_block(block, model.grid, model.prior, streams, walkers, stopping):
            derived = derive(some.at(draws.stars), draws, model, settings)
            rows = first + draws.stars
            places = thinned_places(draws.n_steps, walkers)
            for name, values in reported(derived, model).items():
                true = truth[name][rows, None]
                true = true if name in ("av", "z1") else np.log(true)
                thin = values[:, places]
                ties = lots.integers(0, (thin == true).sum(axis=1) + 1)
                found.setdefault(name, np.full(n, -1))[rows] = (thin < true).sum(axis=1) + ties
    assert all((values >= 0).all() for values in found.values())
    return found


def thinned_places(n_steps: int, walkers: int) -> NDArray[np.int64]:
    """Return the places of 63 draws in a flat chain, step by step, each of the next walker."""
    steps = np.linspace(0, n_steps - 1, DRAWS).astype(np.int64)
    return np.asarray(steps * walkers + np.arange(DRAWS) % walkers)


def reported(derived: Any, model: Any) -> dict[str, NDArray[np.float64]]:
    """Return the draws of each quantity that is tested, in the terms in which it is ranked."""
    names = {"teff": "ln_teff", "ang_diam": "ln_ang_diam", "dist": "ln_dist", "radius": "ln_radius", "lum": "ln_lum"}
    draws = {name: getattr(derived, field) for name, field in names.items()}
    if model.prior.fit_av:
        draws["av"] = derived.av
    if len(derived.z):
        draws["z1"] = derived.z[0]
    return draws


def chance_of_uniform(values: NDArray[np.int64], bins: int = BINS) -> float:
    """Return the p-value of the chi-square test of ranks 0 to 63 against the uniform distribution."""
    return float(chisquare(np.bincount(values * bins // (DRAWS + 1), minlength=bins)).pvalue)


def holm(chances: list[float]) -> NDArray[np.float64]:
    """Return p-values corrected for their number (Holm 1979), in the order given."""
    order = np.argsort(chances)
    corrected = np.empty(len(chances))
    stepped = np.asarray(chances)[order] * np.arange(len(chances), 0, -1)
    corrected[order] = np.minimum(np.maximum.accumulate(stepped), 1.0)
    return corrected


def main() -> None:
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 2000
    chosen = sys.argv[2:] or list(CONFIGURATIONS)
    chances: dict[tuple[str, str], float] = {}
    for configuration in chosen:
        started = time.process_time()
        # Seeds of their own: stars in common would have the same luck in every histogram.
        found = ranks(n, CONFIGURATIONS[configuration], seed=SEED + list(CONFIGURATIONS).index(configuration))
        for name, values in found.items():
            chances[configuration, name] = chance_of_uniform(values)
            counts = np.bincount(values // 8, minlength=8)
            print(f"{configuration:26s} {name:9s} p = {chances[configuration, name]:.4f}  eighths {counts.tolist()}")
        print(f"{configuration}: {n} stars, {time.process_time() - started:.0f} s of processor time", flush=True)
    corrected = holm(list(chances.values()))
    worst = int(np.argmin(corrected))
    print(
        f"{len(chances)} histograms; least p {min(chances.values()):.4f}, after Holm's correction "
        f"{corrected[worst]:.3f} ({', '.join(list(chances)[worst])}); below {BAR}: {(corrected < BAR).sum()}"
    )


if __name__ == "__main__":
    main()
