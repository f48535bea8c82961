"""run.json: what a generation is, and how it came about."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from starkiln.engine import provenance
from starkiln.engine.audits import pack_audit, unpack_audit
from starkiln.engine.disk import disk_trouble
from starkiln.engine.records import Plan
from starkiln.engine.resources import peak_memory
from starkiln.engine.tally import Tally
from starkiln.settings import Settings, dump_toml
from starkiln.stages.audit import together, zero_point_audit
from starkiln.tables.source import Source
from starkiln.tables.write import PackedFile

AUDIT_FILE = "audit.npz"

MOST_OUTDATED = 0.1
"""Sums over earlier stars stand for them as long as no more of these have changed or gone."""


@dataclass(frozen=True)
class AuditSource:
    """Sums over stars, and how many: fitted for this generation, taken from earlier ones, and of those out of date."""

    sums: Any
    fitted: int
    earlier: int = 0
    outdated: int = 0


def audit_source(tally: Tally, plan: Plan, published: Mapping[str, Any] | None, folder: Path | None) -> AuditSource:
    """Return what the audit of zero points is made of: the rows fitted, and the earlier stars if most still stand.

    Parameters
    ----------
    tally
        The sums over the parts.
    plan
        The plan.
    published
        The run.json of the published generation, if there is one.
    folder
        The folder of that generation.
    """
    fresh = AuditSource(tally.audit, tally.fitted)
    if published is None or folder is None or not plan.rows.kept or not (folder / AUDIT_FILE).is_file():
        return fresh
    with disk_trouble(folder / AUDIT_FILE):
        sums = unpack_audit((folder / AUDIT_FILE).read_bytes())
    stars = published["zero_point_audit_stars"]
    earlier = stars["fitted"] + stars["earlier"]
    outdated = stars["outdated"] + plan.rows.changed + plan.rows.gone
    if outdated > MOST_OUTDATED * earlier:
        return fresh
    return AuditSource(together(tally.audit, sums), tally.fitted, earlier, outdated)


def generation_facts(
    *,
    settings: Settings,
    source: Source,
    model: Any,
    plan: Plan,
    tally: Tally,
    audit: AuditSource,
    hashes: Mapping[str, Any],
    workers: int,
    start: datetime,
    fitted_now: int,
    wall: Mapping[str, float],
    files: Mapping[str, list[PackedFile]],
    folder: Path,
) -> dict[str, Any]:
    """Return the contents of run.json.

    Parameters
    ----------
    settings, source, model, plan
        What the generation is made of.
    tally
        The sums over its parts.
    audit
        What the stars say of the zero points.
    hashes
        What a later run compares with.
    workers
        The workers of its last run.
    start
        When that run began.
    fitted_now
        Rows that it fitted.
    wall
        The seconds of its steps.
    files
        The packed files by table.
    folder
        Where they lie.
    """
    stages = {stage: round(seconds, 3) for stage, seconds in sorted(tally.seconds.items())}
    rate = round(fitted_now / wall["work"], 2) if wall.get("work") else None
    return {
        "name": settings.run.name,
        "exit_code": 4 if source.skipped or tally.set_aside else 0,
        "start": start.isoformat(timespec="milliseconds"),
        "end": datetime.now(UTC).isoformat(timespec="milliseconds"),
        "counts": tally.counts(plan),
        "duplicates": plan.duplicates,
        "rows": asdict(plan.rows) | {"set_aside": tally.set_aside},
        "why": plan.why,
        "flags": dict(sorted(tally.flags.items())),
        "zero_point_audit": zero_point_audit(audit.sums, model, settings),
        "zero_point_audit_stars": {
            "fitted": audit.fitted,
            "earlier": audit.earlier,
            "outdated": audit.outdated,
        },
        "workers": workers,
        "parts": plan.parts,
        "seconds": {
            "wall": {step: round(seconds, 3) for step, seconds in wall.items()},
            "summed_over_workers": stages,
        },
        "stars_per_second": rate,
        "peak_memory_bytes": {"driver": peak_memory(), "worker": tally.worker_peak},
        "versions": provenance.versions(),
        "platform": provenance.platform_facts(),
        "hashes": dict(hashes),
        "passbands": provenance.passband_sources(model),
        "input": provenance.input_facts(source, plan, settings),
        "files": {
            file.path.relative_to(folder).as_posix(): {"rows": file.rows, "sha256": file.sha256}
            for packed in files.values()
            for file in packed
        },
    }


def write_facts(folder: Path, settings: Settings, facts: Mapping[str, Any], audit: AuditSource) -> None:
    """Write what goes with the tables of a generation: the settings, the sums of the audit, and run.json last."""
    with disk_trouble(folder):
        (folder / "settings.toml").write_text(dump_toml(settings))
        if audit.sums is not None:
            (folder / AUDIT_FILE).write_bytes(pack_audit(audit.sums))
        (folder / "run.json").write_text(json.dumps(facts, indent=2) + "\n")
