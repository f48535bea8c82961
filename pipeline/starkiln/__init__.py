"""Effective temperatures, radii and luminosities of stars from survey photometry."""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HOMES = {
    "fit_table": "starkiln.engine.memory",
    "run": "starkiln.engine.run",
    "RunResult": "starkiln.engine.run",
    "read": "starkiln.tables.read",
    "units": "starkiln.tables.read",
    "descriptions": "starkiln.tables.read",
    "write_parquet": "starkiln.tables.convert",
}

__all__ = ["RunResult", "__version__", "descriptions", "fit_table", "flags", "read", "run", "units", "write_parquet"]


def __getattr__(name: str) -> Any:
    # Imported when first asked for, so that `starkiln --help` is quick.
    if name == "__version__":
        from importlib.metadata import version

        return version("starkiln")
    if name == "flags":
        return import_module("starkiln.flags")
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'starkiln' has no attribute {name!r}")
