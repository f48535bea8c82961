"""Trouble with a disk: told as such, with the file or folder it is about."""

from __future__ import annotations

import os
import shutil
import time
from collections.abc import Iterator
from contextlib import contextmanager
from fnmatch import fnmatchcase
from pathlib import Path

from starkiln.errors import EnvironmentTrouble

PATIENCE_SECONDS = 10.0
"""Workers of a run that was killed are gone by then."""


@contextmanager
def disk_trouble(place: Path) -> Iterator[None]:
    """Turn failures of the disk into EnvironmentTrouble that names the file, or else the place given.

    Parameters
    ----------
    place
        What is read or written here.
    """
    try:
        yield
    except OSError as error:
        # Arrow's own words are long, and numpy's do not say why.
        reason = os.strerror(error.errno) if error.errno else error
        raise EnvironmentTrouble(f"{error.filename or place}: {reason}; mend it and run again") from error


def remove_folder(folder: Path) -> None:
    """Remove a folder with all that is in it, also while workers of a killed run still write there.

    Raises
    ------
    OSError
        If it is still there when they must be gone.
    """
    until = time.monotonic() + PATIENCE_SECONDS
    while folder.exists():
        try:
            shutil.rmtree(folder)
        except OSError:
            if time.monotonic() > until:
                raise
            time.sleep(0.1)


def sweep(folder: Path, pattern: str = ".*.tmp") -> None:
    """Remove the files and links of a name below a folder, if it is there: what killed writers left half done.

    Parameters
    ----------
    folder
        Where to look, folders in it included; links to folders are not followed.
    pattern
        The names to remove.
    """
    for root, folders, names in os.walk(folder):
        links = [name for name in folders if os.path.islink(os.path.join(root, name))]
        for name in (*names, *links):
            if fnmatchcase(name, pattern):
                Path(root, name).unlink(missing_ok=True)
