"""The picture of one star: fluxes against the model, residuals, passbands, and the posterior."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from starkiln.engine.onestar import Star
from starkiln.physics.extinction import extinction_ratio
from starkiln.physics.passbands import Passband
from starkiln.physics.planck import exitance_jy
from starkiln.report.star import BandRow, alike, band_rows, finite, flags_of, shown_id, why_not_the_same
from starkiln.stages.closeup import Spectrum

FloatArray = NDArray[np.float64]

# Tol's bright scheme, told apart by the colour-blind; every kind of point has a shape of its own, too.
OBSERVED, MODEL, LIMIT, UNUSED, SHADE = "#222222", "#4477aa", "#cc3311", "#999999", "#bbccee"
CORNER = (("teff", "T", "K"), ("radius", "R", r"$R_\odot$"), ("lum", "L", r"$L_\odot$"), ("av", "$A_V$", "mag"))
OBSERVED_LABEL = "observed"
INTERVAL_LABEL = "95 % interval of the blackbody"
CARET_DOWN = 11  # hangs below its place: matplotlib.markers.CARETDOWNBASE, which would load it
SHARES = (0.68, 0.95)
MOST_POINTS = 1500
SIZE_INCH = (13.0, 7.2)
DPI = 130
BELOW_ZERO_SIGMA = 3.0


def save_star(star: Star, stem: Path) -> list[Path]:
    """Write the picture of a star of the catalogue (PNG and PDF), and return where it is."""
    figure = draw_star(star)
    stem.parent.mkdir(parents=True, exist_ok=True)
    paths = [stem.with_name(stem.name + suffix) for suffix in (".png", ".pdf")]
    with warnings.catch_warnings():
        # An id may hold letters that the font has no picture of: a box stands for them.
        warnings.filterwarnings("ignore", message="Glyph")
        figure.savefig(paths[0], dpi=DPI)
        figure.savefig(paths[1], metadata={"CreationDate": None})
    return paths


def draw_star(star: Star) -> Any:
    """Return the picture of a star of the catalogue as a matplotlib Figure."""
    from matplotlib.figure import Figure

    figure: Any = Figure(figsize=SIZE_INCH)
    left, right = figure.subfigures(1, 2, width_ratios=(1.12, 1.0))
    _draw_energy(left, star)
    told = [each for each in CORNER if star.stored.values.get(f"{each[0]}_p50") is not None]
    drawn = [each for each in told if finite(star.draws, each[0]) is not None]
    if len(drawn) > 1:
        _draw_corner(right, star, drawn)
        right.text(0.975, 0.865, _summary(star), fontsize=8, ha="right", va="top", linespacing=1.6)
    else:
        _draw_intervals(right, star)
    figure.text(0.012, 0.972, shown_id(star.star_id), fontsize=14, weight="bold", va="top", parse_math=False)
    figure.text(0.012, 0.932, _subtitle(star), fontsize=8.5, va="top", parse_math=False)
    return figure


def _subtitle(star: Star) -> str:
    run, flags = star.generation.facts.get("name", "?"), ", ".join(name for name, _ in flags_of(star))
    why = why_not_the_same(star)
    text = f"run {run}, generation {star.generation.name}; flags: {flags or 'none'}"
    if not why:
        return text
    short = why if len(why) < 130 else why[:127] + "..."
    return f"{text}\nnumbers as stored: {short}"


def _summary(star: Star) -> str:
    """Return what the corner plot leaves out, for the room above it."""
    values = star.stored.values
    lines = [f"photosphere {values['photosphere']}"]
    if values.get("photosphere_z1_p50") is not None:
        lines.append(f"common departure $z_1$ = {values['photosphere_z1_p50']:.2f}")
    if values.get("dist_p50") is not None:
        middle, low, high = alike([values[f"dist_{suffix}"] for suffix in ("p50", "lo68", "hi68")])
        lines.append(f"d = {middle} pc, 68 % {low} to {high}")
    lines.append(f"$\\chi^2$ = {values['chi2']:.1f} in {values['n_bands'] - values['n_limits']} measured bands")
    if values.get("ppp_value") is not None:
        lines.append(f"predictive p-value {values['ppp_value']:.3f}")
    return "\n".join(lines)


def _draw_intervals(figure: Any, star: Star) -> None:
    """Draw the stored intervals where there are no draws, and say why there are none."""
    text = "68 and 95 % intervals" + (" as stored: no posterior draws to show" if star.draws is None else "")
    if star.stored.values.get("teff_p50") is None:
        text = "fewer than two bands above 3 sigma: T, R and L are left open"
    figure.text(0.12, 0.865, text, fontsize=8.5, color="#666666", va="bottom")
    known = [each for each in CORNER if star.stored.values.get(f"{each[0]}_p50") is not None]
    grid = figure.add_gridspec(4, 1, hspace=1.0, left=0.12, right=0.94, top=0.8, bottom=0.115)
    for place, (name, symbol, unit) in enumerate(known):
        numbers = [star.stored.values[f"{name}_{suffix}"] for suffix in ("lo95", "lo68", "p50", "hi68", "hi95")]
        (low95, low68, middle, high68, high95), label = _scaled(np.array(numbers, np.float64), symbol, unit)
        axes = figure.add_subplot(grid[place])
        axes.plot([low95, high95], [0, 0], color=MODEL, linewidth=2.0)
        axes.plot([low68, high68], [0, 0], color=MODEL, linewidth=8.0, solid_capstyle="butt", alpha=0.55)
        axes.plot(middle, 0, "o", color=OBSERVED, markersize=5)
        axes.set_title(_title(low68, middle, high68, label), fontsize=8, pad=4)
        axes.set_yticks([])
        axes.tick_params(axis="x", labelsize=7.5)


def _draw_energy(figure: Any, star: Star) -> None:
    """Draw fluxes and model, residuals below, and the passbands under them."""
    grid = figure.add_gridspec(
        3, 1, height_ratios=(3.3, 1.1, 1.25), hspace=0.0, left=0.11, right=0.975, top=0.865, bottom=0.075
    )
    fluxes = figure.add_subplot(grid[0])
    residuals = figure.add_subplot(grid[1], sharex=fluxes)
    curves = figure.add_subplot(grid[2], sharex=fluxes)
    rows = band_rows(star)
    assert star.model is not None
    passbands = list(star.model.passbands.values())
    fluxes.set_xscale("log")
    fluxes.set_xlim(*_wavelength_range(passbands))
    if star.spectrum is not None and star.bands is not None and star.stored.values.get("teff_p50") is not None:
        _draw_spectrum(fluxes, star)
        _draw_band_model(fluxes, star)
    _draw_observed(fluxes, rows)
    _set_flux_range(fluxes, rows)
    fluxes.set_ylabel("flux density [Jy]")
    _add_legend(fluxes)
    _draw_residuals(residuals, star, rows)
    _draw_passbands(curves, rows, passbands)
    for axes in (fluxes, residuals):
        axes.tick_params(labelbottom=False, which="both")
    _wavelength_ticks(curves)
    for axes in (fluxes, residuals, curves):
        axes.tick_params(labelsize=8, which="both", direction="in", top=True, right=True)
    figure.align_ylabels([fluxes, residuals, curves])


def _add_legend(axes: Any) -> None:
    """Name what was drawn, the data first."""
    handles, labels = axes.get_legend_handles_labels()
    drawn = dict(zip(labels, handles, strict=True))
    kinds = ("observed", "upper", "model", "blackbody", INTERVAL_LABEL)
    place_of = {label: next(place for place, kind in enumerate(kinds) if label.startswith(kind)) for label in drawn}
    order = sorted(drawn, key=lambda label: (label != OBSERVED_LABEL, place_of[label]))
    axes.legend([drawn[label] for label in order], order, frameon=False, fontsize=7.5, loc="best")


def _wavelength_range(passbands: Sequence[Passband]) -> tuple[float, float]:
    ends = [_core(passband) for passband in passbands]
    return min(low for low, _ in ends) / 1.12, max(high for _, high in ends) * 1.12


def _core(passband: Passband) -> tuple[float, float]:
    """Return where a passband rises above and falls below a hundredth of its peak [um]."""
    inside = passband.wavelength_um[passband.throughput > 0.01 * passband.throughput.max()]
    return float(inside[0]), float(inside[-1])


def _wavelength_ticks(axes: Any) -> None:
    low, high = axes.get_xlim()
    ratio = high / low
    digits = (1, 2, 3, 5) if ratio > 12 else (1, 1.5, 2, 3, 5, 7) if ratio > 5 else (1, 1.5, 2, 3, 4, 5, 6, 7, 8, 9)
    steps = [digit * 10.0**power for power in range(-2, 4) for digit in digits]
    wanted = [step for step in steps if low * 1.02 <= step <= high / 1.02]
    axes.set_xticks(wanted, [f"{step:g}" for step in wanted])
    axes.set_xticks([], minor=True)
    axes.set_xlabel("wavelength [µm]")


def _draw_spectrum(axes: Any, star: Star) -> None:
    assert star.spectrum is not None
    assert star.settings is not None
    low_um, high_um = axes.get_xlim()
    wavelength_um = np.geomspace(low_um, high_um, 400)
    extinction = star.settings.model.extinction
    ratio = extinction_ratio(extinction.law, extinction.rv, wavelength_um)
    if star.closeup is not None:
        draws = _flux_jy(star.closeup.spread, wavelength_um, ratio)
        low, high = np.quantile(draws, [0.025, 0.975], axis=0)
        axes.fill_between(wavelength_um, low, high, color=SHADE, linewidth=0, label=INTERVAL_LABEL)
    where = "at the mode" if star.closeup is not None else "at the stored medians"
    (middle,) = _flux_jy(star.spectrum, wavelength_um, ratio)
    axes.plot(wavelength_um, middle, color=MODEL, linewidth=1.0, label=f"blackbody behind dust, {where}")


def _draw_band_model(axes: Any, star: Star) -> None:
    assert star.bands is not None
    assert star.model is not None
    pivots_um = [passband.pivot_um for passband in star.model.passbands.values()]
    kind = "" if star.stored.values.get("photosphere") == "blackbody" else ", departures included"
    bars = np.abs(np.stack([star.bands.flux_jy - star.bands.low_jy, star.bands.high_jy - star.bands.flux_jy]))
    axes.errorbar(
        pivots_um,
        star.bands.flux_jy,
        bars,
        fmt="s",
        markersize=7,
        markerfacecolor="none",
        color=MODEL,
        linewidth=1.0,
        label=f"model in each band{kind}",
    )


def _flux_jy(spectrum: Spectrum, wavelength_um: FloatArray, ratio: FloatArray) -> FloatArray:
    """Return (n, wavelengths) the flux density of blackbodies behind dust."""
    teff_k, omega, av_mag = (values[:, None] for values in spectrum)
    return np.asarray(omega * exitance_jy(wavelength_um, teff_k) * 10.0 ** (-0.4 * av_mag * ratio))


def _draw_observed(axes: Any, rows: Sequence[BandRow]) -> None:
    style = {"linestyle": "none", "capsize": 0, "elinewidth": 1.2, "zorder": 3}
    seen = [row for row in rows if row.flux_jy is not None and row.pivot_um is not None]
    for use, colour, marker, label in (
        ("used", OBSERVED, "o", OBSERVED_LABEL),
        ("not used", UNUSED, "x", "observed, not used"),
    ):
        some = [row for row in seen if row.use == use and (row.flux_jy or 0.0) > 0.0]
        if some:
            axes.errorbar(
                [row.pivot_um for row in some],
                [row.flux_jy for row in some],
                [row.error_jy or 0.0 for row in some],
                color=colour,
                marker=marker,
                markersize=4.5,
                label=label,
                **style,
            )
    below = [row for row in seen if _is_below_zero(row)]
    _draw_arrows(axes, [row for row in seen if row.use == "limit"], LIMIT, "upper limit", 0.0)
    _draw_arrows(axes, below, OBSERVED, "observed below zero (arrow: 0 + 3 sigma)", BELOW_ZERO_SIGMA)


def _draw_arrows(axes: Any, rows: Sequence[BandRow], colour: str, label: str, sigmas: float) -> None:
    if not rows:
        return
    heights = [sigmas * (row.error_jy or 0.0) if sigmas else row.flux_jy for row in rows]
    pivots = [row.pivot_um for row in rows]
    _hang(axes, pivots, heights, colour, label)


def _hang(axes: Any, places: Sequence[Any], heights: Sequence[Any], colour: str, label: str | None = None) -> None:
    """Draw bars with arrows that hang from them: somewhere below."""
    style = {"linestyle": "none", "color": colour}
    axes.plot(places, heights, marker="_", markersize=11, markeredgewidth=1.8, **style)
    axes.plot(places, heights, marker=CARET_DOWN, markersize=7, label=label, **style)


def _is_below_zero(row: BandRow) -> bool:
    return row.use == "used" and row.flux_jy is not None and row.flux_jy <= 0.0


def _set_flux_range(axes: Any, rows: Sequence[BandRow]) -> None:
    """Let the data set the range; a model far below every limit must not squeeze them."""
    data = [row.flux_jy for row in rows if row.flux_jy is not None and row.flux_jy > 0.0 and row.use != "not used"]
    models = [row.model_jy for row in rows if row.model_jy is not None and row.model_jy > 0.0]
    data += [BELOW_ZERO_SIGMA * row.error_jy for row in rows if _is_below_zero(row) and row.error_jy is not None]
    known = data or models
    if not known:
        return
    low, high = min(known), max(*known, max(models, default=known[0]))
    others = [row.flux_jy for row in rows if row.flux_jy is not None and row.use == "not used"]
    low = min([low, *(flux for flux in [*models, *others] if flux > 0.03 * low)])
    high = max([high, *(flux for flux in others if flux < 30.0 * high)])
    axes.set_yscale("log", nonpositive="clip")
    axes.set_ylim(low / 2.2, high * 2.2)


def _draw_residuals(axes: Any, star: Star, rows: Sequence[BandRow]) -> None:
    for width in (2.0, 1.0):
        axes.axhspan(-width, width, color="#000000", alpha=0.06, linewidth=0)
    axes.axhline(0.0, color=MODEL, linewidth=1.0)
    known = [row for row in rows if row.residual is not None]
    heights = np.array([row.residual for row in known], np.float64)
    axes.plot([row.pivot_um for row in known], heights, "o", color=OBSERVED, markersize=4.5)
    if star.bands is not None:
        spreads = zip(rows, star.bands.spread, strict=True)
        limits = [(row.pivot_um, _limit_sigmas(row, float(spread))) for row, spread in spreads if row.use == "limit"]
        inside = [(pivot, height) for pivot, height in limits if height is not None]
        _hang(axes, [pivot for pivot, _ in inside], [height for _, height in inside], LIMIT)
        heights = np.append(heights, [height for _, height in inside if height is not None])
    axes.set_ylabel("residual [σ]", labelpad=2)
    low, high = min(-3.4, 1.3 * float(heights.min(initial=0.0))), max(3.4, 1.3 * float(heights.max(initial=0.0)))
    if max(-low, high) > 10.0:
        axes.set_yscale("symlog", linthresh=3.0)
        low, high = (end * 1.5 if abs(end) > 10.0 else end for end in (low, high))
        ticks = [tick for tick in (-1000, -100, -10, -3, 0, 3, 10, 100, 1000) if low < tick < high]
        axes.set_yticks(ticks, [str(tick) for tick in ticks])
        axes.set_yticks([], minor=True)
    axes.set_ylim(low, high)


def _limit_sigmas(row: BandRow, spread: float) -> float | None:
    """Return how far a limit lies above the model, in sigmas as the likelihood counts them."""
    if row.flux_jy is None or row.error_jy is None or row.model_jy is None:
        return None
    extra = 0.0 if np.isnan(spread) else spread * row.model_jy
    return (row.flux_jy - row.model_jy) / float(np.hypot(row.error_jy, extra))


def _draw_passbands(axes: Any, rows: Sequence[BandRow], passbands: Sequence[Passband]) -> None:
    """Draw the response curves, each to its peak, with their names above, kept apart."""
    from matplotlib import colormaps

    low, high = np.log(axes.get_xlim())
    pivots = np.array([passband.pivot_um for passband in passbands])
    places = np.exp(spread_out(np.log(pivots), low, high, (high - low) / 42.0))
    for row, passband, place in zip(rows, passbands, places, strict=True):
        used = row.use != "not used"
        depth = (np.log(passband.pivot_um) - low) / (high - low)
        colour = colormaps["viridis"](0.92 * depth) if used else UNUSED
        throughput = passband.throughput / passband.throughput.max()
        axes.fill_between(passband.wavelength_um, throughput, color=colour, alpha=0.28, linewidth=0)
        axes.plot(passband.wavelength_um, throughput, color=colour, linewidth=0.7)
        axes.plot([passband.pivot_um, place], [1.02, 1.22], color=colour, linewidth=0.6)
        axes.text(
            place,
            1.27,
            row.band,
            rotation=90,
            ha="center",
            va="bottom",
            fontsize=6.5,
            color=OBSERVED if used else UNUSED,
            parse_math=False,
        )
    longest = max(len(row.band) for row in rows)
    axes.set_ylim(0.0, 1.4 + 0.13 * longest)
    axes.set_yticks([])
    axes.set_ylabel("passbands")


def spread_out(places: FloatArray, low: float, high: float, apart: float) -> FloatArray:
    """Return places moved as little as need be to lie at least so far apart within the range, order kept."""
    order = np.argsort(places, kind="stable")
    apart = min(apart, (high - low) / (len(places) + 1))
    moved = places[order].astype(np.float64)
    for _ in range(200):
        gaps = np.diff(moved)
        short = np.maximum(apart - gaps, 0.0)
        if short.max(initial=0.0) < 1e-9:
            break
        moved[:-1] -= 0.5 * short
        moved[1:] += 0.5 * short
        moved = np.clip(moved, low + 0.5 * apart, high - 0.5 * apart)
    result = np.empty(len(places))
    result[order] = moved
    return result


def _draw_corner(figure: Any, star: Star, drawn: Sequence[tuple[str, ...]]) -> None:
    """Draw the draws of some quantities against each other, and each by itself."""
    assert star.draws is not None
    count = len(drawn)
    grid = figure.add_gridspec(count, count, hspace=0.06, wspace=0.06, left=0.12, right=0.975, top=0.865, bottom=0.115)
    scaled = [_scaled(star.draws[name], symbol, unit) for name, symbol, unit in drawn]
    for row in range(count):
        for column in range(row + 1):
            axes = figure.add_subplot(grid[row, column])
            (x, x_label), (y, y_label) = scaled[column], scaled[row]
            if row == column:
                _draw_histogram(axes, x, x_label)
            else:
                _draw_pair(axes, x, y)
            _dress(axes, x_label if row == count - 1 else "", y_label if column == 0 and row else "", row == column)


def _scaled(draws: FloatArray, symbol: str, unit: str) -> tuple[FloatArray, str]:
    """Return draws and their label, in powers of ten where the plain numbers are long."""
    size = float(np.median(np.abs(draws)))
    power = int(np.floor(np.log10(size))) if size > 0.0 else 0
    if unit == "mag" or -2 <= power <= 4:
        return draws, f"{symbol} [{unit}]"
    return draws / 10.0**power, f"{symbol} [$10^{{{power}}}$ {unit}]"


def _range(draws: FloatArray) -> tuple[float, float]:
    low, high = np.quantile(draws, [0.002, 0.998])
    return float(low - 0.06 * (high - low)), float(high + 0.06 * (high - low))


def _draw_histogram(axes: Any, draws: FloatArray, label: str) -> None:
    low, middle, high = np.quantile(draws, [0.16, 0.5, 0.84])
    axes.axvspan(low, high, color=SHADE, linewidth=0)
    axes.hist(draws, bins=40, range=_range(draws), histtype="step", color=OBSERVED, linewidth=0.9)
    axes.axvline(middle, color=MODEL, linewidth=1.0)
    axes.set_xlim(*_range(draws))
    axes.set_yticks([])
    axes.set_title(_title(low, middle, high, label), fontsize=8, pad=4)


def _title(low: float, middle: float, high: float, label: str) -> str:
    """Return a median and its 68 % interval as a formula."""
    decimals = max(0, 1 - int(np.floor(np.log10(max(0.5 * (high - low), 1e-12)))))
    text = f"{middle:.{decimals}f}$^{{+{high - middle:.{decimals}f}}}_{{-{middle - low:.{decimals}f}}}$"
    symbol, _, unit = label.partition(" [")
    times = r"$\times$" if unit.startswith("$10^") else ""
    return f"{symbol} = {text} {times}{unit.rstrip(']')}"


def _draw_pair(axes: Any, x: FloatArray, y: FloatArray) -> None:
    """Draw some of the draws, and the contours that hold 68 and 95 % of them."""
    from scipy.ndimage import gaussian_filter

    every = max(1, len(x) // MOST_POINTS)
    axes.plot(x[::every], y[::every], ".", color=UNUSED, markersize=1.5, alpha=0.5, rasterized=True)
    counts, x_edges, y_edges = np.histogram2d(x, y, bins=48, range=[_range(x), _range(y)])
    density = gaussian_filter(counts, 1.6)
    levels = _levels(density)
    if np.all(np.diff(levels) > 0.0):
        centres = (0.5 * (edges[1:] + edges[:-1]) for edges in (x_edges, y_edges))
        axes.contour(*centres, density.T, levels=levels, colors=MODEL, linewidths=(0.8, 1.3))
    axes.set_xlim(*_range(x))
    axes.set_ylim(*_range(y))


def _levels(density: FloatArray) -> list[float]:
    """Return the heights whose contours hold 95 and 68 % of a density."""
    heights = np.sort(density.ravel())[::-1]
    held = np.cumsum(heights) / heights.sum()
    return [float(heights[np.searchsorted(held, share)]) for share in sorted(SHARES, reverse=True)]


def _dress(axes: Any, x_label: str, y_label: str, is_diagonal: bool) -> None:
    from matplotlib.ticker import MaxNLocator, ScalarFormatter

    for axis in (axes.xaxis,) if is_diagonal else (axes.xaxis, axes.yaxis):
        axis.set_major_locator(MaxNLocator(3, prune="both"))
        axis.set_major_formatter(ScalarFormatter(useOffset=False))
        axis.set_tick_params(labelsize=7.5, direction="in")
    axes.tick_params(axis="x", rotation=40, labelbottom=bool(x_label), top=not is_diagonal)
    if not is_diagonal:
        axes.tick_params(axis="y", labelleft=bool(y_label), right=True)
    for text in axes.get_xticklabels():
        text.set(horizontalalignment="right", rotation_mode="anchor")
    axes.set_xlabel(x_label, fontsize=9)
    axes.set_ylabel(y_label, fontsize=9)
