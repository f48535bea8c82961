"""The rows most in need of a look: what was observed of them, what the model says, and a small picture of both."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from starkiln.errors import StarkilnError
from starkiln.flags import names
from starkiln.physics.bandtable import ln_flux
from starkiln.physics.constants import MAS_PER_RAD
from starkiln.report.page_stats import OUTLIER
from starkiln.report.page_words import axis_number, number, with_interval
from starkiln.settings import Settings
from starkiln.stages.bands import Bands
from starkiln.stages.ingest import read_band
from starkiln.tables.hashes import mark_columns, row_hashes, value_columns
from starkiln.tables.source import open_source, read_rows

BATCH_ROWS = 65_536
WIDTH, FLUX_HEIGHT, RESIDUAL_HEIGHT = 320.0, 150.0, 62.0
LEFT, RIGHT, TOP, GAP, BOTTOM = 46.0, 10.0, 20.0, 12.0, 30.0
MOST_SIGMA = 8.0
FEWEST_TICKS, MOST_TICKS = 3, 5


@dataclass(frozen=True)
class Observed:
    """A measurement of one band in Jy."""

    flux_jy: float
    error_jy: float
    is_limit: bool


@dataclass
class Mark:
    """A band in a star's picture, in the picture's units; what is None is not drawn."""

    label: str
    x: float
    model_y: float
    residual_y: float | None = None
    residual_text: str = ""
    is_beyond: bool = False
    is_outlier: bool = False
    observed_y: float | None = None
    error_top: float | None = None
    error_bottom: float | None = None
    is_limit: bool = False


@dataclass
class StarPicture:
    """A star of the list, in words and with the marks of its picture."""

    id: str
    score: str
    cells: list[tuple[str, float]]
    flags: list[str]
    alt: str
    marks: list[Mark] = field(default_factory=list)
    x_ticks: list[tuple[float, str]] = field(default_factory=list)
    y_ticks: list[tuple[float, str]] = field(default_factory=list)
    has_observed: bool = False


def star_pictures(
    worst: Sequence[Mapping[str, Any]],
    id_name: str,
    bands: Bands | None,
    observed: Mapping[int, Mapping[str, Observed]],
) -> list[StarPicture]:
    """Return the stars of the list with their pictures.

    Parameters
    ----------
    worst, id_name
        The rows, as the statistics give them, and the column of the ids.
    bands
        The run's bands, or None if they cannot be had; then there is no picture.
    observed
        Measurements by the row's place in the catalogue and by label.
    """
    return [_star(star, id_name, bands, observed.get(star["place"], {})) for star in worst]


def _star(star: Mapping[str, Any], id_name: str, bands: Bands | None, observed: Mapping[str, Observed]) -> StarPicture:
    residuals = {
        name.removeprefix("residual_"): value
        for name, value in star.items()
        if name.startswith("residual_") and value is not None
    }
    largest = max(residuals, key=lambda label: abs(residuals[label]), default=None)
    told = "no residuals" if largest is None else f"largest residual {residuals[largest]:+.1f} sigma in {largest}"
    cells = [
        (with_interval(dict(star), "teff"), _plain(star.get("teff_p50"))),
        (number(star.get("radius_p50")), _plain(star.get("radius_p50"))),
        (number(star.get("lum_p50")), _plain(star.get("lum_p50"))),
        (number(star.get("ppp_value"), 2), _plain(star.get("ppp_value"))),
        (number(star.get("rhat_max"), 4), _plain(star.get("rhat_max"))),
        (f"{residuals[largest]:+.1f} ({largest})", abs(residuals[largest])) if largest is not None else ("–", 0.0),
    ]
    picture = StarPicture(
        id=str(star[id_name]),
        score=f"{star['score']:.1f}",
        cells=cells,
        flags=names(int(star["flags"])),
        alt=f"Star {star[id_name]}: {len(residuals)} bands, T {with_interval(dict(star), 'teff')} K, {told}.",
    )
    model = None if bands is None else model_fluxes(star, bands)
    if bands is not None and model is not None and residuals:
        _draw(picture, star, bands, model, residuals, observed)
    return picture


def _plain(value: Any) -> float:
    return float("-inf") if value is None else float(value)


def model_fluxes(star: Mapping[str, Any], bands: Bands) -> dict[str, float] | None:
    """Return the model's band fluxes in Jy at the star's posterior medians; None where there are none.

    The medians of T, angular diameter, A_V and z_1 are taken together, which is close to the mode but not the mode; a
    second factor is left at zero.
    """
    needed = [star.get(name) for name in ("teff_p50", "ang_diam_p50", "av_p50")]
    teff_k, ang_diam_mas, av_mag = (float("nan") if value is None else float(value) for value in needed)
    if not (teff_k > 0.0 and ang_diam_mas > 0.0):
        return None
    try:
        ln_flux_jy = ln_flux(bands.table, teff_k, av_mag)[0] + 2.0 * np.log(0.5 * ang_diam_mas / MAS_PER_RAD)
    except ValueError:
        return None
    if bands.departures is not None and star.get("photosphere") != "blackbody":
        at = bands.departures.at(teff_k)
        ln_flux_jy = ln_flux_jy + at.ln_d[:, 0]
        if len(at.loading) and star.get("photosphere_z1_p50") is not None:
            ln_flux_jy = ln_flux_jy + at.loading[0, :, 0] * star["photosphere_z1_p50"]
    return dict(zip(bands.passbands, np.exp(ln_flux_jy).tolist(), strict=True))


def _draw(
    picture: StarPicture,
    star: Mapping[str, Any],
    bands: Bands,
    model: Mapping[str, float],
    residuals: Mapping[str, float],
    observed: Mapping[str, Observed],
) -> None:
    """Lay out a star's picture: flux against wavelength above, residuals in sigma below."""
    labels = sorted((label for label in residuals if label in model), key=lambda label: bands.passbands[label].pivot_um)
    wavelengths = np.log10([bands.passbands[label].pivot_um for label in labels])
    x_low, x_high = wavelengths.min() - 0.05, wavelengths.max() + 0.05
    fluxes = [model[label] for label in labels]
    fluxes += [observed[label].flux_jy for label in labels if label in observed and observed[label].flux_jy > 0]
    y_low, y_high = np.log10(min(fluxes)) - 0.15, np.log10(max(fluxes)) + 0.15
    y_low = max(y_low, y_high - 6.0)

    def x_of(log_um: float) -> float:
        return round(LEFT + (log_um - x_low) / (x_high - x_low) * (WIDTH - LEFT - RIGHT), 1)

    def y_of(flux_jy: float) -> float:
        share = (np.log10(max(flux_jy, 1e-300)) - y_low) / (y_high - y_low)
        return round(TOP + (1.0 - float(np.clip(share, 0.0, 1.0))) * FLUX_HEIGHT, 1)

    for label, log_um in zip(labels, wavelengths, strict=True):
        mark = Mark(label, x_of(log_um), y_of(model[label]))
        sigma = residuals[label]
        mark.residual_y = residual_y(sigma)
        mark.residual_text = f"{sigma:+.1f}"
        mark.is_beyond = abs(sigma) > MOST_SIGMA
        mark.is_outlier = (star.get(f"outlier_{label}") or 0.0) > OUTLIER
        seen = observed.get(label)
        if seen is not None:
            mark.observed_y = y_of(seen.flux_jy)
            mark.is_limit = seen.is_limit
            mark.error_top, mark.error_bottom = y_of(seen.flux_jy + seen.error_jy), y_of(seen.flux_jy - seen.error_jy)
        picture.marks.append(mark)
    picture.has_observed = any(mark.observed_y is not None for mark in picture.marks)
    picture.x_ticks = [(x_of(tick), axis_number(10.0**tick)) for tick in _ticks(x_low, x_high)]
    picture.y_ticks = [(y_of(10.0**tick), axis_number(10.0**tick)) for tick in _ticks(y_low, y_high)]


def residual_y(sigma: float) -> float:
    """Return the height of a residual in a star's picture; those beyond `MOST_SIGMA` stay at the edge."""
    share = float(np.clip(sigma, -MOST_SIGMA, MOST_SIGMA)) / MOST_SIGMA
    return round(TOP + FLUX_HEIGHT + GAP + 0.5 * RESIDUAL_HEIGHT * (1.0 - share), 1)


def _ticks(low: float, high: float) -> list[float]:
    """Return logarithms of a few round numbers in a range."""
    powers = range(int(np.floor(low)), int(np.ceil(high)) + 1)
    ticks: list[float] = []
    for steps in ((1,), (1, 3), (1, 2, 5), (1, 1.5, 2, 3, 4, 6, 8)):
        found = [float(np.log10(step)) + power for power in powers for step in steps]
        ticks = [tick for tick in found if low <= tick <= high]
        if len(ticks) >= FEWEST_TICKS:
            break
    return ticks[:: max(1, -(-len(ticks) // MOST_TICKS))]


def read_observed(
    worst: Sequence[Mapping[str, Any]], id_name: str, settings: Settings, bands: Bands
) -> dict[int, dict[str, Observed]]:
    """Return what the input tables still say of the stars, by place and label; rows that have changed are left out.

    A row counts as the same if its hash is that of the catalogue. Where the tables are gone, there is nothing.
    """
    if not worst or worst[0].get("row_hash") is None:
        return {}
    wanted = {(str(star[id_name]), star["row_hash"]): star["place"] for star in worst}
    found: dict[int, dict[str, Observed]] = {}
    try:
        source = open_source(settings)
        pieces = [
            (place, group) for place, file in enumerate(source.files) for group in range(len(file.row_group_rows))
        ]
        columns = list(dict.fromkeys([settings.input.id, *value_columns(settings), *mark_columns(settings)]))
        ids = pa.array([star[id_name] for star in worst]).cast(source.schema.field(settings.input.id).type)
        for batch in read_rows(source, settings, pieces, columns, BATCH_ROWS):
            table = batch.table.filter(pc.is_in(batch.table[settings.input.id], ids))
            if table.num_rows:
                _take(found, table, wanted, settings, bands)
            if len(found) == len(wanted):
                break
    except (StarkilnError, OSError, pa.ArrowException):
        return found
    return found


def _take(
    found: dict[int, dict[str, Observed]],
    table: pa.Table,
    wanted: Mapping[tuple[str, int], int],
    settings: Settings,
    bands: Bands,
) -> None:
    values = {band.label: read_band(table, band, bands.passbands[band.label]) for band in settings.input.photometry}
    ids = [str(star) for star in table[settings.input.id].to_pylist()]
    for row, key in enumerate(zip(ids, row_hashes(table, settings).tolist(), strict=True)):
        if key in wanted and wanted[key] not in found:
            found[wanted[key]] = {
                label: Observed(float(band.flux_jy[row]), float(band.error_jy[row]), bool(band.limit[row]))
                for label, band in values.items()
                if band.fault[row] == 0
            }
