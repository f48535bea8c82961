"""A picture of the audit of zero points: the offset that each band's stars ask for."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

DETERMINED = "#4477aa"
UNDETERMINED = "#888888"


def save_audit(rows: Sequence[dict[str, Any]], stem: Path) -> list[Path]:
    """Write the picture as PNG and PDF, and return their paths.

    Parameters
    ----------
    rows
        ``zero_point_audit`` of run.json: label, offset_mag, error_mag, determined and stars for each band.
    stem
        The path of both files, without an ending.
    """
    from matplotlib.figure import Figure

    figure = Figure(figsize=(6.4, 1.4 + 0.28 * len(rows)), layout="constrained")
    axes = figure.add_subplot()
    axes.axvline(0.0, color="#222222", linewidth=0.8)
    for wanted, colour, marker, label in (
        (True, DETERMINED, "o", "determined"),
        (False, UNDETERMINED, "s", "undetermined"),
    ):
        places = [place for place, row in enumerate(rows) if row["determined"] == wanted]
        if places:
            axes.errorbar(
                [rows[place]["offset_mag"] for place in places],
                places,
                xerr=[rows[place]["error_mag"] for place in places],
                color=colour,
                # Told apart without colour too.
                marker=marker,
                markerfacecolor=colour if wanted else "white",
                linestyle="none",
                capsize=2,
                label=label,
            )
    axes.set_yticks(range(len(rows)), [f"{row['label']} ({row['stars']:,} stars)" for row in rows])
    axes.set_ylim(max(len(rows), 1) - 0.5, -0.5)
    axes.set_xlabel("offset of the zero point, observed - expected [mag]")
    if rows:
        axes.legend(loc="best", frameon=False)
    stem.parent.mkdir(parents=True, exist_ok=True)
    paths = [stem.with_suffix(".png"), stem.with_suffix(".pdf")]
    figure.savefig(paths[0], dpi=120)
    # No date in the file, so that the same audit gives the same picture.
    figure.savefig(paths[1], metadata={"CreationDate": None})
    return paths
