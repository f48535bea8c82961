"""A dask scheduler and its workers, as somebody else would start them."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
import time
from pathlib import Path

import psutil

import starkiln


class DaskCluster:
    """Processes of a cluster; use as a context manager, which ends them.

    Parameters
    ----------
    folder
        Receives the scheduler file, logs and the workers' own files.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.scheduler_file = folder / "scheduler.json"
        self.processes: list[subprocess.Popen[bytes]] = []

    def __enter__(self) -> DaskCluster:
        self.folder.mkdir(parents=True, exist_ok=True)
        self.scheduler = self._start("scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard")
        deadline = time.monotonic() + 60
        while not self.scheduler_file.exists():
            assert time.monotonic() < deadline
            time.sleep(0.1)
        return self

    def __exit__(self, *_: object) -> None:
        # Nannies before the scheduler, each with its worker, so that none starts another.
        for process in reversed(self.processes):
            kill_tree(process)

    @property
    def address(self) -> str:
        """The scheduler's address, once it is written."""
        while True:
            try:
                return str(json.loads(self.scheduler_file.read_text())["address"])
            except ValueError:
                time.sleep(0.1)

    def worker(self, *options: str, package: Path | None = None) -> subprocess.Popen[bytes]:
        """Start a worker of one thread with a nanny; `package` is a folder that holds another starkiln."""
        usual = ["--nthreads", "1", "--nanny", "--no-dashboard", "--host", "127.0.0.1", "--memory-limit", "1GB"]
        usual += ["--local-directory", str(self.folder / "workers")]
        return self._start("worker", *usual, *options, package=package)

    def _start(self, *arguments: str, package: Path | None = None) -> subprocess.Popen[bytes]:
        paths = ([str(package)] if package else []) + sys.path
        environment = os.environ | {"PYTHONPATH": os.pathsep.join(paths), "OMP_NUM_THREADS": "1"}
        with (self.folder / "log").open("ab") as log:
            process = subprocess.Popen(
                [sys.executable, "-m", "dask", *arguments, "--scheduler-file", str(self.scheduler_file)],
                stdout=log,
                stderr=log,
                env=environment,
                start_new_session=True,
                cwd=self.folder,
            )
        self.processes.append(process)
        return process


def kill_tree(process: subprocess.Popen[bytes]) -> None:
    """Kill a process and all that it has started."""
    if process.poll() is None:
        children = psutil.Process(process.pid).children(recursive=True)
        process.kill()
        for child in children:
            if child.is_running():
                child.kill()
    process.wait()


def another_version(folder: Path) -> Path:
    """Copy the package with one byte more into a folder, which is returned."""
    source = Path(starkiln.__file__).parent
    shutil.copytree(source, folder / "starkiln", ignore=shutil.ignore_patterns("__pycache__"))
    with (folder / "starkiln" / "flags.py").open("a") as file:
        file.write("#")
    return folder
