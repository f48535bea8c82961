"""The picture of a forecast: widths against magnitude, and how much wider they are without some bands."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import numpy as np
from astropy.table import Table
from matplotlib import colormaps
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import LogLocator, NullFormatter, StrMethodFormatter

from starkiln.stages.forecast import QUANTITIES, is_misled

TITLES = {"teff": "effective temperature", "radius": "radius", "lum": "luminosity"}
MARKERS = "osD^vPX*"
DASHES = ("--", ":", "-.", (0, (5, 1, 1, 1, 1, 1)))
HOLLOW: dict[str, Any] = {"linestyle": "", "markerfacecolor": "white"}
DARKEST, LIGHTEST = 0.0, 0.85  # of the colour map: its yellow end is too pale on white


def forecast_figure(table: Table) -> Figure:
    """Return a figure with a column for each of T, R and L.

    The upper row has the half-widths with all bands in per cent, a line for each temperature, its symbols hollow where
    the priors decide; the lower row, if bands are left out, how many times as wide they are then, a dash pattern for
    each set.
    """
    sets = list(dict.fromkeys(table["bands"]))
    rows = 1 if len(sets) == 1 else 2
    figure = Figure(figsize=(10.0, 1.8 + 2.7 * rows), layout="constrained")
    axes = figure.subplots(rows, len(QUANTITIES), sharex=True, squeeze=False)
    for column, quantity in enumerate(QUANTITIES):
        _draw_widths(axes[0, column], table[table["bands"] == sets[0]], quantity)
        if rows == 2:
            _draw_ratios(axes[1, column], table, sets[1:], quantity)
        axes[-1, column].set_xlabel(table.meta["mag"])
    axes[0, 0].set_ylabel("half of the 68 % interval\n[% of the value]")
    if rows == 2:
        axes[1, 0].set_ylabel("times as wide\nwithout some bands")
    figure.suptitle(f"{table.meta['name']}: precision to expect, median of {table['stars'][0]} invented stars a point")
    figure.legend(handles=_legend(table, sets[1:]), loc="outside lower center", ncols=4, frameon=False)
    return figure


def save_figure(figure: Figure, stem: Path) -> list[Path]:
    """Write a figure as PDF and PNG, each whole or not at all, and return their paths."""
    paths = []
    for kind, options in (("pdf", {"metadata": {"CreationDate": None}}), ("png", {"dpi": 150})):
        path, temporary = stem.with_suffix(f".{kind}"), stem.with_name(f".{stem.name}.{kind}.tmp")
        figure.savefig(temporary, format=kind, **options)
        os.replace(temporary, path)
        paths.append(path)
    return paths


def _draw_widths(axes: Any, table: Table, quantity: str) -> None:
    for teff_k, style in _styles(table).items():
        some = table[table["teff"] == teff_k]
        mag, width = _line(some, f"{quantity}_half_width")
        axes.plot(mag, 100.0 * width, **style)
        mag, width = _line(some[is_misled(some, quantity)], f"{quantity}_half_width")
        axes.plot(mag, 100.0 * width, **style | HOLLOW)
    axes.set_title(TITLES[quantity])
    axes.grid(alpha=0.3)
    if not np.isfinite(table[f"{quantity}_half_width"]).any():
        axes.text(0.5, 0.5, "nothing to be had", transform=axes.transAxes, ha="center")
        return
    axes.set_yscale("log")
    axes.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    axes.yaxis.set_major_formatter(StrMethodFormatter("{x:g}"))
    axes.yaxis.set_minor_formatter(NullFormatter())


def _draw_ratios(axes: Any, table: Table, sets: list[str], quantity: str) -> None:
    for dash, name in zip(_dashes(sets), sets, strict=True):
        some = table[table["bands"] == name]
        for teff_k, style in _styles(table).items():
            mag, ratio = _line(some[some["teff"] == teff_k], f"{quantity}_ratio")
            axes.plot(mag, ratio, **style | {"linestyle": dash})
    axes.axhline(1.0, color="0.6", linewidth=0.8, zorder=0)
    axes.grid(alpha=0.3)


def _line(table: Table, column: str) -> tuple[Any, Any]:
    order = np.argsort(table["mag"])
    return np.asarray(table["mag"])[order], np.asarray(table[column])[order]


def _styles(table: Table) -> dict[float, dict[str, Any]]:
    """Return a colour and a marker for each temperature, from dark blue for the coolest to pale for the hottest."""
    teff_k = sorted(set(table["teff"]))
    shades = np.linspace(DARKEST, LIGHTEST, len(teff_k))
    return {
        value: {"color": colormaps["cividis"](shade), "marker": MARKERS[place % len(MARKERS)], "markersize": 4}
        for place, (value, shade) in enumerate(zip(teff_k, shades, strict=True))
    }


def _dashes(sets: list[str]) -> list[Any]:
    return [DASHES[place % len(DASHES)] for place in range(len(sets))]


def _legend(table: Table, sets: list[str]) -> list[Line2D]:
    handles = [Line2D([], [], label=f"{teff_k:.0f} K", **style) for teff_k, style in _styles(table).items()]
    if any(is_misled(table, quantity).any() for quantity in QUANTITIES):
        handles.append(Line2D([], [], color="0.3", marker="o", markersize=4, label="the priors decide", **HOLLOW))
    return handles + [
        Line2D([], [], color="0.3", linestyle=dash, label=name) for dash, name in zip(_dashes(sets), sets, strict=True)
    ]
