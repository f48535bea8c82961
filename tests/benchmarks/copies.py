"""Many copies of a star, each with its own random numbers: is the scatter what the effective sample size says?

    python tests/benchmarks/copies.py [COPIES]

For each of five stars: the scatter over copies of the median and of the 97.5 % point of ln T, ln Omega and A_V, over
the scatter that independent draws as many as the effective sample size would have. The bulk size stands for the
median; for the 97.5 % point, the tail size. The expected scatter of a quantile is sqrt(p (1 - p) / N) over the density
there, the density from all copies' draws together.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from simulated import make_settings, simulate
from starkiln.stages.fit import fit
from starkiln.stages.model import build_model

KINDS = ("13 bands", "4 bands", "hot", "dusty", "faint")


def scatter_ratios(copies: int, seed: int = 5) -> np.ndarray:
    """Return (5 stars, 3 parameters, 2): observed over expected scatter of the median and the 97.5 % point."""
    settings = make_settings(
        model={
            "temperature_k": [2500.0, 40000.0],
            "radius_rsun": [0.1, 20.0],
            "distance": {"length_scale_pc": 300.0},
        },
    )
    model = build_model(settings)
    stars, truth = simulate(settings, model, 400, seed, noise=(0.003, 0.03))
    strong = (stars.flux_jy > 8.0 * stars.error_jy).sum(axis=1) >= 8
    weak = (stars.flux_jy > 5.0 * stars.error_jy).sum(axis=1) == 3
    cool = truth["teff"] < 9000.0
    chosen = [
        np.flatnonzero(strong & cool & (truth["av"] < 0.2))[0],
        np.flatnonzero(strong & cool)[1],
        np.flatnonzero(strong & (truth["teff"] > 20000.0))[0],
        np.flatnonzero(strong & cool & (truth["av"] > 0.5))[0],
        np.flatnonzero(weak)[0],
    ]
    ratios = np.empty((5, 3, 2))
    for place, star in enumerate(chosen):
        many = stars.at(np.full(copies, star))
        many.ids[:] = [b"copy %d" % k for k in range(copies)]
        if KINDS[place] == "4 bands":
            many.usable[:] = np.isin(np.arange(many.usable.shape[1]), [1, 2, 5, 8])
        ratios[place] = _ratios(many, model, settings)
    return ratios


def _ratios(many, model, settings) -> np.ndarray:
    n = len(many)
    points, sizes = np.empty((n, 3, 2)), np.empty((n, 3, 2))
    pooled = []
    for fitted in fit(many, model, settings):
        rows = fitted.draws.stars
        points[rows] = np.quantile(fitted.draws.chain, [0.5, 0.975], axis=-1).transpose(1, 2, 0)
        sizes[rows, :, 0] = fitted.draws.convergence.ess_bulk
        sizes[rows, :, 1] = fitted.draws.convergence.ess_tail
        pooled.append(fitted.draws.chain[:, :, ::4].transpose(1, 0, 2).reshape(3, -1))
    draws = np.concatenate(pooled, axis=1)
    ratio = np.empty((3, 2))
    for k, p in enumerate((0.5, 0.975)):
        near = 0.01 if p == 0.5 else 0.005
        low, high = np.quantile(draws, [p - near, p + near], axis=-1)
        density = 2.0 * near / (high - low)
        expected = np.sqrt(p * (1.0 - p) / np.median(sizes[:, :, k], axis=0)) / density
        ratio[:, k] = points[:, :, k].std(axis=0, ddof=1) / expected
    return ratio


def main() -> None:
    print("ln T, ln Omega, A_V")
    ratios = scatter_ratios(int(sys.argv[1]) if len(sys.argv) > 1 else 200)
    for kind, of_star in zip(KINDS, ratios, strict=True):
        print(f"{kind:9s} median: {np.round(of_star[:, 0], 2)}   97.5 %: {np.round(of_star[:, 1], 2)}")
    print(f"largest {ratios.max():.2f}")


if __name__ == "__main__":
    main()
