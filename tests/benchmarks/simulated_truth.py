"""Coverage of the intervals on stars whose truth is drawn from the priors.

    python tests/benchmarks/simulated_truth.py [STARS]

Outliers, floors, upper limits and poor parallaxes are all in the simulation. Stars below two bands at 3 sigma have no
interval to test and are left out, a cut on the data alone.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from simulated import make_settings, simulate
from starkiln.inference.summaries import quantiles
from starkiln.stages.derive import derive
from starkiln.stages.fit import fit
from starkiln.stages.model import build_model

QUANTITIES = ("teff", "ang_diam", "radius", "lum", "dist", "av")


def coverage(n: int, seed: int = 23) -> tuple[int, dict[str, tuple[float, float]]]:
    """Return the stars tested, and by quantity the shares inside the 68 and 95 % intervals."""
    settings = make_settings(
        model={
            "temperature_k": [2500.0, 20000.0],
            "radius_rsun": [0.1, 20.0],
            "distance": {"length_scale_pc": 300.0},
        },
    )
    model = build_model(settings)
    stars, truth = simulate(settings, model, n, seed, shallow=0.1)
    inside68 = {name: np.zeros(n, bool) for name in QUANTITIES}
    inside95 = {name: np.zeros(n, bool) for name in QUANTITIES}
    for fitted in fit(stars, model, settings):
        rows = fitted.draws.stars
        derived = derive(stars.at(rows), fitted.draws, model, settings)
        for name in QUANTITIES:
            draws = derived.av if name == "av" else getattr(derived, f"ln_{name}")
            value = truth[name][rows] if name == "av" else np.log(truth[name][rows])
            q = quantiles(draws)
            inside68[name][rows] = (q[:, 1] < value) & (value < q[:, 3])
            inside95[name][rows] = (q[:, 0] < value) & (value < q[:, 4])
    seen = ((stars.flux_jy > 3.0 * stars.error_jy) & ~stars.limit).sum(axis=1) >= 2
    shares = {name: (float(inside68[name][seen].mean()), float(inside95[name][seen].mean())) for name in QUANTITIES}
    return int(seen.sum()), shares


def main() -> None:
    tested, shares = coverage(int(sys.argv[1]) if len(sys.argv) > 1 else 4400)
    print(f"{tested} stars")
    for name, (share68, share95) in shares.items():
        print(f"{name:9s} inside 68 %: {share68:.2%}   inside 95 %: {share95:.2%}")


if __name__ == "__main__":
    main()
