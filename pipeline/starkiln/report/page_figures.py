"""The figures of the quality page: drawn once, saved as PDF and PNG, and as SVG whose colours follow the page's."""

from __future__ import annotations

import io
import logging
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from markupsafe import Markup
from numpy.typing import NDArray

from starkiln.physics.constants import TSUN_K
from starkiln.report.page_colours import BLUE, GREEN, VERMILION, blackbody_rgb
from starkiln.report.page_stats import (
    AXES,
    COARSE_LOG_TEFF,
    LOG_WIDTH,
    MBOL,
    RESIDUAL,
    Axis,
    BandStats,
    CatalogueStats,
    Counts,
    quantiles,
    share_above,
)
from starkiln.report.page_words import axis_number, integer, number, percent

FloatArray = NDArray[np.float64]

# Each stands for a colour of the page: in the SVG it becomes the style sheet's variable of that name.
INK, FAINT, RULE = "#1b2733", "#5a6877", "#c9d1d9"
_VARIABLES = {
    INK: "--ink",
    FAINT: "--faint",
    RULE: "--rule",
    BLUE.lower(): "--blue",
    VERMILION.lower(): "--vermilion",
    GREEN.lower(): "--green",
}
_LINKS = 'xmlns:xlink="http://www.w3.org/1999/xlink"'
PLATE = "#0c1220"
"""The T-L diagram is dark on light pages too: stars shine."""

STYLE: dict[Any, Any] = {
    "axes.edgecolor": FAINT,
    "axes.labelcolor": INK,
    "axes.spines.right": False,
    "axes.spines.top": False,
    "axes.titlecolor": INK,
    "axes.titlelocation": "left",
    "axes.titlesize": 10.0,
    "font.size": 9.5,
    "svg.fonttype": "none",
    "text.color": INK,
    "xtick.color": FAINT,
    "xtick.labelcolor": INK,
    "ytick.color": FAINT,
    "ytick.labelcolor": INK,
    "legend.frameon": False,
}
PNG_DPI = 160
POINTS_BELOW = 0.6
"""Cells with fewer stars than this, smoothed, are drawn as points, the others as density."""

LEAST_STARS = 5
"""Bins with fewer stars give no median."""


@dataclass(frozen=True)
class Picture:
    """A figure of the page: its file name, title, what it shows in words and numbers, and the SVG."""

    name: str
    title: str
    alt: str
    svg: Markup


class Figures:
    """Draws figures into a folder.

    Parameters
    ----------
    folder
        Where each figure is saved as PDF and PNG.
    """

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        folder.mkdir(parents=True)

    def plane(self, stats: CatalogueStats) -> Picture:
        """Draw luminosity against temperature."""
        axes = _axes(5.4, 4.7)
        axes.set_facecolor(PLATE)
        teff, lum = AXES["log_teff"], AXES["log_lum"]
        (x_low, x_high), (y_low, y_high) = (_occupied(teff, stats.plane.sum(1)), _occupied(lum, stats.plane.sum(0)))
        _draw_stars(axes, stats.plane, teff, lum)
        _draw_radii(axes, (x_low, x_high), (y_low, y_high))
        axes.set_xlim(x_high, x_low)
        axes.set_ylim(y_low, y_high)
        _log_ticks(axes.xaxis, x_low, x_high, steps=(1, 2, 3, 4, 6))
        _log_ticks(axes.yaxis, y_low, y_high, steps=(1,))
        axes.set_xlabel("effective temperature T [K], hot to cool")
        axes.set_ylabel("luminosity L [L☉]")
        return self._finish(axes.figure, "temperature-luminosity", "Luminosity against temperature", _plane_alt(stats))

    def histogram(
        self,
        name: str,
        title: str,
        counts: Counts,
        axis: Axis,
        label: str,
        *,
        is_log: bool = True,
        limit: float | None = None,
        limit_text: str = "",
        part: Counts | None = None,
        part_text: str = "",
        whole: bool = False,
    ) -> Picture:
        """Draw how many stars have which value.

        Parameters
        ----------
        name, title
            Of the figure.
        counts, axis
            The stars, and their bins.
        label
            Of the horizontal axis.
        is_log
            Whether the bins are of the decimal logarithm.
        limit, limit_text
            A value to mark, in the units of the bins, and what it is.
        part, part_text
            Counts of some of the stars, drawn in another colour, and who they are.
        whole
            Whether to show the whole axis and not only where there are stars.
        """
        axes = _axes(4.0, 2.6)
        low, high = (axis.low, axis.high) if whole else _occupied(axis, counts, at_least=limit)
        edges, shown = _rebinned(axis, counts, low, high)
        axes.stairs(shown, edges, fill=True, color=BLUE)
        if part is not None:
            axes.set_ylim(top=1.12 * max(1, int(shown.max())))  # room for the words
            axes.stairs(_rebinned(axis, part, low, high)[1], edges, fill=True, color=VERMILION, hatch="////", ec="none")
            axes.text(0.98, 0.98, part_text, transform=axes.transAxes, ha="right", va="top", size=8)
        if limit is not None:
            axes.axvline(limit, color=INK, linewidth=1.0, linestyle=(0, (4, 2)))
            on_right = limit < low + 0.6 * (high - low)
            axes.annotate(
                limit_text,
                (limit, 0.86),
                xycoords=("data", "axes fraction"),
                xytext=(4 if on_right else -4, 0),
                textcoords="offset points",
                ha="left" if on_right else "right",
                size=8,
            )
        axes.set_xlim(low, high)
        if is_log:
            _log_ticks(axes.xaxis, low, high)
        axes.set_xlabel(label)
        axes.set_ylabel("stars")
        axes.yaxis.set_major_formatter(lambda value, _: integer(value) if value == int(value) else "")
        return self._finish(axes.figure, name, title, _histogram_alt(label, counts, axis, is_log, limit, limit_text))

    def widths(self, stats: CatalogueStats) -> Picture:
        """Draw the widths of the intervals of T, R and L against brightness."""
        axes = _axes(4.0, 2.7)
        told: list[str] = []
        ends: list[tuple[str, float, float]] = []
        for name, symbol, colour, style in (
            ("lum", "L", VERMILION, "-"),
            ("radius", "R", GREEN, (0, (5, 1.5))),
            ("teff", "T", BLUE, (0, (1.5, 1))),
        ):
            counts = stats.widths[name]
            enough = counts.sum(axis=1) >= LEAST_STARS
            if not enough.any():
                continue
            low, middle, high = 10.0 ** quantiles(LOG_WIDTH, counts[enough], (0.16, 0.5, 0.84)).T
            mbol = MBOL.centres[enough]
            axes.fill_between(mbol, low, high, color=colour, alpha=0.18, linewidth=0)
            axes.plot(mbol, middle, color=colour, linewidth=1.8, linestyle=style)
            ends.append((symbol, float(mbol[-1]), float(np.log10(middle[-1]))))
            told.append(f"{symbol} {percent(middle[0])} at the bright end, {percent(middle[-1])} at the faint end")
        axes.set_yscale("log")
        _label_ends(axes, ends)
        axes.yaxis.set_major_formatter(lambda value, _: f"{100.0 * value:g} %")
        axes.yaxis.set_minor_formatter(lambda value, _: "")
        axes.grid(axis="y", color=RULE, linewidth=0.6)
        axes.set_xlabel("bolometric magnitude [mag], bright to faint")
        axes.set_ylabel("half of the 68 % interval / median")
        alt = "Lines of the median half-width of the 68 % intervals against brightness. " + "; ".join(told) + "."
        return self._finish(axes.figure, "interval-widths", "Interval widths against brightness", alt)

    def residual(self, label: str, band: BandStats) -> Picture:
        """Draw a band's residuals against temperature: all of them, their median and their spread."""
        axes = _axes(4.0, 2.4)
        of_teff = band.counts.sum(axis=1)
        low, high = _occupied(COARSE_LOG_TEFF, of_teff)
        axes.axhspan(-1, 1, color=RULE, alpha=0.5, linewidth=0)
        axes.axhline(0, color=FAINT, linewidth=0.8)
        _draw_cells(axes, band.counts)
        enough = of_teff >= LEAST_STARS
        if enough.any():
            below, middle, above = quantiles(RESIDUAL, band.counts[enough], (0.16, 0.5, 0.84)).T
            x = COARSE_LOG_TEFF.centres[enough]
            for edge in (below, above):
                axes.plot(x, edge, color=VERMILION, linewidth=1.0, linestyle=(0, (3, 1.5)))
            axes.plot(x, middle, color=VERMILION, linewidth=2.0)
        axes.set_xlim(high, low)
        axes.set_ylim(-6, 6)
        _log_ticks(axes.xaxis, low, high)
        axes.set_xlabel("T [K], hot to cool")
        axes.set_ylabel("observed − model [σ]")
        return self._finish(axes.figure, f"residual-{_file_name(label)}", label, residual_alt(label, band))

    def _finish(self, figure: Any, name: str, title: str, alt: str) -> Picture:
        figure.savefig(self._folder / f"{name}.pdf", metadata={"CreationDate": None})
        figure.savefig(self._folder / f"{name}.png", dpi=PNG_DPI)
        file = io.StringIO()
        for axes in figure.axes:
            if axes.get_facecolor() == (1.0, 1.0, 1.0, 1.0):
                axes.patch.set_visible(False)  # the page's own ground shows through
        figure.savefig(file, format="svg", facecolor="none", metadata={"Date": None, "Creator": None})
        return Picture(name, title, alt, Markup(inline_svg(file.getvalue(), name)))


def _file_name(label: str) -> str:
    return re.sub(r"[^a-z0-9_]", "_", label.lower())


def _axes(width_inch: float, height_inch: float) -> Any:
    """Return axes in a figure of their own, with room for labels: measuring them would cost as much as drawing."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width_inch, height_inch))
    left, bottom, right, top = 0.78, 0.46, 0.2, 0.1
    place = (
        left / width_inch,
        bottom / height_inch,
        (width_inch - left - right) / width_inch,
        (height_inch - bottom - top) / height_inch,
    )
    axes = figure.add_axes(place)
    axes.yaxis.set_label_coords(-(left - 0.14) / (width_inch - left - right), 0.5)
    return axes


def drawing_style() -> Any:
    """Return the context in which figures are drawn."""
    # Where it cannot keep its list of fonts is no news for a cron job.
    logging.getLogger("matplotlib").setLevel(logging.ERROR)
    import matplotlib

    return matplotlib.rc_context(STYLE | {"svg.hashsalt": "starkiln"})


def inline_svg(text: str, name: str) -> str:
    """Return an SVG file as an element of a page: ids its own, colours the page's, hidden from screen readers."""
    start = text.index("<svg")
    body = re.sub(r"<metadata>.*?</metadata>\s*", "", text[start:], flags=re.DOTALL)
    body = re.sub(r'\bid="([^"]+)"', rf'id="{name}-\1"', body)
    body = re.sub(r'(xlink:href|href)="#([^"]+)"', rf'\1="#{name}-\2"', body)
    body = re.sub(r"url\(#([^)]+)\)", rf"url(#{name}-\1)", body)
    body = re.sub(r"#[0-9a-f]{6}\b", lambda found: _variable(found[0]), body)
    body = re.sub(r"font: ([^;\"]*?[\d.]+px) [^;\"]*", r"font: \1 var(--sans)", body)
    body = re.sub(r"<!--.*?-->\s*", "", body, flags=re.DOTALL)
    size = re.search(r'viewBox="0 0 ([\d.]+) ([\d.]+)"', body)
    assert size is not None
    opening = f'<svg viewBox="0 0 {size[1]} {size[2]}" aria-hidden="true" focusable="false" {_LINKS}>'
    return opening + re.sub(r"\n\s*", "\n", body[body.index(">") + 1 :])


def _variable(colour: str) -> str:
    return f"var({_VARIABLES[colour]})" if colour in _VARIABLES else colour


def _occupied(axis: Axis, counts: Counts, at_least: float | None = None) -> tuple[float, float]:
    """Return the range of an axis that holds stars, a little wider, and a value that must be in it."""
    places = np.flatnonzero(counts)
    if not len(places):
        return axis.low, axis.high
    low, high = axis.edges[places[0]], axis.edges[places[-1] + 1]
    if at_least is not None:
        low, high = min(low, at_least), max(high, at_least)
    margin = 0.03 * (high - low)
    return max(axis.low, float(low - margin)), min(axis.high, float(high + margin))


def _rebinned(axis: Axis, counts: Counts, low: float, high: float, most: int = 60) -> tuple[FloatArray, Counts]:
    """Return edges and counts of bins that a reader can tell apart, of a range of the axis."""
    step = (axis.high - axis.low) / axis.bins
    first, last = int((low - axis.low) / step + 1e-9), int(np.ceil((high - axis.low) / step - 1e-9))
    together = max(1, -(-(last - first) // most))
    starts = np.arange(first, last, together)
    edges = axis.low + step * np.append(starts, min(starts[-1] + together, axis.bins))
    return edges, np.add.reduceat(counts[: edges_place(axis, edges[-1])], starts)


def edges_place(axis: Axis, edge: float) -> int:
    """Return how many bins lie below an edge."""
    return round((edge - axis.low) / (axis.high - axis.low) * axis.bins)


def _log_ticks(axis: Any, low: float, high: float, steps: Sequence[float] = (1, 2, 3, 5)) -> None:
    """Label an axis of decimal logarithms with the numbers themselves, as many as fit."""
    width_inch = axis.axes.figure.get_figwidth()
    is_x = axis.axis_name == "x"
    least_gap, most = (0.62 / width_inch, int(1.4 * width_inch)) if is_x else (0.05, 9)
    ticks: list[float] = []
    for chosen in (steps, (1, 2, 5), (1, 3), (1,)):
        powers = range(int(np.floor(low)) - 1, int(np.ceil(high)) + 1)
        values = [step * 10.0**power for power in powers for step in chosen]
        ticks = [value for value in values if low <= np.log10(value) <= high]
        if len(ticks) < 2 or np.diff(np.log10(ticks)).min() >= least_gap * (high - low):
            break
    every = max(1, -(-len(ticks) // most))
    shown = ticks[::every]
    axis.set_ticks([float(np.log10(value)) for value in shown], [axis_number(value) for value in shown])


def _draw_stars(axes: Any, plane: Counts, teff: Axis, lum: Axis) -> None:
    """Draw density where stars crowd and a point each where they do not, in the colours of blackbodies."""
    from scipy.ndimage import gaussian_filter

    smooth = gaussian_filter(plane.astype(np.float64), 1.5)
    colour = blackbody_rgb(10.0**teff.centres)
    crowded = smooth >= POINTS_BELOW
    if crowded.any():
        depth = np.log(np.maximum(smooth, POINTS_BELOW) / POINTS_BELOW) / np.log(smooth.max() / POINTS_BELOW + 1e-9)
        image = np.empty((lum.bins, teff.bins, 4))
        image[..., :3] = colour
        image[..., 3] = np.where(crowded, 0.4 + 0.6 * depth, 0.0).T
        axes.imshow(
            image,
            extent=(teff.low, teff.high, lum.low, lum.high),
            origin="lower",
            aspect="auto",
            interpolation="nearest",
        )
    x, y = np.nonzero((plane > 0) & ~crowded)
    axes.scatter(teff.centres[x], lum.centres[y], s=5, c=colour[x], linewidths=0, alpha=0.9, rasterized=True)


def _draw_radii(axes: Any, x_range: tuple[float, float], y_range: tuple[float, float]) -> None:
    """Draw lines of constant radius, L = R^2 (T / T_sun)^4 in solar units."""
    x = np.array(x_range)
    for power in range(-4, 5):
        y = 2.0 * power + 4.0 * (x - np.log10(TSUN_K))
        if y[1] < y_range[0] or y[0] > y_range[1]:
            continue
        axes.plot(x, y, color="#9fb0c3", linewidth=0.8, linestyle=(0, (2, 3)), zorder=0.5)
        at_x = min(x_range[1], (y_range[1] - 2.0 * power) / 4.0 + np.log10(TSUN_K)) - 0.02 * (x_range[1] - x_range[0])
        at_y = 2.0 * power + 4.0 * (at_x - np.log10(TSUN_K))
        if at_y > y_range[0] + 0.04 * (y_range[1] - y_range[0]):
            axes.text(at_x, at_y, f"{axis_number(10.0**power)} R☉", color="#d5dee8", size=8, ha="left", va="top")


def _label_ends(axes: Any, ends: list[tuple[str, float, float]]) -> None:
    """Write the name of each line (name, x, decimal logarithm of y) at its end, none on top of another."""
    low, high = np.log10(axes.get_ylim())
    below = -np.inf
    for name, x, log_y in sorted(ends, key=lambda end: end[2]):
        below = max(log_y, below + 0.07 * (high - low))
        place = (x, 10.0**below)
        axes.annotate(name, place, xytext=(5, 0), textcoords="offset points", va="center", weight="bold", clip_on=False)


def _draw_cells(axes: Any, counts: Counts) -> None:
    """Draw how many stars lie in each cell, in matplotlib's cividis (Nuñez, Anderton & Renslow 2018)."""
    from matplotlib import colormaps

    if not counts.any():
        return
    depth = np.log1p(counts) / np.log1p(counts.max())
    image = colormaps["cividis"](0.15 + 0.85 * depth)
    image[..., 3] = np.where(counts > 0, 0.85, 0.0)
    axes.imshow(
        image.transpose(1, 0, 2),
        extent=(COARSE_LOG_TEFF.low, COARSE_LOG_TEFF.high, RESIDUAL.low, RESIDUAL.high),
        origin="lower",
        aspect="auto",
        interpolation="nearest",
    )


def _plane_alt(stats: CatalogueStats) -> str:
    teff = 10.0 ** quantiles(AXES["log_teff"], stats.histograms["log_teff"], (0.0, 0.16, 0.5, 0.84, 1.0))
    lum = 10.0 ** quantiles(AXES["log_lum"], stats.histograms["log_lum"], (0.0, 0.16, 0.5, 0.84, 1.0))
    if np.isnan(teff).any() or np.isnan(lum).any():
        return "Diagram of luminosity against temperature: no star has both."
    return (
        f"Diagram of luminosity against temperature of {integer(stats.plane.sum())} stars. Temperatures from "
        f"{number(teff[0])} to {number(teff[4])} K, median {number(teff[2])} K, the middle 68 % from "
        f"{number(teff[1])} to {number(teff[3])} K; luminosities from {number(lum[0])} to {number(lum[4])} solar, "
        f"median {number(lum[2])}."
    )


def _histogram_alt(label: str, counts: Counts, axis: Axis, is_log: bool, limit: float | None, limit_text: str) -> str:
    values = quantiles(axis, counts, (0.16, 0.5, 0.84))
    if np.isnan(values).any():
        return f"Histogram of {label}: no star has a value."
    low, middle, high = 10.0**values if is_log else values
    text = (
        f"Histogram of {label} of {integer(counts.sum())} stars: median {number(middle)}, "
        f"the middle 68 % from {number(low)} to {number(high)}."
    )
    if limit is not None:
        text += f" {percent(share_above(axis, counts, limit))} lie above the line marked {limit_text}."
    return text


def residual_alt(label: str, band: BandStats) -> str:
    """Return what the figure of a band's residuals shows."""
    counts = band.counts.sum(axis=0)
    if not counts.any():
        return f"Residuals of {label}: none."
    low, middle, high = quantiles(RESIDUAL, counts, (0.16, 0.5, 0.84))
    enough = band.counts.sum(axis=1) >= LEAST_STARS
    text = (
        f"Residuals of {label} against temperature: median {middle:+.2f} sigma, middle 68 % {low:+.2f} to {high:+.2f}"
    )
    if enough.any():
        medians = quantiles(RESIDUAL, band.counts[enough], (0.5,))[:, 0]
        worst = int(np.argmax(np.abs(medians)))
        at_k = 10.0 ** COARSE_LOG_TEFF.centres[enough][worst]
        text += f"; the median is furthest from zero near {number(at_k)} K, {medians[worst]:+.2f} sigma"
    return text + "."
