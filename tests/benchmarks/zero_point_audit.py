"""The audit of zero points on simulated stars, with each band in turn 0.05 mag too faint and too bright.

    python tests/benchmarks/zero_point_audit.py [STARS [PHOTOSPHERE]]

The stars have dust, outliers in 2 % of the bands and, if calibrated, departures with a common factor. The audit starts
at the peak that the start of the sampler finds for each star, which takes seconds where a fit takes minutes. Bars: the
offset is found within 0.01 mag with eight bands or more, within 0.03 mag with five, and undetermined with four. After
each set of bands: the errors' honesty, as the rms of (found - true) / error, with the other bands exact, and with a
quarter of the stars at a time and every band off by a draw from its quoted error.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
from numpy.typing import NDArray

sys.path.insert(0, str(Path(__file__).parents[1]))

from simulated import THIRTEEN_BANDS, invented_departures, make_settings, simulate
from starkiln.inference.audit import MAG_PER_LN_FLUX, sample_stars
from starkiln.inference.posterior import LN_HEAT_K, Block
from starkiln.physics.departures import write_departures
from starkiln.settings import Settings
from starkiln.stages.audit import zero_point_audit
from starkiln.stages.fit import start_block
from starkiln.stages.model import FitModel, build_model, zero_point_error
from starkiln.stages.stars import Stars

WRONG_MAG = 0.05
SETS = {
    "4": ("panstarrs_g", "gaia_dr3_rp", "2mass_j", "2mass_ks"),
    "5": ("gaia_dr3_bp", "gaia_dr3_rp", "2mass_j", "2mass_ks", "wise_w1"),
    "5, griz J": ("panstarrs_g", "panstarrs_r", "panstarrs_i", "panstarrs_z", "2mass_j"),
    "8": tuple(band for band in THIRTEEN_BANDS if not band.startswith("panstarrs")),
    "8, grizy JHKs": tuple(band for band in THIRTEEN_BANDS if band.startswith(("panstarrs", "2mass"))),
    "13": THIRTEEN_BANDS,
}
BARS = {5: 0.03}
DRAWS = 24


def survey(bands: tuple[str, ...], n: int, photosphere: str) -> tuple[Settings, FitModel, Stars]:
    """Return settings, model and stars of 3000 to 9000 K."""
    with TemporaryDirectory() as folder:
        departures = Path(folder) / "invented.ecsv"
        write_departures(invented_departures(bands), departures)
        settings = make_settings(
            bands,
            model={
                "photosphere": photosphere,
                "departures": str(departures),
                "temperature_k": [2000.0, 20000.0],
                "radius_rsun": [0.1, 20.0],
                "distance": {"length_scale_pc": 300.0},
            },
        )
        model = build_model(settings)
    narrow = settings.model.model_copy(update={"temperature_k": (3000.0, 9000.0)})
    return settings, model, simulate(settings.model_copy(update={"model": narrow}), model, n, seed=17)[0]


def at_peaks(stars: Stars, model: FitModel, settings: Settings) -> tuple[Block, NDArray[np.float64]]:
    """Return the block of the stars and the highest peak of each, as points."""
    block, modes = start_block(stars, model, settings)
    coords = modes.coords[:, 0]
    ln_teff = LN_HEAT_K - np.log(coords[:, 0])
    points = np.stack([ln_teff, coords[:, 1] - ln_teff, *coords[:, 2:].T], axis=1)[:, :, None]
    return block, np.ascontiguousarray(points)


def audited(
    block: Block, points: NDArray[np.float64], model: FitModel, settings: Settings
) -> tuple[NDArray[np.float64], ...]:
    """Return offset, error and whether it is determined, by band."""
    sums = sample_stars(points, block, is_blackbody=model.photosphere == "blackbody")
    rows = zero_point_audit(sums, model, settings)
    return tuple(np.array([row[key] for row in rows]) for key in ("offset_mag", "error_mag", "determined"))


def pulls_one_wrong(name: str, stars: Stars, model: FitModel, settings: Settings) -> list[NDArray[np.float64]]:
    """Print a row for each band and sign, and return (found - true) / error of all bands, the wrong one first."""
    pulls = []
    n_bands = len(SETS[name])
    for place, band in enumerate(SETS[name]):
        for sign in (1, -1):
            true = np.where(np.arange(n_bands) == place, sign * WRONG_MAG, 0.0)
            moved = replace(stars, flux_jy=stars.flux_jy * 10.0 ** (-0.4 * true))
            offset, error, determined = audited(*at_peaks(moved, model, settings), model, settings)
            miss = np.abs(offset - true)
            missed = determined[place] if n_bands == 4 else miss[place] > BARS.get(n_bands, 0.01)
            print(
                f"{name:15s} {band:12s} {'+-'[sign < 0]} {offset[place]:9.4f} {error[place]:8.4f}"
                f"  {'yes' if determined[place] else 'no':10s} {miss[place]:8.4f} {np.delete(miss, place).max():8.4f}"
                f"{'  above the bar' if missed else ''}",
                flush=True,
            )
            pull = (offset - true) / error
            pulls.append(np.append(pull[place], np.delete(pull, place)))
    return pulls


def pulls_as_quoted(stars: Stars, model: FitModel, settings: Settings) -> NDArray[np.float64]:
    """Return (found - true) / error where each band is off by a draw from its quoted error."""
    block, points = at_peaks(stars, model, settings)
    quoted = [zero_point_error(band, model.passbands[band.label]) for band in settings.input.photometry]
    rng = np.random.default_rng(1)
    pulls = []
    for draw in range(DRAWS):
        some = np.arange(draw % 4, len(stars), 4)
        true = abs(MAG_PER_LN_FLUX) * np.array(quoted) * rng.normal(size=len(quoted))
        off = block._replace(scaled_flux=block.scaled_flux * 10.0 ** (-0.4 * true[block.band]))
        offset, error, _ = audited(off.take(some), points[some], model, settings)
        pulls.append((offset - true) / error)
    return np.array(pulls)


def rms(values: NDArray[np.float64]) -> float:
    """Return the root mean square."""
    return float(np.sqrt(np.mean(np.square(values))))


def main() -> None:
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 4000
    photosphere = sys.argv[2] if len(sys.argv) > 2 else "calibrated"
    print(f"{n} stars, {photosphere}; offsets, errors and misses in mag")
    print("bands           wrong band   sign   found    error  determined     miss   others")
    for name, bands in SETS.items():
        settings, model, stars = survey(bands, n, photosphere)
        pulls = np.array(pulls_one_wrong(name, stars, model, settings))
        if len(bands) > 4:
            quoted = pulls_as_quoted(stars, model, settings)
            print(
                f"{name:15s} pull rms: wrong band {rms(pulls[:, 0]):.2f}, worst {np.abs(pulls[:, 0]).max():.1f}, others"
                f" {rms(pulls[:, 1:]):.2f}; all bands off as quoted {rms(quoted):.2f}, worst {np.abs(quoted).max():.1f}"
            )


if __name__ == "__main__":
    main()
