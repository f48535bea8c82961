"""Stars per core-second against the number of bands, walkers and effective samples asked for.

From the rows of a part to its output tables, in memory: smooth invented departures, A_V and z_1.
"""

from __future__ import annotations

import time
from typing import Any

from benchmarks.speed.cases import simulated
from benchmarks.speed.common import Row, Suite, one_core, print_rows
from simulated import THIRTEEN_BANDS
from starkiln.stages.process import process_part
from starkiln.stages.warm_up import warm_up

MORE_BANDS = ("sdss_g", "sdss_r", "sdss_i", "sdss_z", "johnson_b", "johnson_v", "cousins_i")
BANDS = (3, 5, 10, 13, 20)
WALKERS = (16, 32, 64)
EFFECTIVE_SAMPLES = (250, 500, 1_000, 2_000)


def bands_of(number: int) -> tuple[str, ...]:
    """Return so many bands, spread over the wavelengths as far as they go."""
    if number > len(THIRTEEN_BANDS):
        return (*THIRTEEN_BANDS, *MORE_BANDS[: number - len(THIRTEEN_BANDS)])
    last = len(THIRTEEN_BANDS) - 1
    return tuple(THIRTEEN_BANDS[round(place * last / (number - 1))] for place in range(number))


def rate(suite: Suite, what: str, value: int, bands: int = 10, **sampling: int) -> Row:
    """Return the stars per core-second of a setting."""
    case = simulated(suite.stars, suite.room("costs"), "smooth", bands_of(bands), sampling=sampling)
    warm_up(case.settings, case.model)
    began = time.process_time()
    made = process_part(case.table, case.settings, case.model)
    core_s = time.process_time() - began
    stars = len(made.catalogue)
    return {"what": what, "value": value, "stars": stars, "stars_per_core_s": stars / core_s}


def measure(suite: Suite) -> dict[str, Any]:
    """Measure each setting beside the default of the others: ten bands, 32 walkers, 1,000 effective samples."""
    with one_core():
        rows = [rate(suite, "bands", bands, bands) for bands in BANDS]
        rows += [rate(suite, "walkers", walkers, walkers=walkers) for walkers in WALKERS]
        rows += [rate(suite, "effective samples", size, effective_samples=size) for size in EFFECTIVE_SAMPLES]
    columns = {"what": "of", "value": "number", "stars": "stars", "stars_per_core_s": "stars/core-s"}
    print_rows(rows, columns)
    return {"rows": rows}
