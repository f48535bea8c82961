"""The picture of the zero-point audit: both files, the same bytes again, and it shows what the table says."""

import matplotlib.image
import numpy as np

from starkiln.report.audit_figure import save_audit


def row(label, offset_mag, determined=True):
    return {"label": label, "offset_mag": offset_mag, "error_mag": 0.004, "determined": determined, "stars": 4000}


def test_the_same_table_gives_the_same_picture_twice(tmp_path):
    rows = [row("panstarrs_g", 0.001), row("2mass_j", 0.05), row("wise_w3", 0.0, determined=False)]
    first, second = save_audit(rows, tmp_path / "a" / "audit"), save_audit(rows, tmp_path / "b" / "audit")
    assert [path.suffix for path in first] == [".png", ".pdf"]
    for one, other in zip(first, second, strict=True):
        assert one.read_bytes() == other.read_bytes()


def test_an_offset_and_being_undetermined_change_the_picture(tmp_path):
    still = matplotlib.image.imread(save_audit([row("2mass_j", 0.0), row("2mass_h", 0.0)], tmp_path / "still")[0])
    moved = matplotlib.image.imread(save_audit([row("2mass_j", 0.05), row("2mass_h", 0.0)], tmp_path / "moved")[0])
    unsure = [row("2mass_j", 0.0), row("2mass_h", 0.0, determined=False)]
    doubted = matplotlib.image.imread(save_audit(unsure, tmp_path / "doubted")[0])
    assert still.shape == moved.shape == doubted.shape
    assert not np.array_equal(still, moved)
    assert not np.array_equal(still, doubted)


def test_a_run_without_an_audit_gives_an_empty_picture(tmp_path):
    assert all(path.stat().st_size > 1000 for path in save_audit([], tmp_path / "empty"))
