"""Runs of fake stages in processes of their own, to be disturbed."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path

import psutil

from starkiln.settings import Settings, dump_toml

MAIN = """
import sys
import fake_stages
from starkiln import cli
from starkiln.engine import build, run, stopping
if __name__ == "__main__":
    small, stage = sys.argv[1:3]
    del sys.argv[1:3]
    build.SMALL_RUN_ROWS = int(small)
    run.fitting_stages = lambda: fake_stages.stages(getattr(fake_stages, stage))
    cli.main()
"""

DIE = """
import itertools
import os

def die(place, name, call=1, after=False, when=lambda *arguments: True):
    step, calls = getattr(place, name), itertools.count(1)
    def dying(*arguments, **more):
        last = when(*arguments) and next(calls) == call
        if last and not after:
            os._exit(77)
        made = step(*arguments, **more)
        if last:
            os._exit(77)
        return made
    setattr(place, name, dying)
"""
"""For the script of a run: end the process without a word at the n-th call of a function, before it or after."""


def start_run(
    folder: Path, settings: Settings, stage: str, *arguments: str, cluster: bool = True, main: str = MAIN
) -> subprocess.Popen[str]:
    """Start a run that does one of the fake stages, in a process group of its own.

    Parameters
    ----------
    folder
        Receives the settings file and the script.
    settings
        The settings.
    stage
        The name of the stage in `fake_stages`.
    arguments
        Options of the command line.
    cluster
        Whether worker processes do the work, however few rows there are.
    main
        The script, with the number of rows of a small run and the stage before its other arguments.
    """
    (folder / "run.toml").write_text(dump_toml(settings))
    (folder / "main.py").write_text(main)
    small = "-1" if cluster else "1000000000"
    return subprocess.Popen(
        [sys.executable, folder / "main.py", small, stage, "run", folder / "run.toml", *arguments],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
        env=os.environ | {"PYTHONPATH": os.pathsep.join(sys.path)},
    )


def ended(process: subprocess.Popen[str]) -> tuple[int, str, str]:
    """Wait for a run; return its exit code, output and errors."""
    out, err = process.communicate(timeout=120)
    return process.returncode, out, err


def wait_until(process: subprocess.Popen[str], happens: Callable[[], object]) -> None:
    deadline = time.monotonic() + 60
    while not happens():
        assert process.poll() is None, process.communicate()
        assert time.monotonic() < deadline
        time.sleep(0.02)


def workers_of(pid: int) -> list[psutil.Process]:
    """The worker processes that a process has started."""
    workers = []
    for child in psutil.Process(pid).children(recursive=True):
        with suppress(psutil.Error):
            if "spawn_main" in " ".join(child.cmdline()):
                workers.append(child)
    return workers


def still_running(processes: list[psutil.Process]) -> list[psutil.Process]:
    return [process for process in processes if process.is_running() and process.status() != psutil.STATUS_ZOMBIE]
