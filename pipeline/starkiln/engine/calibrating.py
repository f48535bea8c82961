"""Reading the reference stars of a settings file."""

from __future__ import annotations

import numpy as np
import pyarrow as pa

from starkiln.engine.repeats import copies, id_digests, mark_repeats
from starkiln.settings import Settings
from starkiln.stages.calibrate import Calibration, calibrate, carrying_references
from starkiln.tables.source import open_source, read_rows

BATCH_ROWS = 50_000


def calibrate_from(settings: Settings) -> Calibration:
    """Learn departures from the input tables of the settings; reference sets are small, so they are read whole.

    Raises
    ------
    StarkilnError
        If settings or tables cannot be used.
    """
    settings = carrying_references(settings)
    source = open_source(settings)
    pieces = [(index, group) for index, file in enumerate(source.files) for group in range(len(file.row_group_rows))]
    batches = read_rows(source, settings, pieces, settings.used_columns(), BATCH_ROWS)
    table = pa.concat_tables([batch.table for batch in batches])
    digests, has_id = id_digests(table[settings.input.id])
    places = np.arange(table.num_rows)
    repeats = copies(mark_repeats(digests[has_id], places[has_id]), places)
    return calibrate(table.append_column("_duplicate", pa.array(repeats)), settings)
