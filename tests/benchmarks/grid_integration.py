"""Sampled posteriors against grid integration, on stars drawn from the priors.

Stars with at least three bands above 5 sigma: below that the posterior runs from bound to bound, and a grid fine
enough for it has too many points.

    python tests/benchmarks/grid_integration.py [STARS]
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from plain_posterior import integrate
from simulated import make_settings, simulate
from starkiln.inference.summaries import quantiles
from starkiln.stages.fit import fit
from starkiln.stages.model import build_model

SAMPLES = 10_000


def offsets(n: int, seed: int = 11) -> tuple[np.ndarray, np.ndarray]:
    """Return medians' offsets in sigma and widths' ratios minus 1, (n, 3) each: ln T, ln Omega, A_V."""
    settings = make_settings(
        model={
            "temperature_k": [2500.0, 20000.0],
            "radius_rsun": [0.1, 20.0],
            "distance": {"length_scale_pc": 300.0},
        },
        sampling={"effective_samples": SAMPLES},
    )
    model = build_model(settings)
    stars, _ = simulate(settings, model, 3 * n, seed, noise=(0.003, 0.03))
    seen = (stars.flux_jy > 5.0 * stars.error_jy).sum(axis=1) >= 3
    stars = stars.at(np.flatnonzero(seen)[:n])
    median, width = np.empty((n, 3)), np.empty((n, 3))
    for fitted in fit(stars, model, settings):
        for place, star in enumerate(fitted.draws.stars):
            chain = fitted.draws.chain[place]
            exact = integrate(stars, star, model, settings, chain, nodes=72)
            found = quantiles(chain)
            half = 0.5 * (exact[:, 3] - exact[:, 1])
            median[star] = (found[:, 2] - exact[:, 2]) / half
            width[star] = 0.5 * (found[:, 3] - found[:, 1]) / half - 1.0
    return median, width


def main() -> None:
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 100
    median, width = offsets(n)
    for place, name in enumerate(("ln T", "ln Omega", "A_V")):
        print(
            f"{name:9s} medians: rms {np.sqrt((median[:, place] ** 2).mean()):.4f} sigma, "
            f"worst {np.abs(median[:, place]).max():.3f};  widths: rms {np.sqrt((width[:, place] ** 2).mean()):.2%}, "
            f"worst {np.abs(width[:, place]).max():.2%}"
        )
    print("worst stars:", np.abs(median).max(axis=1).argsort()[-4:], np.abs(width).max(axis=1).argsort()[-4:])


if __name__ == "__main__":
    main()
