"""Pictures of departures: the points behind each band's curve, what is left, and how bands go together."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starkiln.errors import EnvironmentTrouble
from starkiln.physics.departures import Departures, write_departures

POINTS = "#4477aa"
CURVE = "#222222"
BAND = "#ee6677"


def save_calibration(
    departures: Departures, stars_teff_k: NDArray[np.float64], points: NDArray[np.float64], path: Path
) -> Path:
    """Write the file of departures, whole or not at all, and the pictures; return the folder of the pictures.

    Raises
    ------
    EnvironmentTrouble
        If they cannot be written.
    """
    temporary, folder = path.with_name(f".{path.name}.tmp"), path.with_suffix("")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        write_departures(departures, temporary)
        os.replace(temporary, path)
        save_band_pictures(departures, stars_teff_k, points, folder)
        save_correlations(departures, stars_teff_k, folder)
    except OSError as error:
        raise EnvironmentTrouble(f"{path}: {error.strerror or error}; mend it and run again") from error
    return folder


def save_band_pictures(
    departures: Departures, teff_k: NDArray[np.float64], points: NDArray[np.float64], folder: Path
) -> list[Path]:
    """Write a picture of each band (PNG and PDF): stars, curve and scatter above, residuals below."""
    paths = []
    for band in range(len(departures.bands)):
        figure = _band_figure(departures, band, teff_k, points[:, band])
        paths += _save(figure, folder / f"departure_{departures.bands[band]}")
    return paths


def save_correlations(departures: Departures, stars_teff_k: NDArray[np.float64], folder: Path) -> list[Path]:
    """Write a picture of the correlation of the bands' departures at the stars' median temperature."""
    teff_k = float(np.median(stars_teff_k))
    at = departures.at(teff_k)
    loading, scatter = at.loading[:, :, 0], at.scatter[:, 0]
    covariance = np.einsum("kb,kc->bc", loading, loading) + np.diag(scatter**2)
    sigma = np.sqrt(np.diag(covariance))
    figure = _new_figure((1.6 + 0.42 * len(sigma), 1.2 + 0.42 * len(sigma)))
    axes = figure.add_subplot()
    image = axes.imshow(covariance / np.outer(sigma, sigma), cmap="PuOr", vmin=-1.0, vmax=1.0)
    places = range(len(sigma))
    axes.set_xticks(places, departures.bands, rotation=90)
    axes.set_yticks(places, departures.bands)
    axes.set_title(f"Correlation of departures at {teff_k:.0f} K")
    figure.colorbar(image, label="correlation")
    return _save(figure, folder / "departure_correlations")


def _band_figure(departures: Departures, band: int, teff_k: NDArray[np.float64], points: NDArray[np.float64]) -> Any:
    known = np.isfinite(points)
    grid_k = np.geomspace(teff_k[known].min() * 0.9, teff_k[known].max() * 1.1, 300)
    curve, own = departures.at(grid_k), departures.at(teff_k[known])
    spread = np.sqrt((curve.loading[:, band] ** 2).sum(axis=0) + curve.scatter[band] ** 2)
    holds = departures.holds(grid_k)[band]
    figure = _new_figure((6.4, 5.6))
    above, below = figure.subplots(2, 1, sharex=True, height_ratios=[2, 1])
    above.plot(teff_k[known], points[known], ".", color=POINTS, markersize=4, label="reference stars")
    above.plot(grid_k, np.where(holds, curve.ln_d[band], np.nan), color=CURVE, label="curve")
    above.plot(grid_k, np.where(holds, np.nan, curve.ln_d[band]), color=CURVE, linestyle=":", label="held")
    above.fill_between(
        grid_k,
        curve.ln_d[band] - spread,
        curve.ln_d[band] + spread,
        color=BAND,
        alpha=0.25,
        linewidth=0,
        label="scatter, one sigma",
    )
    above.set_ylabel("ln (observed / blackbody)")
    above.set_title(departures.bands[band])
    above.legend(frameon=False, fontsize="small")
    below.plot(teff_k[known], points[known] - own.ln_d[band], ".", color=POINTS, markersize=4)
    below.axhline(0.0, color=CURVE, linewidth=0.8)
    below.fill_between(grid_k, -spread, spread, color=BAND, alpha=0.25, linewidth=0)
    below.set_xlabel("effective temperature [K]")
    below.set_ylabel("residual in ln flux")
    below.set_xscale("log")
    return figure


def _new_figure(size: tuple[float, float]) -> Any:
    from matplotlib.figure import Figure

    return Figure(figsize=size, layout="constrained")


def _save(figure: Any, stem: Path) -> list[Path]:
    stem.parent.mkdir(parents=True, exist_ok=True)
    paths = [stem.with_suffix(".png"), stem.with_suffix(".pdf")]
    figure.savefig(paths[0], dpi=120)
    # No date in the file, so that the same departures give the same picture.
    figure.savefig(paths[1], metadata={"CreationDate": None})
    return paths
