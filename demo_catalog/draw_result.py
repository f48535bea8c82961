"""Draw what the demo run found: luminosity against temperature, each star in the colour of a blackbody.

After `starkiln run configs/demo.toml`:

    python demo_catalog/draw_result.py

makes demo_catalog/temperature-luminosity.png.
"""

from __future__ import annotations

from pathlib import Path

import matplotlib.pyplot as plt
import numpy as np
from astropy.table import Table
from matplotlib.axes import Axes

import starkiln
from starkiln.physics.constants import TSUN_K
from starkiln.report.page_colours import blackbody_rgb

HERE = Path(__file__).parent
NIGHT, CHALK = "#0b1020", "#d8dee9"
RADII_RSUN = (0.01, 0.1, 1, 10, 100)
TEMPERATURES_K = (40000, 20000, 10000, 6000, 4000, 3000)


def main() -> None:
    stars = starkiln.read(HERE.parent / "runs" / "tamarin-strip")
    stars = stars[~stars["lum_p50"].mask]
    with plt.rc_context({"text.color": CHALK, "axes.labelcolor": CHALK, "xtick.color": CHALK, "ytick.color": CHALK}):
        figure, axes = plt.subplots(figsize=(8, 5.6), facecolor=NIGHT, layout="constrained")
        _draw_radii(axes)
        _draw_stars(axes, stars)
        _label(axes, len(stars))
    path = HERE / "temperature-luminosity.png"
    figure.savefig(path, dpi=110, pil_kwargs={"optimize": True})
    print(f"{path}: {len(stars)} stars, {path.stat().st_size // 1000} kB")


def _draw_radii(axes: Axes) -> None:
    teff_k = np.geomspace(2000, 60000, 50)
    for radius_rsun in RADII_RSUN:
        lum_lsun = radius_rsun**2 * (teff_k / TSUN_K) ** 4
        axes.plot(teff_k, lum_lsun, color=CHALK, alpha=0.35, linewidth=0.7, linestyle=(0, (6, 4)), zorder=0)
        place = np.searchsorted(teff_k, 31000 if radius_rsun < 5 else 7600 if radius_rsun > 50 else 14000)
        axes.text(
            teff_k[place], lum_lsun[place], f"{radius_rsun:g} R$_\\odot$", size=8, alpha=0.8, va="bottom", ha="right"
        )


def _draw_stars(axes: Axes, stars: Table) -> None:
    teff_k, lum_lsun = np.asarray(stars["teff_p50"]), np.asarray(stars["lum_p50"])
    sure = np.asarray(stars["lum_hi68"] / stars["lum_lo68"]) < 1.5
    for chosen, size, alpha in ((~sure, 3, 0.5), (sure, 7, 0.9)):
        colours = blackbody_rgb(teff_k[chosen])
        axes.scatter(teff_k[chosen], lum_lsun[chosen], c=colours, s=size, alpha=alpha, linewidths=0)


def _label(axes: Axes, count: int) -> None:
    axes.set_facecolor(NIGHT)
    axes.set_xscale("log")
    axes.set_yscale("log")
    axes.set_xlim(60000, 2300)
    axes.set_ylim(2e-5, 2e5)
    axes.set_xticks(TEMPERATURES_K, [f"{teff_k:,}" for teff_k in TEMPERATURES_K])
    axes.set_xticks([], minor=True)
    axes.set_xlabel("effective temperature [K]")
    axes.set_ylabel("luminosity [L$_\\odot$]")
    axes.set_title(f"The Tamarin Strip, an invented survey: {count:,} stars fitted", loc="left", size=11)
    for text, teff_k, lum_lsun in (
        ("white dwarfs", 21000, 1e-4),
        ("dwarfs", 4700, 4e-3),
        ("giants", 3000, 3e3),
        ("hot stars", 30000, 2e4),
    ):
        axes.text(teff_k, lum_lsun, text, size=9, style="italic", ha="center")


if __name__ == "__main__":
    main()
