"""run.json holds the audit of zero points, and it does not hang on how the run was cut into parts."""

import json

from pipeline_survey import QUICK, blackbodies, write
from small_survey import BANDS, settings_for
from starkiln.engine.run import run_settings


def audit_of(folder, run_dir, **changes):
    path = run_settings(settings_for(folder, run_dir, **QUICK | changes)).path
    return json.loads((path / "run.json").read_text())["zero_point_audit"]


def test_every_band_has_a_row_that_parts_do_not_change(tmp_path):
    folder = write(tmp_path / "survey", a=blackbodies(40))
    whole = audit_of(folder, tmp_path / "whole")
    assert [row["label"] for row in whole] == list(BANDS)
    assert all(row.keys() == {"label", "offset_mag", "error_mag", "determined", "stars"} for row in whole)
    assert audit_of(folder, tmp_path / "parts", compute__rows_per_part=7) == whole
