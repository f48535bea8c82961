"""The answers of the quality page: a sentence each, from the facts of a run and the statistics of its catalogue."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from starkiln.flags import BY_NAME
from starkiln.report.page_stats import AXES, RESIDUAL, CatalogueStats, quantiles, share_above
from starkiln.report.page_words import duration, integer, number, percent

WORRY_NOT_CONVERGED = 0.01
WORRY_LOW_P_VALUES = 0.03
LOW_P_VALUE = 0.01
WORRY_MEDIAN_SIGMA = 0.5
WORRY_OFFSET_MAG = 0.02
WORRY_OFFSET_ERRORS = 3.0
WORRY_REJECTED = 0.05

EXIT_CODES = {
    0: "done",
    4: "done and published, but rows were set aside for faults or input files left out",
}
"""A generation is published with one of these only."""


def job_answer(facts: Mapping[str, Any]) -> str:
    """Return whether the run did its job."""
    counts, code = facts["counts"], facts["exit_code"]
    start = "Yes." if code == 0 else "Yes, but not for all rows:" if code == 4 else "No:"
    return (
        f"{start} Of {integer(counts['selected'])} selected rows {integer(counts['catalogue'])} were fitted and "
        f"{integer(counts['rejected'])} rejected, {integer(counts['pending'])} are pending."
    )


def job_detail(facts: Mapping[str, Any], stats: CatalogueStats) -> str:
    """Return how the run ended, in more words."""
    counts, code = facts["counts"], facts["exit_code"]
    wall = facts.get("seconds", {}).get("wall", {})
    took = f" The last run that built it took {duration(sum(wall.values()))}." if wall else ""
    return (
        f"Exit code {code}: {EXIT_CODES.get(code, 'see the README')}. Of {integer(counts['read'])} rows read "
        f"{integer(counts['filtered'])} were filtered out and {integer(counts['selected'])} selected; "
        f"{integer(stats.flagged)} rows of the catalogue carry a flag.{took}"
    )


def sample_answer(stats: CatalogueStats) -> str:
    """Return what the sample looks like."""
    told = []
    for name, symbol, unit in (("log_teff", "T", " K"), ("log_radius", "R", " R☉"), ("log_lum", "L", " L☉")):
        low, middle, high = 10.0 ** quantiles(AXES[name], stats.histograms[name], (0.16, 0.5, 0.84))
        if np.isfinite(middle):
            told.append(f"{symbol} {number(middle)}{unit} ({number(low)} to {number(high)})")
    if not told:
        return "No star has a temperature."
    models = ", ".join(f"{integer(rows)} {name}" for name, rows in sorted(stats.photospheres.items()))
    return f"Medians, and where the middle 68 % lie: {'; '.join(told)}. Photosphere models: {models or 'none'}."


def trust_answer(stats: CatalogueStats) -> str:
    """Return which rows to trust."""
    if not stats.rows:
        return "The catalogue has no row."
    clean = stats.rows - stats.flagged
    text = f"{integer(clean)} of {integer(stats.rows)} rows ({percent(clean / stats.rows)}) carry no flag"
    name = max(stats.flags, key=lambda flag: stats.flags[flag])
    if not stats.flags[name]:
        return text + "."
    return f"{text}; the most frequent flag is {name}, on {integer(stats.flags[name])}."


def data_answer(facts: Mapping[str, Any], stats: CatalogueStats) -> str:
    """Return whether the data are sound."""
    medians = median_residuals(stats)
    told = []
    if medians:
        label = max(medians, key=lambda band: abs(medians[band]))
        told.append(f"The largest median residual of a band is {medians[label]:+.2f} sigma, in {label}")
    else:
        told.append("The catalogue holds no residuals (output.per_band)")
    audit = facts.get("zero_point_audit")
    if audit:
        off = [row["label"] for row in audit if is_off(row)]
        told.append(
            f"{integer(len(off))} of {integer(len(audit))} zero points are off by more than {WORRY_OFFSET_ERRORS:.0f} "
            f"errors and {WORRY_OFFSET_MAG:g} mag" + (f": {', '.join(off)}" if off else "")
        )
    else:
        told.append("zero points were not audited in this run")
    return "; ".join(told) + "."


def inference_answer(stats: CatalogueStats, effective_samples: float | None) -> str:
    """Return whether the inference is sound."""
    if not stats.rows:
        return "No star was fitted."
    missed = stats.flags["not_converged"]
    ess = 10.0 ** quantiles(AXES["log_ess_bulk"], stats.histograms["log_ess_bulk"], (0.5,))[0]
    target = "" if effective_samples is None else f", asked for were {integer(effective_samples)}"
    low = 1.0 - share_above(AXES["p_value"], stats.histograms["p_value"], LOW_P_VALUE)
    return (
        f"{integer(stats.rows - missed)} of {integer(stats.rows)} stars converged; the median bulk effective sample "
        f"size is {number(ess)}{target}. {percent(low)} of the predictive p-values lie below {LOW_P_VALUE:g}."
    )


def done_answer(facts: Mapping[str, Any], settings: Mapping[str, Any]) -> str:
    """Return what was done."""
    model = settings.get("model", {})
    bands = settings.get("input", {}).get("photometry", [])
    method = facts.get("hashes", {}).get("method", "–")
    return (
        f"starkiln {facts.get('versions', {}).get('starkiln', '–')}, method {method}: "
        f"{model.get('photosphere', '–')} photospheres through {integer(len(bands))} bands, "
        f"dust after {model.get('extinction', {}).get('law', '–')}, random numbers from seed "
        f"{settings.get('run', {}).get('seed', '–')}."
    )


def scale_answer(settings: Mapping[str, Any]) -> str:
    """Return whose temperature scale the catalogue is on, and what its intervals leave out."""
    if settings.get("model", {}).get("photosphere") == "blackbody":
        scale = (
            "Temperatures and radii are those of the blackbody that fits best, which for real photospheres are off by "
            "far more than the intervals say."
        )
    else:
        scale = (
            "The temperature scale is that of the reference stars behind the departures. Published scales differ by "
            "2\N{NO-BREAK SPACE}%, for M dwarfs by 5\N{NO-BREAK SPACE}%, which the intervals do not hold."
        )
    return scale + " Unresolved companions and dust unlike the law make a star look other than it is."


def is_off(row: Mapping[str, Any]) -> bool:
    """Return whether a band's zero point asks for a correction worth speaking of."""
    offset = abs(row["offset_mag"])
    return bool(row["determined"] and offset > WORRY_OFFSET_MAG and offset > WORRY_OFFSET_ERRORS * row["error_mag"])


def median_residuals(stats: CatalogueStats) -> dict[str, float]:
    """Return each band's median residual in sigma; bands without any are left out."""
    found = {
        label: float(quantiles(RESIDUAL, band.counts.sum(axis=0), (0.5,))[0]) for label, band in stats.bands.items()
    }
    return {label: value for label, value in found.items() if np.isfinite(value)}


def worries(facts: Mapping[str, Any], stats: CatalogueStats) -> list[str]:
    """Return what is worth a worry, the gravest first, each as the end of a sentence."""
    counts, rows = facts["counts"], max(stats.rows, 1)
    set_aside = facts.get("rows", {}).get("set_aside", 0)
    skipped = facts.get("input", {}).get("skipped", [])
    off = [row["label"] for row in facts.get("zero_point_audit") or () if is_off(row)]
    medians = {label: value for label, value in median_residuals(stats).items() if abs(value) > WORRY_MEDIAN_SIGMA}
    p_values = stats.histograms["p_value"]
    low = 1.0 - share_above(AXES["p_value"], p_values, LOW_P_VALUE)
    missed = stats.flags["not_converged"] / rows
    rejected = counts["rejected"] / max(counts["selected"], 1)
    found = [
        (set_aside > 0, f"{integer(set_aside)} rows were set aside for faults"),
        (len(skipped) > 0, f"{integer(len(skipped))} input files were left out"),
        (missed > WORRY_NOT_CONVERGED, f"{percent(missed)} of the stars did not converge"),
        (bool(off), f"the zero points of {', '.join(off)} look wrong"),
        (
            low > WORRY_LOW_P_VALUES,
            f"{percent(low)} of the predictive p-values lie below {LOW_P_VALUE:g}",
        ),
        (
            bool(medians),
            "the residuals of "
            + ", ".join(f"{label} ({value:+.1f} sigma)" for label, value in medians.items())
            + " are not centred on zero",
        ),
        (rejected > WORRY_REJECTED, f"{percent(rejected)} of the rows were rejected"),
        (stats.flags["outside_calibration"] > 0.5 * rows, "most stars lie outside the calibration"),
    ]
    return [text for holds, text in found if holds]


def worry_sentence(found: Sequence[str]) -> str:
    """Return what to worry about in one sentence."""
    if not found:
        return "Nothing stands out."
    return f"Worth a look: {'; '.join(found)}."


def run_table(facts: Mapping[str, Any], stats: CatalogueStats) -> list[tuple[str, str, str]]:
    """Return name, value and meaning of the counts of a run."""
    counts = facts["counts"]
    code = facts["exit_code"]
    rate = facts.get("stars_per_second")
    wall = facts.get("seconds", {}).get("wall", {})
    table = [
        ("read", integer(counts["read"]), "rows in the input tables"),
        ("filtered", integer(counts["filtered"]), "turned away by input.where or input.only"),
        ("selected", integer(counts["selected"]), "read less filtered"),
        ("fitted", integer(counts["catalogue"]), "rows of the catalogue"),
        ("rejected", integer(counts["rejected"]), _reasons(counts.get("rejected_by_reason", {}))),
        ("pending", integer(counts["pending"]), "none in a published catalogue"),
        ("flagged", integer(stats.flagged), "rows of the catalogue with at least one flag"),
    ]
    if wall:
        at_rate = f", {number(rate)} stars a second with {facts.get('workers', '–')} workers" if rate else ""
        table.append(("time", duration(sum(wall.values())), f"of the last run that built it{at_rate}"))
    table.append(("exit code", str(code), EXIT_CODES.get(code, "see the README")))
    return table


def _reasons(reasons: Mapping[str, int]) -> str:
    return "; ".join(f"{name}: {integer(rows)}" for name, rows in reasons.items()) or "none"


def flag_table(stats: CatalogueStats) -> list[dict[str, Any]]:
    """Return what the page tells of each flag, the most frequent first."""
    rows = max(stats.rows, 1)
    return [
        {
            "name": name,
            "meaning": BY_NAME[name].sentence,
            "rows": found,
            "share": percent(found / rows) if found else "0 %",
            "example": stats.examples.get(name, ""),
        }
        for name, found in sorted(stats.flags.items(), key=lambda pair: -pair[1])
    ]


def band_table(stats: CatalogueStats, pivots_um: Mapping[str, float]) -> list[dict[str, Any]]:
    """Return what the page tells of each band's residuals."""
    table = []
    for label, band in stats.bands.items():
        counts = band.counts.sum(axis=0)
        low, middle, high = quantiles(RESIDUAL, counts, (0.16, 0.5, 0.84))
        total = max(int(counts.sum()), 1)
        far = counts[np.abs(RESIDUAL.centres) > 3.0].sum() / total
        table.append(
            {
                "label": label,
                "pivot_um": pivots_um.get(label),
                "stars": int(counts.sum()),
                "median": float(middle),
                "spread": float(0.5 * (high - low)),
                "far": float(far),
                "outliers": band.outliers / total,
            }
        )
    return table
