"""One star in words: its numbers, its flags, its bands, and where all of it comes from."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from starkiln.engine.lookup import StarId
from starkiln.engine.onestar import Star
from starkiln.flags import FLAGS
from starkiln.tables.columns import QUANTITIES

SCHEMA = 1
"""Of the JSON; raised when a key goes or changes its meaning."""

SUFFIXES = ("p50", "lo68", "hi68", "lo95", "hi95")
MOST_NAMED = 4
DASH = "-"


class BandRow(NamedTuple):
    """A band as it is told: fluxes in Jy, the residual in sigmas; None where there is no number."""

    band: str
    pivot_um: float | None
    flux_jy: float | None
    error_jy: float | None
    model_jy: float | None
    residual: float | None
    outlier: float | None
    use: str
    why: str


def describe_star(star: Star, pictures: Sequence[Path] = ()) -> str:
    """Return all that is known of a star, for a terminal."""
    rejected = star.stored.outcome == "rejected"
    body = _rejection(star) if rejected else [*_numbers(star), "", *_flag_lines(star)]
    bands = band_rows(star)
    lines = [*_origin(star), "", *body]
    if bands:
        lines += ["", *_band_lines(bands, rejected=rejected)]
    if pictures:
        lines += ["", "picture: " + ", ".join(map(str, pictures))]
    return "\n".join(lines)


def star_json(star: Star, pictures: Sequence[Path] = ()) -> dict[str, Any]:
    """Return all that is known of a star as JSON can hold it, with a schema number."""
    stored, found = star.stored, star.input_row
    is_fitted = stored.outcome == "catalogue"
    return {
        "schema": SCHEMA,
        "id": star.star_id,
        "run": star.generation.facts.get("name"),
        "generation": star.generation.name,
        "table": stored.outcome,
        "file": stored.file,
        "row": stored.row,
        "input": {
            "file": stored.values.get("input_file") if found is None else found.file,
            "row": stored.values.get("input_row") if found is None else found.row,
            "problem": star.input_problem or None,
        },
        "refit": {
            "done": star.closeup is not None,
            "same_bits": None if star.closeup is None else not star.differing,
            "differing": star.differing,
            "why": why_not_the_same(star) or None,
        },
        "values": {name: _plain(value) for name, value in stored.values.items()},
        "units": stored.units,
        "flags": [{"name": name, "meaning": meaning} for name, meaning in flags_of(star)] if is_fitted else [],
        "bands": [row._asdict() for row in band_rows(star)],
        "pictures": [str(path) for path in pictures],
    }


def _plain(value: Any) -> Any:
    """Return a stored value as JSON can hold it: what is no number, text or truth as text."""
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value if value is None or isinstance(value, bool | int | float | str) else str(value)


def shown_id(star_id: StarId) -> str:
    """Return an id as one line that leaves a terminal alone."""
    text = str(star_id)
    return text if text.isprintable() else repr(text)


def flags_of(star: Star) -> list[tuple[str, str]]:
    """Return name and meaning of each flag of a star; a bit that this version has no name for is told by its number."""
    value = star.stored.values.get("flags") or 0
    known = [(flag.name, flag.sentence) for flag in FLAGS if value & flag.value]
    unknown = value & ~sum(flag.value for flag in FLAGS)
    return known + ([(f"bits {unknown:#x}", "Flags of another version of starkiln.")] if unknown else [])


def why_not_the_same(star: Star) -> str:
    """Return why the numbers shown are the stored ones alone; nothing if a new fit gave them, bit for bit."""
    if star.stored.outcome == "rejected":
        return ""
    if star.refit_problem:
        return star.refit_problem
    if not star.differing:
        return ""
    because = f": {star.other_platform}" if star.other_platform else ", on the same platform: please report it"
    return f"a new fit differs in {_listed(star.differing)}{because}"


def _listed(names: Sequence[str]) -> str:
    more = len(names) - MOST_NAMED
    return ", ".join(names[:MOST_NAMED]) + (f" and {more} more columns" if more > 0 else "")


def _origin(star: Star) -> list[str]:
    stored, run = star.stored, star.generation.facts.get("name", "?")
    lines = [
        shown_id(star.star_id),
        f"  run         {run}, generation {star.generation.name}: row {stored.row} of {stored.file}",
        f"  input       {_input_text(star)}",
    ]
    if stored.outcome == "catalogue":
        why = why_not_the_same(star)
        lines.append(
            f"  numbers     as stored; {why}" if why else "  numbers     fitted again: the catalogue's, bit for bit"
        )
    return lines


def _input_text(star: Star) -> str:
    if star.input_row is not None:
        return f"row {star.input_row.row} of {star.input_row.file}"
    values = star.stored.values
    if values.get("input_file") is not None:
        return f"row {values['input_row']} of {values['input_file']}; {star.input_problem}"
    return star.input_problem


def _rejection(star: Star) -> list[str]:
    values = star.stored.values
    fault = "a fault while fitting: `starkiln run --retry-failed` tries again"
    whose = fault if values["kind"] == "fault" else "its data are why"
    return [f"Not fitted: {values['reason']} ({values['detail']}); {whose}."]


def _numbers(star: Star) -> list[str]:
    values, table = star.stored.values, [("", "median", "68 % interval", "95 % interval", "")]
    for quantity in QUANTITIES:
        numbers = [values.get(f"{quantity.name}_{suffix}") for suffix in SUFFIXES]
        title = quantity.title.partition(",")[0].replace("Interstellar extinction A_V", "Extinction A_V")
        if any(number is None for number in numbers):
            table.append((title, DASH, DASH, DASH, quantity.unit))
            continue
        median, lo68, hi68, lo95, hi95 = alike([float(number) for number in numbers if number is not None])
        table.append((title, median, f"{lo68} to {hi68}", f"{lo95} to {hi95}", quantity.unit))
    return [*_aligned(table, "<>>><"), "", *_fit_lines(values)]


def alike(numbers: Sequence[float]) -> list[str]:
    """Return the median and the ends of its intervals with as many decimals as half of the 68 % interval calls for."""
    median, half = numbers[0], 0.5 * abs(numbers[2] - numbers[1])
    size = max(map(abs, numbers))
    if size == 0.0:
        return ["0"] * len(numbers)
    top = math.floor(math.log10(size))
    finest = math.floor(math.log10(half)) - 1 if half > 0.0 else top - 3
    digits = min(max(top - finest, 1), 6)
    if -3 <= top <= 5:
        return [f"{number:.{max(digits - top, 0)}f}" for number in numbers]
    power = math.floor(math.log10(abs(median))) if median else top
    decimals = min(max(power - finest, 1), 6)
    return [f"{number / 10.0**power:.{decimals}f}e{power:+03d}" for number in numbers]


def _fit_lines(values: dict[str, Any]) -> list[str]:
    z1, low, high = (values.get(f"photosphere_z1_{suffix}") for suffix in SUFFIXES[:3])
    common = "" if z1 is None else f"; common departure z_1 = {z1:.2f}, 68 % from {low:.2f} to {high:.2f}"
    odds = values.get("ln_evidence_ratio")
    chosen = "" if odds is None else f"; ln odds of a blackbody {odds:.1f}"
    measured = values["n_bands"] - values["n_limits"]
    limits = _counted(values["n_limits"], "upper limit")
    draws = f"{_number(values['ess_bulk'], '.0f')} effective draws (tail {_number(values['ess_tail'], '.0f')})"
    return [
        f"photosphere   {values['photosphere']}{common}{chosen}",
        f"agreement     chi2 = {_number(values['chi2'], '.1f')} in {_counted(measured, 'measured band')}, {limits}; "
        f"predictive p-value {_number(values['ppp_value'], '.3f')}",
        f"sampling      {draws}, R-hat {_number(values['rhat_max'], '.3f')}, {values['n_steps']} steps",
    ]


def _counted(count: int, noun: str) -> str:
    return f"{count} {noun}" if count == 1 else f"{count or 'no'} {noun}s"


def _number(value: float | None, form: str) -> str:
    return DASH if value is None else format(value, form)


def _flag_lines(star: Star) -> list[str]:
    flags = flags_of(star)
    if not flags:
        return ["flags         none"]
    width = max(len(name) for name, _ in flags)
    return ["flags", *(f"  {name:<{width}}  {meaning}" for name, meaning in flags)]


def band_rows(star: Star) -> list[BandRow]:
    """Return a row for each band, in the order of the settings."""
    if star.model is None:
        labels = [name.removeprefix("residual_") for name in star.stored.values if name.startswith("residual_")]
        return [_band_row(star, label, None) for label in labels]
    return [_band_row(star, label, place) for place, label in enumerate(star.model.passbands)]


def _band_row(star: Star, label: str, place: int | None) -> BandRow:
    residual, outlier = (_of_band(star, f"{name}_{label}") for name in ("residual", "outlier"))
    seen = None if star.observed is None or place is None else star.observed[place]
    use = ("used" if residual is not None else "limit or not used") if seen is None else seen.use
    passband = None if star.model is None else star.model.passbands[label]
    return BandRow(
        band=label,
        pivot_um=None if passband is None else passband.pivot_um,
        flux_jy=None if seen is None else seen.flux_jy,
        error_jy=None if seen is None else seen.error_jy,
        model_jy=None if star.bands is None or place is None else float(star.bands.flux_jy[place]),
        residual=residual,
        outlier=outlier,
        use=use,
        why="" if seen is None else seen.why,
    )


def _of_band(star: Star, name: str) -> float | None:
    """Return a stored number of a band, or that of the new fit where the run did not store it."""
    if name in star.stored.values or star.closeup is None:
        return star.stored.values.get(name)
    value = float(star.closeup.columns[name][0])
    return None if math.isnan(value) else value


def _band_lines(rows: Sequence[BandRow], *, rejected: bool) -> list[str]:
    head = ("band", "pivot [um]", "observed [Jy]", "error [Jy]", "model [Jy]", "resid. [sigma]", "outlier", "")
    table = [head]
    for row in rows:
        use = "usable" if rejected and row.use == "used" else row.use
        table.append(
            (
                row.band,
                _number(row.pivot_um, ".4g"),
                _number(row.flux_jy, ".4g"),
                _number(row.error_jy, ".2g"),
                _number(row.model_jy, ".4g"),
                _number(row.residual, "+.2f"),
                _number(row.outlier, ".2f"),
                f"{use}: {row.why}" if row.why else use,
            )
        )
    if rejected:
        table = [(*row[:4], row[7]) for row in table]  # type: ignore[misc]
        return _aligned(table, "<>>><")
    return _aligned(table, "<>>>>>><")


def _aligned(table: Sequence[Sequence[str]], sides: str) -> list[str]:
    widths = [max(len(row[column]) for row in table) for column in range(len(sides))]
    return [
        "  ".join(f"{cell:{side}{width}}" for cell, side, width in zip(row, sides, widths, strict=True)).rstrip()
        for row in table
    ]


def finite(draws: dict[str, np.ndarray] | None, name: str) -> np.ndarray | None:
    """Return the draws of a quantity, None where there are none or they do not vary."""
    if draws is None or name not in draws:
        return None
    values = draws[name]
    return values if len(values) > 1 and np.isfinite(values).all() and np.ptp(values) > 0 else None
