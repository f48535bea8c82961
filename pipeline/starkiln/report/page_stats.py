"""What the quality page shows of a catalogue, gathered in one pass over its files, whatever their number of rows."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from starkiln.flags import BY_NAME, FLAGS

FloatArray = NDArray[np.float64]
Counts = NDArray[np.int64]

BATCH_ROWS = 65_536
WORST_ROWS = 50
OUTLIER = 0.9
LEAST_P_VALUE = 1e-5
ZERO_FLUX_W_PER_M2 = 2.518021002e-8
"""Bolometric flux of apparent bolometric magnitude zero: IAU 2015 resolution B2."""

FLAG_WEIGHTS = {
    "not_converged": 5.0,
    "temperature_at_bound": 4.0,
    "several_modes": 3.0,
    "extinction_at_bound": 3.0,
    "radius_at_bound": 3.0,
    "poor_fit": 3.0,
    "distance_at_bound": 2.0,
    "no_detection": 2.0,
    "outside_calibration": 2.0,
    "band_outlier": 1.0,
    "odd_photosphere": 1.0,
    "infrared_excess": 1.0,
    "ultraviolet_excess": 1.0,
    "duplicate_id": 1.0,
}
"""What a flag adds to a row's score; flags that merely tell what was not measured add nothing."""
MOST_OF_ONE_KIND = 5.0
"""Neither the p-value, R-hat nor the largest residual adds more than this to a row's score."""


@dataclass(frozen=True)
class Axis:
    """Bins of equal width; values beyond the ends are counted in the first and the last."""

    low: float
    high: float
    bins: int

    @property
    def edges(self) -> FloatArray:
        """The edges of the bins."""
        return np.linspace(self.low, self.high, self.bins + 1)

    @property
    def centres(self) -> FloatArray:
        """The centres of the bins."""
        edges = self.edges
        return 0.5 * (edges[1:] + edges[:-1])

    def cells(self, values: FloatArray) -> NDArray[np.int64]:
        """Return the bin of each value, which must not be NaN."""
        place = np.floor((np.clip(values, self.low, self.high) - self.low) * (self.bins / (self.high - self.low)))
        return np.minimum(place, self.bins - 1).astype(np.int64)


AXES = {
    "log_teff": Axis(3.0, 5.0, 400),
    "log_radius": Axis(-4.0, 5.0, 450),
    "log_lum": Axis(-8.0, 9.0, 850),
    "av": Axis(0.0, 10.0, 2000),
    "log_ess_bulk": Axis(0.0, 5.0, 250),
    "log_ess_tail": Axis(0.0, 5.0, 250),
    "log_tau": Axis(-0.5, 3.0, 175),
    "rhat": Axis(0.99, 1.5, 510),
    "accept": Axis(0.0, 1.0, 50),
    "log_steps": Axis(1.0, 5.0, 200),
    "p_value": Axis(0.0, 1.0, 100),
    "log_dist_width": Axis(-4.0, 1.0, 200),
}
COARSE_LOG_TEFF = Axis(3.0, 5.0, 80)
RESIDUAL = Axis(-10.0, 10.0, 200)
MBOL = Axis(-5.0, 35.0, 80)
LOG_WIDTH = Axis(-4.0, 2.0, 240)
WIDTHS = ("teff", "radius", "lum")


@dataclass
class BandStats:
    """Residuals of one band against temperature (bins of `COARSE_LOG_TEFF` by bins of `RESIDUAL`), and outliers."""

    counts: Counts = field(default_factory=lambda: np.zeros((COARSE_LOG_TEFF.bins, RESIDUAL.bins), np.int64))
    outliers: int = 0


@dataclass
class CatalogueStats:
    """All that the page shows of the rows.

    Attributes
    ----------
    rows, flagged
        Rows, and rows with any flag.
    id_name
        The column of the ids.
    histograms
        Counts of the posterior medians and diagnostics, in the bins of `AXES`.
    plane
        Stars by (log T, log L), in the bins of those axes.
    widths
        Half the 68 % interval of T, R, L as a fraction, in (`MBOL`, `LOG_WIDTH`) bins.
    poor_dist
        As the histogram "log_dist_width", of the rows flagged poor_parallax.
    flags, examples
        Rows with each flag, and the id of the first of them.
    photospheres
        Rows by model.
    bands
        By label; empty where the catalogue holds no residuals.
    worst
        The rows most in need of a look, as dictionaries of their columns with "score".
    """

    id_name: str
    rows: int = 0
    flagged: int = 0
    histograms: dict[str, Counts] = field(
        default_factory=lambda: {k: np.zeros(a.bins, np.int64) for k, a in AXES.items()}
    )
    plane: Counts = field(default_factory=lambda: np.zeros((AXES["log_teff"].bins, AXES["log_lum"].bins), np.int64))
    widths: dict[str, Counts] = field(
        default_factory=lambda: {name: np.zeros((MBOL.bins, LOG_WIDTH.bins), np.int64) for name in WIDTHS}
    )
    poor_dist: Counts = field(default_factory=lambda: np.zeros(AXES["log_dist_width"].bins, np.int64))
    flags: dict[str, int] = field(default_factory=lambda: dict.fromkeys(BY_NAME, 0))
    examples: dict[str, str] = field(default_factory=dict)
    photospheres: dict[str, int] = field(default_factory=dict)
    bands: dict[str, BandStats] = field(default_factory=dict)
    worst: list[dict[str, Any]] = field(default_factory=list)


def gather(generation: Path) -> CatalogueStats:
    """Return the statistics of a generation's catalogue.

    Parameters
    ----------
    generation
        The folder of a published generation.

    Raises
    ------
    FileNotFoundError
        If it holds no catalogue.
    """
    files = sorted((generation / "catalogue").rglob("*.parquet"))
    if not files:
        raise FileNotFoundError(2, "holds no catalogue", str(generation))
    stats: CatalogueStats | None = None
    for file in files:
        for batch in _batches(file):
            if stats is None:
                stats = CatalogueStats(batch.schema.names[0])
            _add(stats, batch)
    return stats or CatalogueStats(pq.read_schema(files[0]).names[0])


def _batches(path: Path) -> Iterator[pa.RecordBatch]:
    with pq.ParquetFile(path, pre_buffer=False) as file:
        names = file.schema_arrow.names
        wanted = [name for place, name in enumerate(names) if place == 0 or _is_needed(name)]
        yield from file.iter_batches(BATCH_ROWS, columns=wanted, use_threads=False)


def _is_needed(name: str) -> bool:
    return name in _NEEDED or name.startswith(("residual_", "outlier_"))


_NEEDED = {
    *(f"{name}_{end}" for name in ("teff", "radius", "lum", "dist") for end in ("lo68", "p50", "hi68")),
    *("av_p50", "ang_diam_p50", "fbol_p50", "photosphere", "photosphere_z1_p50", "ppp_value", "n_bands", "chi2"),
    *("ess_bulk", "ess_tail", "autocorr_steps", "rhat_max", "n_steps", "accept_frac", "flags", "row_hash"),
}


class _Columns:
    """Columns of a batch as float64 arrays, NaN where null or not there."""

    def __init__(self, batch: pa.RecordBatch) -> None:
        self._batch = batch
        self._names = set(batch.schema.names)

    def __getitem__(self, name: str) -> FloatArray:
        if name not in self._names:
            return np.full(self._batch.num_rows, np.nan)
        values = self._batch.column(name).cast(pa.float64())
        return np.asarray(values.to_numpy(zero_copy_only=False), dtype=np.float64)

    def labels(self, prefix: str) -> list[str]:
        """Return the bands that have a column with a prefix, in the file's order."""
        return [name.removeprefix(prefix) for name in self._batch.schema.names if name.startswith(prefix)]


def _add(stats: CatalogueStats, batch: pa.RecordBatch) -> None:
    columns = _Columns(batch)
    flags = np.asarray(columns["flags"], dtype=np.int64)
    first_row = stats.rows
    stats.rows += batch.num_rows
    stats.flagged += int((flags != 0).sum())
    _add_flags(stats, batch, flags)
    _add_histograms(stats, columns, flags)
    _add_widths(stats, columns)
    _add_bands(stats, columns)
    _add_photospheres(stats, batch)
    _add_worst(stats, batch, columns, flags, first_row)


def _add_flags(stats: CatalogueStats, batch: pa.RecordBatch, flags: NDArray[np.int64]) -> None:
    for flag in FLAGS:
        rows = np.flatnonzero(flags & flag.value)
        stats.flags[flag.name] += len(rows)
        if len(rows) and flag.name not in stats.examples:
            stats.examples[flag.name] = str(batch.column(0)[int(rows[0])].as_py())


def _add_histograms(stats: CatalogueStats, columns: _Columns, flags: NDArray[np.int64]) -> None:
    with np.errstate(divide="ignore", invalid="ignore"):
        log_teff, log_lum = np.log10(columns["teff_p50"]), np.log10(columns["lum_p50"])
        log_dist_width = np.log10(_width(columns, "dist"))
        values = {
            "log_teff": log_teff,
            "log_radius": np.log10(columns["radius_p50"]),
            "log_lum": log_lum,
            "av": columns["av_p50"],
            "log_ess_bulk": np.log10(columns["ess_bulk"]),
            "log_ess_tail": np.log10(columns["ess_tail"]),
            "log_tau": np.log10(columns["autocorr_steps"]),
            "rhat": columns["rhat_max"],
            "accept": columns["accept_frac"],
            "log_steps": np.log10(columns["n_steps"]),
            "p_value": columns["ppp_value"],
            "log_dist_width": log_dist_width,
        }
    for name, of_rows in values.items():
        stats.histograms[name] += count(AXES[name], of_rows)
    stats.plane += count_pairs(AXES["log_teff"], log_teff, AXES["log_lum"], log_lum)
    is_poor = (flags & BY_NAME["poor_parallax"].value) != 0
    stats.poor_dist += count(AXES["log_dist_width"], np.where(is_poor, log_dist_width, np.nan))


def _width(columns: _Columns, name: str) -> FloatArray:
    return np.asarray(0.5 * (columns[f"{name}_hi68"] - columns[f"{name}_lo68"]) / columns[f"{name}_p50"])


def _add_widths(stats: CatalogueStats, columns: _Columns) -> None:
    with np.errstate(divide="ignore", invalid="ignore"):
        mbol = -2.5 * np.log10(columns["fbol_p50"] / ZERO_FLUX_W_PER_M2)
        for name in WIDTHS:
            stats.widths[name] += count_pairs(MBOL, mbol, LOG_WIDTH, np.log10(_width(columns, name)))


def _add_bands(stats: CatalogueStats, columns: _Columns) -> None:
    with np.errstate(divide="ignore", invalid="ignore"):
        log_teff = np.log10(columns["teff_p50"])
    for label in columns.labels("residual_"):
        band = stats.bands.setdefault(label, BandStats())
        band.counts += count_pairs(COARSE_LOG_TEFF, log_teff, RESIDUAL, columns[f"residual_{label}"])
        band.outliers += int((columns[f"outlier_{label}"] > OUTLIER).sum())


def _add_photospheres(stats: CatalogueStats, batch: pa.RecordBatch) -> None:
    if "photosphere" not in batch.schema.names:
        return
    for pair in batch.column("photosphere").value_counts().to_pylist():
        name = pair["values"] or "none"
        stats.photospheres[name] = stats.photospheres.get(name, 0) + pair["counts"]


def score(flags: NDArray[np.int64], p_value: FloatArray, rhat: FloatArray, residual: FloatArray) -> FloatArray:
    """Return how much each row needs a look.

    Parameters
    ----------
    flags, p_value, rhat
        (n,); NaN where unknown.
    residual
        (n,), the largest absolute residual in sigma.

    Notes
    -----
    The weights of the flags, and what goes beyond good values, each at most `MOST_OF_ONE_KIND`: -log10 of the p-value
    above 2, R-hat above 1.01 in units of 0.05, and the largest residual above 3 sigma in units of 3 sigma.
    """
    total = np.zeros(len(flags))
    for name, weight in FLAG_WEIGHTS.items():
        total += weight * ((flags & BY_NAME[name].value) != 0)
    with np.errstate(invalid="ignore"):
        beyond = (
            -np.log10(np.maximum(p_value, LEAST_P_VALUE)) - 2.0,
            (rhat - 1.01) / 0.05,
            (residual - 3.0) / 3.0,
        )
    for value in beyond:
        total += np.clip(np.nan_to_num(value, nan=0.0), 0.0, MOST_OF_ONE_KIND)
    return total


def _add_worst(
    stats: CatalogueStats, batch: pa.RecordBatch, columns: _Columns, flags: NDArray[np.int64], first_row: int
) -> None:
    largest = np.zeros(batch.num_rows)
    for label in columns.labels("residual_"):
        largest = np.fmax(largest, np.abs(columns[f"residual_{label}"]))
    scores = score(flags, columns["ppp_value"], columns["rhat_max"], largest)
    rows = np.argsort(-scores, kind="stable")[:WORST_ROWS]
    rows = rows[scores[rows] > 0.0]
    found = batch.take(pa.array(rows)).to_pylist()
    for star, row in zip(found, rows.tolist(), strict=True):
        star |= {"score": float(scores[row]), "place": first_row + row}
    stats.worst = sorted(stats.worst + found, key=lambda star: (-star["score"], star["place"]))[:WORST_ROWS]


def count(axis: Axis, values: FloatArray) -> Counts:
    """Return how many values lie in each bin; NaN is left out."""
    return np.bincount(axis.cells(values[~np.isnan(values)]), minlength=axis.bins)


def count_pairs(first: Axis, x: FloatArray, second: Axis, y: FloatArray) -> Counts:
    """Return how many pairs lie in each cell, of shape (first.bins, second.bins); pairs with a NaN are left out."""
    known = ~(np.isnan(x) | np.isnan(y))
    cells = first.cells(x[known]) * second.bins + second.cells(y[known])
    return np.bincount(cells, minlength=first.bins * second.bins).reshape(first.bins, second.bins)


def quantiles(axis: Axis, counts: Counts, at: Sequence[float]) -> FloatArray:
    """Return quantiles of counted values, straight within a bin: (..., n) of counts (..., bins); NaN where none."""
    total = counts.sum(axis=-1, keepdims=True)
    reached = np.concatenate([np.zeros((*counts.shape[:-1], 1)), np.cumsum(counts, axis=-1)], axis=-1)
    flat, totals = reached.reshape(-1, axis.bins + 1), total.reshape(-1)
    found = np.full((len(flat), len(at)), np.nan)
    for row in np.flatnonzero(totals):
        wanted = np.clip(
            np.asarray(at) * totals[row], 0.5, totals[row] - 0.5
        )  # the ends are in the first and last star's bins
        found[row] = _inverse(flat[row], axis.edges, wanted)
    return found.reshape(*counts.shape[:-1], len(at))


def _inverse(reached: FloatArray, edges: FloatArray, wanted: FloatArray) -> FloatArray:
    """Return where a cumulative count reaches the wanted numbers, between the edges of the bin that does it."""
    last = np.clip(np.searchsorted(reached, wanted, side="left"), 1, len(edges) - 1)
    share = (wanted - reached[last - 1]) / np.maximum(reached[last] - reached[last - 1], 1e-300)
    return np.asarray(edges[last - 1] + np.clip(share, 0.0, 1.0) * (edges[last] - edges[last - 1]))


def share_above(axis: Axis, counts: Counts, limit: float) -> float:
    """Return the share of counted values in the bins from a limit on; NaN where there are none."""
    total = counts.sum()
    first = round((limit - axis.low) / (axis.high - axis.low) * axis.bins)
    return float(counts[first:].sum() / total) if total else float("nan")
