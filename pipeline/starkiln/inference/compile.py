"""How every kernel is compiled, and where its machine code is kept."""

from __future__ import annotations

import hashlib
import os
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numba
from numba.core import config


def _source_hash() -> str:
    # numba looks only at a function's own file for staleness; one folder per state of all the
    # kernel sources also catches a change in an imported helper.
    digest = hashlib.sha256(numba.__version__.encode())
    for path in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(path.read_bytes())
    return digest.hexdigest()[:16]


def _cache_folder() -> Path | None:
    """Return a writable folder for compiled kernels, or None where there is none."""
    candidates = [os.environ.get("STARKILN_KERNEL_CACHE"), os.environ.get("XDG_CACHE_HOME")]
    home = os.path.expanduser("~")
    if home != "~":
        candidates.append(os.path.join(home, ".cache"))
    for base in [*candidates, os.path.join(tempfile.gettempdir(), f"starkiln-{os.getuid()}")]:
        if not base:
            continue
        folder = Path(base) / "starkiln" / f"kernels-{_source_hash()}"
        try:
            folder.mkdir(parents=True, exist_ok=True, mode=0o700)
        except OSError:
            continue
        # Compiled code is run without question, so a folder of somebody else's is never used.
        if os.access(folder, os.W_OK) and folder.stat().st_uid == os.getuid():
            return folder
    return None


CACHE_FOLDER = _cache_folder()
if CACHE_FOLDER is not None:
    config.CACHE_DIR = str(CACHE_FOLDER)  # type: ignore[attr-defined]


def kernel(function: Callable[..., Any]) -> Any:
    """Compile a function to machine code without the interpreter lock and without fast-math."""
    return numba.njit(cache=CACHE_FOLDER is not None, nogil=True, error_model="numpy")(function)


def inlined(function: Callable[..., Any]) -> Any:
    """Compile a small helper that kernels inline; it has no cache entry of its own."""
    return numba.njit(nogil=True, error_model="numpy", inline="always")(function)
