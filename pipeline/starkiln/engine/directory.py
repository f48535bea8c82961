"""The run directory: its lock, its scratch folder and the name it belongs to."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import socket
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path

from filelock import FileLock, Timeout

from starkiln.engine.disk import remove_folder
from starkiln.errors import DirectoryBusy, EnvironmentTrouble, SettingsError


@contextmanager
def hold(run_dir: Path) -> Iterator[None]:
    """Create the run directory if need be and hold its lock; the kernel frees it if this process dies.

    Whoever holds it may do so again, in the same thread: the lock goes when all have left.

    Parameters
    ----------
    run_dir
        The run directory.

    Raises
    ------
    DirectoryBusy
        If another run holds the lock; the text names its host, process and start.
    EnvironmentTrouble
        If the folder cannot be made or written, or its file system has no locks.
    """
    try:
        run_dir.mkdir(parents=True, exist_ok=True)
        # A lock that is only a file outlives its holder, so there is no falling back to one.
        lock = FileLock(run_dir / "lock", timeout=0, fallback_to_soft=False, is_singleton=True)
        lock.acquire()
    except Timeout:
        raise DirectoryBusy(f"{run_dir} is in use by another run{_holder(run_dir)}; wait for it") from None
    except (OSError, NotImplementedError) as error:
        raise EnvironmentTrouble(
            f"cannot use {run_dir} as the run directory ({_reason(error)}): set run.output to a folder you can write to"
        ) from error
    try:
        if lock.lock_counter == 1:
            _name_holder(run_dir / "lock")
        yield
    finally:
        lock.release()


def _name_holder(path: Path) -> None:
    holder = {
        "host": socket.gethostname(),
        "pid": os.getpid(),
        "start": datetime.now(UTC).isoformat(timespec="seconds"),
    }
    # In place: the file is the lock, and one put there instead would be another. A full disk is told where it matters.
    with suppress(OSError):
        path.write_text(json.dumps(holder) + "\n")


def _reason(error: BaseException) -> str:
    return getattr(error, "strerror", None) or str(error) or type(error).__name__


def _holder(run_dir: Path) -> str:
    try:
        holder = json.loads((run_dir / "lock").read_text())
        return f" (process {holder['pid']} on {holder['host']}, since {holder['start']})"
    except (OSError, ValueError, KeyError):
        return ""


def check_name(run_dir: Path, name: str) -> None:
    """Make sure that the published generation, if any, is of this run.

    Raises
    ------
    SettingsError
        If the run directory belongs to a run of another name.
    """
    try:
        owner = json.loads((run_dir / "current" / "run.json").read_text())["name"]
    except FileNotFoundError:
        return
    except (OSError, ValueError, KeyError) as error:
        raise EnvironmentTrouble(
            f"cannot read {run_dir}/current/run.json ({_reason(error)}): mend it, or set another run.output"
        ) from error
    if owner != name:
        raise SettingsError(
            f"run.output {run_dir} belongs to run {owner!r}, and run.name is {name!r}: set another run.output"
        )


@contextmanager
def scratch_folder(run_dir: Path, base: Path | None) -> Iterator[Path]:
    """Give an empty private folder for the files of this run, and remove it afterwards.

    The name is the same for every run of one run directory, so what a killed run left is found and removed.

    Parameters
    ----------
    run_dir
        The run directory, whose lock must be held.
    base
        Where to make the folder; None for inside the run directory.
    """
    digest = hashlib.sha256(os.fsencode(run_dir)).hexdigest()[:12]
    folder = run_dir / "scratch" if base is None else base / f"starkiln-{digest}"
    try:
        remove_folder(folder)
        folder.mkdir(parents=True, mode=0o700)
    except OSError as error:
        raise EnvironmentTrouble(
            f"cannot make the scratch folder {folder} ({_reason(error)}): set compute.scratch"
        ) from error
    try:
        yield folder
    finally:
        shutil.rmtree(folder, ignore_errors=True)
