"""What this process may use of the machine, and what it did use."""

from __future__ import annotations

import resource
import sys

from dask.system import cpu_count
from distributed.system import memory_limit

from starkiln.settings import Settings


def worker_count(settings: Settings) -> int:
    """Return how many workers the settings ask for, by processors and memory if they say "auto"."""
    wanted = settings.compute.workers
    if wanted != "auto":
        return int(wanted)
    return max(1, min(cpu_count(), memory_limit() // settings.compute.memory_per_worker_bytes))


def peak_memory() -> int:
    """Return the largest resident size of this process so far, in bytes."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak if sys.platform == "darwin" else peak * 1024
