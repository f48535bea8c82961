"""Where a result comes from: versions, platform, input files, passbands, and the key of a fit."""

from __future__ import annotations

import hashlib
import json
import platform
import sys
from datetime import UTC, datetime
from importlib import metadata
from pathlib import Path
from typing import Any

from starkiln.engine.plan import Plan
from starkiln.settings import Settings
from starkiln.stages.model import METHOD_VERSION
from starkiln.tables.source import Source

LIBRARIES = (
    "numpy",
    "scipy",
    "numba",
    "llvmlite",
    "emcee",
    "astropy",
    "dust_extinction",
    "speclite",
    "pyarrow",
    "pandas",
    "pydantic",
    "dask",
    "distributed",
)
"""The libraries that a number in the catalogue, or its way into the file, goes through."""


def versions() -> dict[str, str]:
    """Return the versions of this package, of Python and of the libraries that matter."""
    found = {"starkiln": metadata.version("starkiln"), "python": platform.python_version()}
    return found | {name: metadata.version(name) for name in LIBRARIES}


def platform_facts() -> dict[str, str]:
    """Return what else exp and log depend on: processor, its features, and the C library."""
    cpu = _cpu_info()
    return {
        "system": platform.system(),
        "machine": platform.machine(),
        "byte_order": sys.byteorder,
        "cpu": cpu.get("model name", platform.processor()),
        "cpu_features": digest(sorted(cpu.get("flags", "").split())),
        "libc": " ".join(platform.libc_ver()),
    }


def _cpu_info() -> dict[str, str]:
    try:
        first = Path("/proc/cpuinfo").read_text().split("\n\n")[0]
    except OSError:
        return {}
    pairs = (line.partition(":") for line in first.splitlines())
    return {name.strip(): value.strip() for name, _, value in pairs}


def digest(value: Any) -> str:
    """Return the SHA-256 of a value's canonical JSON, in hexadecimal."""
    return hashlib.sha256(json.dumps(value, sort_keys=True, separators=(",", ":")).encode()).hexdigest()


def hashes(settings: Settings, model: Any) -> dict[str, Any]:
    """Return the key of what a fit depends on, beside the row itself, and the key's parts."""
    parts = {
        "settings": digest(settings.fit_settings()),
        "passbands": model.digests(),
        "departures": model.departures_digest(),
        "method": METHOD_VERSION,
    }
    return {"fit_key": digest(parts), **parts}


def passband_sources(model: Any) -> dict[str, dict[str, Any]]:
    """Return name, zero point and sources of each band, by label."""
    return {
        label: {
            "name": passband.name,
            "detector": passband.detector,
            "zero_point_jy": passband.zero_point_jy,
            "zero_point_error": passband.zero_point_error,
            "source": passband.source,
            "curve_source": passband.curve_source,
        }
        for label, passband in model.passbands.items()
    }


def input_facts(source: Source, plan: Plan, settings: Settings) -> dict[str, Any]:
    """Return the input files with their rows, size and time of change, and the files left out."""
    return {
        "tables": settings.input.tables,
        "files": [
            {
                "name": file.name,
                "rows": file.rows,
                "bytes": size,
                "modified": datetime.fromtimestamp(modified_ns / 1e9, UTC).isoformat(),
            }
            for file, (size, modified_ns) in zip(source.files, plan.stamps, strict=True)
        ],
        "skipped": [str(skipped) for skipped in source.skipped],
    }
