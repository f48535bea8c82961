"""Runs that are killed at a random instant, and run again: nothing lost, nothing twice, the same bytes.

    python tests/benchmarks/kill_and_resume.py 40

A small survey of blackbodies is fitted with short chains on two workers, once undisturbed, which tells how long its
steps take. Then as many runs are killed as are asked for, each in a run directory of its own that holds two older
generations: the driver, one worker, or the whole process group, at an instant drawn uniformly from the undisturbed
run's duration; ten more at one drawn from its packing and publishing. Each is run again, until it ends with 0. All the
while a reader reads the catalogue again and again.
"""

from __future__ import annotations

import hashlib
import json
import os
import signal
import subprocess
import sys
import tempfile
import threading
import time
from collections import Counter
from contextlib import suppress
from datetime import datetime
from pathlib import Path

import numpy as np
import psutil
import pyarrow as pa
import pyarrow.parquet as pq

sys.path.insert(0, str(Path(__file__).parents[1]))

from pipeline_survey import QUICK, blackbodies, write
from small_survey import settings_for
from starkiln.settings import Settings, dump_toml

FILES, ROWS_A_FILE = 3, 180
COMPUTE = {"compute__workers": 2, "compute__rows_per_part": 30}
AIMED = 10
VICTIMS = ("driver", "worker", "group")
KEPT = ["000002", "000003"]


def settings_of(survey: Path, run_dir: Path, seed: int) -> Settings:
    return settings_for(survey, run_dir, run__seed=seed, **QUICK | COMPUTE)


def start(settings: Settings) -> subprocess.Popen[bytes]:
    config = settings.run.output.with_suffix(".toml")
    config.write_text(dump_toml(settings))
    return subprocess.Popen(
        [sys.executable, "-m", "starkiln", "run", config, "--quiet"],
        start_new_session=True,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
    )


def finish(settings: Settings) -> float:
    """Run to the end, and return the seconds it took."""
    began = time.monotonic()
    process = start(settings)
    told = process.communicate(timeout=600)[0].decode()
    if process.returncode:
        raise SystemExit(f"exit code {process.returncode}: {told}")
    return time.monotonic() - began


def catalogue_of(generation: Path) -> pa.Table:
    files = sorted((generation / "catalogue").glob("*.parquet"))
    return pa.concat_tables([pq.read_table(file, page_checksum_verification=True) for file in files]).combine_chunks()


def digest(table: pa.Table) -> str:
    """Return a hash of every bit of a table's columns."""
    sink = pa.BufferOutputStream()
    with pa.ipc.new_stream(sink, table.schema) as writer:
        writer.write_table(table)
    return hashlib.sha256(sink.getvalue()).hexdigest()


class Reader(threading.Thread):
    """Reads the published catalogue again and again, and keeps the digests of what it read."""

    def __init__(self, run_dir: Path) -> None:
        super().__init__()
        self._run_dir = run_dir
        self._left = threading.Event()
        self._error: Exception | None = None
        self.seen: Counter[str] = Counter()

    def run(self) -> None:
        while not self._left.wait(0.1):
            try:
                self.seen[digest(catalogue_of((self._run_dir / "current").resolve()))] += 1
            except Exception as error:
                self._error = error
                break

    def leave(self) -> None:
        """Stop reading, and raise what went wrong with it."""
        self._left.set()
        self.join()
        if self._error is not None:
            raise self._error


def kill(process: subprocess.Popen[bytes], victim: str, random: np.random.Generator) -> bool:
    """Kill the victim, and return whether there was one."""
    if process.poll() is not None:
        return False
    if victim == "group":
        os.killpg(process.pid, signal.SIGKILL)
    elif victim == "driver":
        process.kill()
    else:
        workers = []
        for child in psutil.Process(process.pid).children(recursive=True):
            with suppress(psutil.Error):
                if "spawn_main" in " ".join(child.cmdline()):
                    workers.append(child)
        if not workers:
            process.kill()
            return True
        random.choice(np.array(workers, object)).kill()
    return True


def state_of(run_dir: Path) -> str:
    with suppress(OSError, ValueError):
        return str(json.loads((run_dir / "progress.json").read_text())["state"])
    return "before"


def one(survey: Path, run_dir: Path, instant_s: float, victim: str, random: np.random.Generator) -> dict[str, object]:
    """Kill a run at an instant, run again, and return what was found."""
    settings = settings_of(survey, run_dir, seed=2)
    reader = Reader(run_dir)
    reader.start()
    began = time.monotonic()
    process = start(settings)
    while process.poll() is None and time.monotonic() - began < instant_s:
        time.sleep(0.005)
    state = state_of(run_dir)
    killed = kill(process, victim, random)
    process.communicate(timeout=600)
    if process.returncode != 0:
        finish(settings)
    reader.leave()
    left = sorted(path.name for path in (run_dir / "generations").iterdir())
    table = catalogue_of(run_dir / "current")
    return {
        "state": state,
        "killed": killed,
        "digest": digest(table),
        "rows": table.num_rows,
        "ids": len(table["star_id"].unique()),
        "seen": reader.seen,
        "left": left,
    }


def fresh_dir(folder: Path, name: str, older: Path) -> Path:
    """Return a run directory that is a copy of one with an older generation."""
    run_dir = folder / name
    subprocess.run(["cp", "-a", older, run_dir], check=True)
    (run_dir / "progress.json").unlink()
    return run_dir


def spans_of(run_dir: Path) -> tuple[float, float]:
    """Return the seconds from a run's start to its packing, and to its end, by its own account."""
    facts = json.loads((run_dir / "current" / "run.json").read_text())
    whole = (datetime.fromisoformat(facts["end"]) - datetime.fromisoformat(facts["start"])).total_seconds()
    return whole - facts["seconds"]["wall"]["pack"], whole


def main() -> None:
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 40
    seed = int(sys.argv[2]) if len(sys.argv) > 2 else 1
    random = np.random.default_rng(seed)
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        tables = {f"t{n}": blackbodies(ROWS_A_FILE, 1 + n * ROWS_A_FILE) for n in range(FILES)}
        survey = write(folder / "survey", row_group_size=100, **tables)
        older = folder / "older"
        for seed_before in (0, 1):
            finish(settings_of(survey, older, seed=seed_before))
        old = digest(catalogue_of(older / "current"))
        undisturbed = fresh_dir(folder, "undisturbed", older)
        duration_s = finish(settings_of(survey, undisturbed, seed=2))
        expected = digest(catalogue_of(undisturbed / "current"))
        packing_s, end_s = spans_of(undisturbed)
        rows = FILES * ROWS_A_FILE
        late_s = duration_s - (end_s - packing_s)
        print(f"undisturbed: {rows} rows in {duration_s:.1f} s, packing and publishing from {late_s:.1f} s on")
        cases = [(random.uniform(0, duration_s), VICTIMS[n % 3]) for n in range(count)]
        cases += [(random.uniform(late_s, duration_s), VICTIMS[2 * (n % 2)]) for n in range(AIMED)]
        bad, states = 0, Counter()
        for number, (instant_s, victim) in enumerate(cases):
            run_dir = fresh_dir(folder, f"run{number}", older)
            found = one(survey, run_dir, instant_s, victim, random)
            same = found["digest"] == expected
            whole = set(found["seen"]) <= {old, expected}
            fine = same and whole and found["rows"] == found["ids"] == rows and found["left"] == KEPT
            states[found["state"] if found["killed"] else "had ended"] += 1
            bad += not fine
            print(
                f"{number:3d} {victim:6s} at {instant_s:5.2f} s, {found['state']:12s} "
                f"{'same bytes' if same else 'OTHER BYTES'}, {found['rows']} rows, {found['ids']} ids, "
                f"{sum(found['seen'].values())} readings {'whole' if whole else 'MIXED'}"
                f"{'' if found['left'] == KEPT else ' LEFT ' + ' '.join(found['left'])}",
                flush=True,
            )
            subprocess.run(["rm", "-r", run_dir], check=True)
        print(f"{len(cases) - bad} of {len(cases)} as they should be; killed while: {dict(states)}")
        raise SystemExit(bool(bad))


if __name__ == "__main__":
    main()
