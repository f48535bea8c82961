"""Whether a worker process elsewhere is of this run's version, and sees this run's folder."""

from __future__ import annotations

import hashlib
import uuid
from functools import cache
from pathlib import Path

import starkiln
from starkiln.engine.disk import disk_trouble
from starkiln.engine.provenance import digest, versions
from starkiln.engine.records import Identity

NONCE_FILE = "nonce"


@cache
def method_hash() -> str:
    """Return a digest of all files of the package that this process runs: code, curves and tables."""
    root = Path(starkiln.__file__).parent
    total = hashlib.sha256()
    for path in sorted(root.rglob("*")):
        if path.is_file() and "__pycache__" not in path.parts:
            content = hashlib.sha256(path.read_bytes()).hexdigest()
            total.update(f"{path.relative_to(root).as_posix()} {content}\n".encode())
    return total.hexdigest()


@cache
def _libraries() -> str:
    return digest(versions())


def make_identity(folder: Path) -> Identity:
    """Write a fresh nonce into a folder, and return what workers must agree on.

    Parameters
    ----------
    folder
        A folder of the run, which workers must see, too.

    Raises
    ------
    EnvironmentTrouble
        If the nonce cannot be written.
    """
    nonce, nonce_file = uuid.uuid4().hex, folder / NONCE_FILE
    with disk_trouble(nonce_file):
        nonce_file.write_text(nonce)
    return Identity(method_hash(), _libraries(), nonce, nonce_file)


def identify(expected: Identity) -> str:
    """Return in what this process differs from the one that began the run; nothing if it agrees."""
    if method_hash() != expected.method:
        return f"its starkiln is another one ({Path(starkiln.__file__).parent})"
    if _libraries() != expected.libraries:
        return "its libraries have other versions than those of the run"
    try:
        nonce = expected.nonce_file.read_text()
    except OSError as error:
        return f"it does not see the run's folder: {error}"
    return "" if nonce == expected.nonce else f"it sees another {expected.nonce_file} than the run"
