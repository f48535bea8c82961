"""The quality page of a run: one self-contained file that answers whether, and where, a catalogue can be trusted."""

from __future__ import annotations

import base64
import hashlib
import json
import os
import shutil
import tomllib
import uuid
import warnings
from collections.abc import Mapping
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from jinja2 import Environment, FileSystemLoader, StrictUndefined
from markupsafe import Markup

from starkiln.engine.disk import disk_trouble
from starkiln.engine.generations import Generations
from starkiln.errors import SettingsError, StarkilnError
from starkiln.report import page_verdict, page_words
from starkiln.report.audit_figure import save_audit
from starkiln.report.page_colours import blackbody_hex
from starkiln.report.page_figures import Figures, Picture, drawing_style
from starkiln.report.page_sources import sources
from starkiln.report.page_stars import (
    BOTTOM,
    FLUX_HEIGHT,
    GAP,
    LEFT,
    MOST_SIGMA,
    RESIDUAL_HEIGHT,
    RIGHT,
    TOP,
    WIDTH,
    read_observed,
    residual_y,
    star_pictures,
)
from starkiln.report.page_stats import (
    AXES,
    FLAG_WEIGHTS,
    MOST_OF_ONE_KIND,
    WORST_ROWS,
    CatalogueStats,
    gather,
    quantiles,
)
from starkiln.settings import Settings, load_settings
from starkiln.stages.bands import Bands, build_bands

TEMPLATES = Path(__file__).parent / "templates"
STRIP_K = (50_000.0, 2_000.0)
"""Ends of the strip of colours at the head of the page."""


@dataclass(frozen=True)
class Run:
    """A published generation as its page needs it.

    Attributes
    ----------
    folder
        The generation.
    facts
        Its run.json.
    settings_text, sections
        Its settings as text and as plain sections.
    settings, bands
        The same, understood; None where this version cannot, with the reason in ``trouble``.
    trouble
        Why settings or bands are missing, else empty.
    """

    folder: Path
    facts: Mapping[str, Any]
    settings_text: str
    sections: Mapping[str, Any]
    settings: Settings | None
    bands: Bands | None
    trouble: str


def build_page(run_dir: Path) -> Path:
    """Build the quality page of a run's published generation, or build it again, and return its path.

    The page appears whole or not at all, with its figures as PDF and PNG beside it.

    Parameters
    ----------
    run_dir
        A run's output folder.

    Raises
    ------
    SettingsError
        If it holds no published catalogue.
    EnvironmentTrouble
        If something cannot be read or written.
    """
    generations = Generations(run_dir)
    number = generations.current()
    if number is None:
        raise SettingsError(f"{run_dir} holds no published catalogue: name the run.output of a finished run")
    folder = generations.folder(number)
    fresh = folder / f".report.{uuid.uuid4().hex}.tmp"
    with disk_trouble(folder):
        try:
            fresh.mkdir()
            (fresh / "index.html").write_text(render(read_run(folder), fresh / "figures"), encoding="utf-8")
            _put_in_place(fresh, folder / "report")
        finally:
            shutil.rmtree(fresh, ignore_errors=True)
        _link(run_dir / "report", Path("current") / "report")
    return folder / "report" / "index.html"


def _put_in_place(fresh: Path, place: Path) -> None:
    old = fresh.with_suffix(".old")
    with suppress(FileNotFoundError):
        place.rename(old)
    try:
        fresh.rename(place)
    except OSError:
        with suppress(OSError):
            old.rename(place)
        raise
    shutil.rmtree(old, ignore_errors=True)


def _link(link: Path, target: Path) -> None:
    if link.is_symlink() and Path(os.readlink(link)) == target:
        return
    fresh = link.with_name(f".{link.name}.{uuid.uuid4().hex}.tmp")
    fresh.symlink_to(target)
    fresh.replace(link)


def read_run(folder: Path) -> Run:
    """Return what a generation's folder tells of it, as far as this version understands it."""
    facts = json.loads((folder / "run.json").read_text(encoding="utf-8"))
    text = (folder / "settings.toml").read_text(encoding="utf-8")
    settings, bands, trouble = None, None, ""
    try:
        settings = load_settings(folder / "settings.toml")
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # the run has said it
            bands = build_bands(settings)
    except StarkilnError as error:
        trouble = str(error)
    return Run(folder, facts, text, tomllib.loads(text), settings, bands, trouble)


def render(run: Run, figures: Path) -> str:
    """Return the page as HTML, and save its figures.

    Parameters
    ----------
    run
        The generation.
    figures
        The folder of the figures; made here.
    """
    stats = gather(run.folder)
    with drawing_style():
        pictures = _pictures(run, stats, Figures(figures), figures)
    observed = {}
    if run.settings is not None and run.bands is not None:
        observed = read_observed(stats.worst, stats.id_name, run.settings, run.bands)
    stars = star_pictures(stats.worst, stats.id_name, run.bands, observed)
    style, script = ((TEMPLATES / name).read_text(encoding="utf-8") for name in ("style.css", "script.js"))
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    return (
        _environment()
        .get_template("page.html")
        .render(
            run=run,
            facts=run.facts,
            stats=stats,
            pictures=pictures,
            stars=stars,
            style=Markup(style),
            script=Markup(script),
            script_digest=digest,
            strip=_strip(stats),
            sed=_sed_frame(),
            **_answers(run, stats),
            **_tables(run, stats),
        )
    )


def _environment() -> Environment:
    environment = Environment(
        loader=FileSystemLoader(TEMPLATES),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters |= {
        "integer": page_words.integer,
        "number": page_words.number,
        "percent": page_words.percent,
        "size": page_words.size,
    }
    return environment


def _answers(run: Run, stats: CatalogueStats) -> dict[str, Any]:
    found = page_verdict.worries(run.facts, stats)
    samples = None if run.settings is None else run.settings.sampling.effective_samples
    return {
        "worry": page_verdict.worry_sentence(found),
        "is_worried": bool(found),
        "job": page_verdict.job_answer(run.facts),
        "job_detail": page_verdict.job_detail(run.facts, stats),
        "sample": page_verdict.sample_answer(stats),
        "trust": page_verdict.trust_answer(stats),
        "data": page_verdict.data_answer(run.facts, stats),
        "inference": page_verdict.inference_answer(stats, samples),
        "done": page_verdict.done_answer(run.facts, run.sections),
        "scale": page_verdict.scale_answer(run.sections),
    }


def _tables(run: Run, stats: CatalogueStats) -> dict[str, Any]:
    pivots_um = {} if run.bands is None else {label: band.pivot_um for label, band in run.bands.passbands.items()}
    hashes = dict(run.facts.get("hashes", {}))
    of_bands = hashes.pop("passbands", {})
    return {
        "counts": page_verdict.run_table(run.facts, stats),
        "flags": page_verdict.flag_table(stats),
        "bands": page_verdict.band_table(stats, pivots_um),
        "audit": run.facts.get("zero_point_audit") or [],
        "weights": FLAG_WEIGHTS,
        "most_of_one_kind": MOST_OF_ONE_KIND,
        "worst_rows": WORST_ROWS,
        "sources": sources(run.sections, run.facts.get("passbands", {})),
        "hashes": hashes | {f"passband {label}": digest for label, digest in of_bands.items()},
    }


def _pictures(run: Run, stats: CatalogueStats, draw: Figures, folder: Path) -> dict[str, Any]:
    found = stats.histograms

    def histogram(name: str, title: str, label: str, **options: Any) -> Picture:
        key = name.replace("-", "_")
        return draw.histogram(name, title, found[key], AXES[key], label, **options)

    samples = None if run.settings is None else run.settings.sampling.effective_samples
    asked = {} if not samples else {"limit": float(np.log10(samples)), "limit_text": f"{samples:,} asked for"}
    poor = {"part": stats.poor_dist, "part_text": "hatched: parallax below 5 errors"} if stats.poor_dist.any() else {}
    return {
        "plane": draw.plane(stats),
        "sample": [
            histogram("log-teff", "Temperature", "effective temperature T [K]"),
            histogram("log-radius", "Radius", "radius R [R☉]"),
            histogram("log-lum", "Luminosity", "luminosity L [L☉]"),
            histogram("av", "Extinction", "extinction A_V [mag]", is_log=False),
        ],
        "widths": draw.widths(stats),
        "distance": histogram("log-dist-width", "Distances", "half of the 68 % interval / median of distance", **poor),
        "residuals": [draw.residual(label, band) for label, band in stats.bands.items()],
        "audit": _audit_picture(run.facts.get("zero_point_audit") or [], folder),
        "sampling": [
            histogram("log-ess-bulk", "Bulk effective sample size", "bulk effective sample size", **asked),
            histogram("log-ess-tail", "Tail effective sample size", "tail effective sample size"),
            histogram("log-tau", "Autocorrelation time", "autocorrelation time [steps]"),
            histogram("rhat", "R-hat", "largest R-hat", is_log=False, limit=1.1, limit_text="flagged above 1.1"),
            histogram("accept", "Acceptance", "fraction of proposals accepted", is_log=False),
            histogram("log-steps", "Steps", "steps of each walker after the burn-in"),
        ],
        "p_value": histogram("p-value", "Predictive p-values", "predictive p-value", is_log=False, whole=True),
    }


def _audit_picture(rows: list[dict[str, Any]], folder: Path) -> Picture | None:
    if not rows:
        return None
    paths = save_audit(rows, folder / "zero-point-audit")
    data = base64.b64encode(next(path for path in paths if path.suffix == ".png").read_bytes()).decode()
    told = "; ".join(f"{row['label']} {row['offset_mag']:+.3f} ± {row['error_mag']:.3f} mag" for row in rows)
    image = f'<img class="plate" src="data:image/png;base64,{data}" alt="">'
    alt = f"Offset of each band's zero point: {told}."
    return Picture("zero-point-audit", "Offsets of zero points", alt, Markup(image))


def _strip(stats: CatalogueStats) -> dict[str, Any]:
    """Return the strip of colours: stops, labels and the place of the sample's median, in per cent from the left."""
    hot, cool = np.log10(STRIP_K)

    def place(log_teff: float) -> float:
        return round(100.0 * float(np.clip((log_teff - hot) / (cool - hot), 0.0, 1.0)), 1)

    stops = np.linspace(hot, cool, 24)
    median = float(quantiles(AXES["log_teff"], stats.histograms["log_teff"], (0.5,))[0])
    return {
        "stops": ", ".join(f"{blackbody_hex(10.0**stop)} {place(stop)}%" for stop in stops),
        "ticks": [(place(np.log10(teff)), f"{teff:,}") for teff in (30_000, 10_000, 5_000, 3_000)],
        "median": place(median) if np.isfinite(median) else None,
        "median_text": page_words.number(10.0**median),
    }


def _sed_frame() -> dict[str, float]:
    """Return the lengths that the pictures of stars share."""
    bottom = TOP + FLUX_HEIGHT + GAP + RESIDUAL_HEIGHT
    return {
        "width": WIDTH,
        "height": bottom + BOTTOM,
        "left": LEFT,
        "right": WIDTH - RIGHT,
        "top": TOP,
        "flux_bottom": TOP + FLUX_HEIGHT,
        "residual_top": TOP + FLUX_HEIGHT + GAP,
        "zero": residual_y(0.0),
        "plus": residual_y(3.0),
        "minus": residual_y(-3.0),
        "bottom": bottom,
        "most": MOST_SIGMA,
    }
