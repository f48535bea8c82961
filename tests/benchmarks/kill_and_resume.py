"""Runs that are killed at a random instant, and run again: nothing lost, nothing twice, the same bytes.

    python tests/benchmarks/kill_and_resume.py 40

A small survey of blackbodies is fitted with short chains on two workers, once undisturbed, which tells how long its
steps take. Then as many runs are killed as are asked for, each in a run directory of its own that holds two older
generations: the driver, one worker, or the whole process group, at an instant drawn uniformly from the undisturbed
run's duration; five more each at an instant of planning, packing and publishing, by what the run itself says it does,
since those are short and a busy machine shifts them; one that comes too late is drawn again. Each is run again until it
ends with 0. All the while a reader reads the catalogue again and again. A worker that is to be killed before there are
any stands for the driver.
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
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

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
AIMED = 5
STEPS = {"planning": "plan", "packing": "pack", "publishing": None}
"""Steps as progress.json names them, and as run.json names the time they took."""

PUBLISHING_S = 0.1
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


@dataclass(frozen=True)
class Case:
    """Whom to kill, and when: so many seconds after the start, or after a step has begun."""

    victim: str
    after_s: float
    step: str | None = None

    def __str__(self) -> str:
        return f"{self.victim:6s} {self.after_s:5.2f} s into {self.step or 'the run'}"


def wait_for(case: Case, process: subprocess.Popen[bytes], run_dir: Path) -> None:
    """Wait until the moment of a case, or until the run has ended."""
    while case.step is not None and process.poll() is None and state_of(run_dir) != case.step:
        time.sleep(0.002)
    began = time.monotonic()
    while process.poll() is None and time.monotonic() - began < case.after_s:
        time.sleep(0.002)


def one(survey: Path, run_dir: Path, case: Case, random: np.random.Generator) -> dict[str, Any]:
    """Kill a run, run again, and return what was found."""
    settings = settings_of(survey, run_dir, seed=2)
    reader = Reader(run_dir)
    reader.start()
    process = start(settings)
    wait_for(case, process, run_dir)
    killed = kill(process, case.victim, random)
    process.communicate(timeout=600)
    state = state_of(run_dir)
    if process.returncode != 0:
        finish(settings)
    reader.leave()
    left = sorted(path.name for path in (run_dir / "generations").iterdir())
    table = catalogue_of(run_dir / "current")
    return {
        "state": state if killed and process.returncode else "went on",
        "digest": digest(table),
        "rows": table.num_rows,
        "ids": len(table["star_id"].unique()),
        "seen": reader.seen,
        "left": left,
    }


def cases_of(count: int, duration_s: float, undisturbed: Path, random: np.random.Generator) -> list[Case]:
    """Return the cases: some at any instant, and some aimed at the short steps."""
    cases = [Case(VICTIMS[n % 3], random.uniform(0, duration_s)) for n in range(count)]
    wall = json.loads((undisturbed / "current" / "run.json").read_text())["seconds"]["wall"]
    for step, lap in STEPS.items():
        length_s = wall[lap] if lap else PUBLISHING_S
        cases += [Case(VICTIMS[2 * (n % 2)], random.uniform(0, length_s), step) for n in range(AIMED)]
    return cases


def fresh_dir(folder: Path, name: str, older: Path) -> Path:
    """Return a run directory that is a copy of one with an older generation."""
    run_dir = folder / name
    subprocess.run(["cp", "-a", older, run_dir], check=True)
    (run_dir / "progress.json").unlink()
    return run_dir


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
        rows = FILES * ROWS_A_FILE
        print(f"undisturbed: {rows} rows in {duration_s:.1f} s", flush=True)
        cases, states, bad = cases_of(count, duration_s, undisturbed, random), Counter(), 0
        for number, case in enumerate(cases):
            run_dir = fresh_dir(folder, f"run{number}", older)
            found = one(survey, run_dir, case, random)
            same, whole = found["digest"] == expected, set(found["seen"]) <= {old, expected}
            fine = same and whole and found["rows"] == found["ids"] == rows and found["left"] == KEPT
            states[found["state"]] += 1
            if case.step is not None and found["state"] == "went on":
                # The step was over before: once more, sooner.
                cases.append(replace(case, after_s=random.uniform(0, case.after_s)))
            bad += not fine
            print(
                f"{number:3d} {case}, {found['state']:10s} {'same bytes' if same else 'OTHER BYTES'}, "
                f"{found['rows']} rows, {found['ids']} ids, {sum(found['seen'].values())} readings "
                f"{'whole' if whole else 'MIXED'}{'' if found['left'] == KEPT else ' LEFT ' + ' '.join(found['left'])}",
                flush=True,
            )
            subprocess.run(["rm", "-r", run_dir], check=True)
        print(f"{len(cases) - bad} of {len(cases)} as they should be; killed while: {dict(states)}")
        raise SystemExit(bool(bad))


if __name__ == "__main__":
    main()
