"""run.json holds the audit of zero points, and it does not hang on parts or workers."""

import json

import pytest

from pipeline_survey import QUICK, blackbodies, write
from small_survey import BANDS, band, settings_for, with_column
from starkiln.engine import build
from starkiln.engine.run import run_settings

# The audit needs five bands; here the last two are the first again under other names.
LABELS = (*BANDS, "panstarrs_g_again", "panstarrs_r_again")


def audit_of(folder, run_dir, **changes):
    path = run_settings(settings_for(folder, run_dir, **QUICK | changes)).path
    return json.loads((path / "run.json").read_text())["zero_point_audit"]


def test_every_band_has_a_row_that_parts_do_not_change(tmp_path):
    folder = write(tmp_path / "survey", a=blackbodies(40))
    whole = audit_of(folder, tmp_path / "whole")
    assert [row["label"] for row in whole] == list(BANDS)
    assert all(row.keys() == {"label", "offset_mag", "error_mag", "determined", "stars"} for row in whole)
    assert audit_of(folder, tmp_path / "parts", compute__rows_per_part=7) == whole


def five_bands(rows):
    table = blackbodies(rows)
    for label in LABELS[3:]:
        for name in (label, f"{label}_error"):
            table = with_column(table, name, table[name.replace("_again", "")])
    return table


@pytest.mark.slow
def test_one_worker_or_two_give_the_same_audit(tmp_path, monkeypatch):
    monkeypatch.setattr(build, "SMALL_RUN_ROWS", -1)
    folder = write(tmp_path / "survey", a=five_bands(60))
    bands = [band(label) | {"passband": label.removesuffix("_again"), "label": label} for label in LABELS]
    changes = {"input__photometry": bands, "compute__rows_per_part": 13}
    alone = audit_of(folder, tmp_path / "one", compute__workers=1, **changes)
    assert min(row["stars"] for row in alone) > 50
    assert any(row["offset_mag"] != 0.0 for row in alone)
    assert audit_of(folder, tmp_path / "two", compute__workers=2, **changes) == alone
