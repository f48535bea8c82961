"""Nights that are each too short: a time limit of a third of a run's need, again and again until it is published.

    python tests/benchmarks/nights.py [rows]

Invented blackbodies are fitted with short chains on two workers: once undisturbed, which tells the need, then with
`--time-limit` of a third of it. Told for each night: the exit code, how long it took beside its limit, and what the
ledger has gained; in the end whether the catalogue is the undisturbed one, and how many parts were begun twice.
"""

from __future__ import annotations

import json
import sqlite3
import subprocess
import sys
import tempfile
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

from pipeline_survey import QUICK, blackbodies, write
from small_survey import settings_for
from starkiln.settings import Settings, dump_toml

COMPUTE = {"compute__workers": 2, "compute__rows_per_part": 250}
MOST_NIGHTS = 12


def settings_of(survey: Path, run_dir: Path) -> Settings:
    return settings_for(survey, run_dir, **QUICK | COMPUTE)


def night(settings: Settings, *limit: str) -> tuple[int, float]:
    """Run once, and return the exit code and the seconds from the start of the process to its end."""
    config = settings.run.output.with_suffix(".toml")
    config.write_text(dump_toml(settings))
    began = time.monotonic()
    code = subprocess.run([sys.executable, "-m", "starkiln", "run", config, "--quiet", *limit]).returncode
    return code, time.monotonic() - began


def gained(run_dir: Path) -> tuple[int, int]:
    """Return how many parts are done, and how many tries at parts there were."""
    with sqlite3.connect(run_dir / "ledger.sqlite") as ledger:
        parts = ledger.execute("SELECT count(*) FROM parts").fetchone()[0]
        tries = ledger.execute("SELECT count(*) FROM attempts").fetchone()[0]
    return parts, tries


def files_of(run_dir: Path) -> dict[str, dict[str, object]]:
    return json.loads((run_dir / "current" / "run.json").read_text())["files"]


def main() -> None:
    rows = int(sys.argv[1]) if len(sys.argv) > 1 else 12_000
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        tables = {f"t{number}": blackbodies(rows // 4, 1 + number * rows) for number in range(4)}
        survey = write(folder / "survey", **tables)
        whole, need_s = night(settings_of(survey, folder / "whole"))
        print(f"undisturbed: {rows} rows, exit code {whole}, {need_s:.1f} s", flush=True)
        settings, codes = settings_of(survey, folder / "nights"), []
        limit_s = max(need_s / 3, 1.0)
        while (not codes or codes[-1] == 5) and len(codes) < MOST_NIGHTS:
            code, took_s = night(settings, "--time-limit", f"{limit_s:.1f}s")
            codes.append(code)
            parts, tries = gained(settings.run.output)
            print(
                f"night {len(codes)}: limit {limit_s:.1f} s, took {took_s:.1f} s, exit code {code}; "
                f"{parts} parts done, {tries} tries that ended",
                flush=True,
            )
        same = codes[-1] == 0 and files_of(settings.run.output) == files_of(folder / "whole")
        print(f"exit codes {codes}; the catalogue is {'the same, byte by byte' if same else 'ANOTHER'}")
        raise SystemExit(not same)


if __name__ == "__main__":
    main()
