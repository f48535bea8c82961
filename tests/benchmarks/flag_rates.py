"""How often each flag is raised: on simulated stars as they are, and with a fault put into every one of them.

    python tests/benchmarks/flag_rates.py [STARS]

The stars come from the model itself: a calibrated photosphere with a common factor, outliers in 2 % of the bands, 3000
to 9000 K, 15 bands from GALEX (NUV), Gaia, Pan-STARRS, 2MASS and WISE (W1 to W3). So the column "none" has the rates of
false alarms, the others the rates at which a fault is caught:

- blend 1, blend 1/2: a second star of 0.7 times the temperature at the same distance, of the same or half the
  luminosity;
- hot companion: a blackbody of 15000 K and 0.015 solar radii;
- disc 1000 K, disc 300 K: a blackbody with 1 % of the star's luminosity;
- zero point: panstarrs_r 0.1 mag too bright;
- saturated: panstarrs_i 30 % too faint.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
from numpy.typing import NDArray

sys.path.insert(0, str(Path(__file__).parents[1]))

from simulated import THIRTEEN_BANDS, as_table, invented_departures, make_settings, simulate
from starkiln.flags import FLAGS
from starkiln.physics.bandtable import build_band_table, ln_flux
from starkiln.physics.constants import MAS_PER_RAD, PARSEC_M, RSUN_M
from starkiln.physics.departures import write_departures
from starkiln.settings import Settings
from starkiln.stages.model import FitModel, build_model
from starkiln.stages.process import process_part
from starkiln.stages.stars import Stars

BANDS = ("galex_nuv", *THIRTEEN_BANDS, "wise_w3")
DISC_LUMINOSITY = 0.01
COOLER = 0.7
ALWAYS_SHOWN = ("poor_fit", "odd_photosphere", "band_outlier", "infrared_excess", "ultraviolet_excess")

Fluxes = NDArray[np.float64]
Fault = Callable[[Fluxes, dict[str, Fluxes], FitModel], Fluxes]


def survey() -> tuple[Settings, Settings, FitModel]:
    """Return the settings to fit with, those to simulate with, and the model."""
    with TemporaryDirectory() as folder:
        departures = Path(folder) / "invented.ecsv"
        write_departures(invented_departures(BANDS), departures)
        settings = make_settings(
            BANDS,
            model={
                "photosphere": "calibrated",
                "departures": str(departures),
                "temperature_k": [2000.0, 20000.0],
                "radius_rsun": [0.1, 20.0],
                "distance": {"length_scale_pc": 300.0},
            },
            sampling={"effective_samples": 300},
        )
        model = build_model(settings)
    narrow = settings.model.model_copy(update={"temperature_k": (3000.0, 9000.0), "radius_rsun": (0.2, 3.0)})
    return settings, settings.model_copy(update={"model": narrow}), model


def ln_omega(truth: dict[str, Fluxes]) -> Fluxes:
    """Return ln (R/d)^2 of the stars."""
    return 2.0 * np.log(0.5 * truth["ang_diam"] / MAS_PER_RAD)


def blend(luminosity: float) -> Fault:
    """Return the fault of a cooler star in the same place."""

    def add(flux_jy: Fluxes, truth: dict[str, Fluxes], model: FitModel) -> Fluxes:
        ln_omega_2 = ln_omega(truth) + np.log(luminosity) - 4.0 * np.log(COOLER)
        return flux_jy + np.exp(ln_flux(model.table, COOLER * truth["teff"], truth["av"]) + ln_omega_2[:, None])

    return add


def hot_companion(flux_jy: Fluxes, truth: dict[str, Fluxes], model: FitModel) -> Fluxes:
    """Return the fluxes with those of a white dwarf."""
    hot = build_band_table(list(model.passbands.values()), 14_000.0, 16_000.0, 6.0, "G23", 3.1)
    ln_omega_2 = 2.0 * np.log(0.015 * RSUN_M / (truth["dist"] * PARSEC_M))
    return flux_jy + np.exp(ln_flux(hot, np.full(len(flux_jy), 15_000.0), truth["av"]) + ln_omega_2[:, None])


def disc(teff_k: float) -> Fault:
    """Return the fault of warm dust around the star."""

    def add(flux_jy: Fluxes, truth: dict[str, Fluxes], model: FitModel) -> Fluxes:
        cold = build_band_table(list(model.passbands.values()), 250.0, 1200.0, 1.0, "G23", 3.1)
        ln_omega_2 = ln_omega(truth) + np.log(DISC_LUMINOSITY) + 4.0 * np.log(truth["teff"] / teff_k)
        return flux_jy + np.exp(ln_flux(cold, np.full(len(flux_jy), teff_k), 0.0) + ln_omega_2[:, None])

    return add


def scaled(band: str, factor: float) -> Fault:
    """Return the fault of a band whose fluxes are all wrong by a factor."""

    def scale(flux_jy: Fluxes, truth: dict[str, Fluxes], model: FitModel) -> Fluxes:
        wrong = flux_jy.copy()
        wrong[:, list(model.passbands).index(band)] *= factor
        return wrong

    return scale


FAULTS: dict[str, Fault] = {
    "none": lambda flux_jy, truth, model: flux_jy,
    "blend 1": blend(1.0),
    "blend 1/2": blend(0.5),
    "hot companion": hot_companion,
    "disc 1000 K": disc(1000.0),
    "disc 300 K": disc(300.0),
    "zero point": scaled("panstarrs_r", 10.0**0.04),
    "saturated": scaled("panstarrs_i", 0.7),
}


def rates(n: int, seed: int = 31) -> dict[str, dict[str, float]]:
    """Return by fault the share of the stars with each flag."""
    settings, narrow, model = survey()
    stars, truth = simulate(narrow, model, n, seed)
    found = {}
    for name, fault in FAULTS.items():
        faulty: Stars = replace(stars, flux_jy=fault(stars.flux_jy, truth, model))
        flags = process_part(as_table(faulty, settings), settings, model).catalogue["flags"].to_numpy()
        found[name] = {flag.name: float(((flags & flag.value) != 0).mean()) for flag in FLAGS}
    return found


def main() -> None:
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 1000
    found = rates(n)
    print(f"{n} stars, {len(BANDS)} bands; share of stars flagged, in per cent")
    print(f"{'':22s}" + "".join(f"{name:>14s}" for name in found))
    for flag in FLAGS:
        shares = [found[name][flag.name] for name in found]
        if flag.name in ALWAYS_SHOWN or max(shares) > 0.0:
            print(f"{flag.name:22s}" + "".join(f"{100.0 * share:14.1f}" for share in shares))


if __name__ == "__main__":
    main()
