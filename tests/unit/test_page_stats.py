"""The statistics of the page: counts and quantiles against numpy's own, and the rows that need a look."""

import numpy as np
import pyarrow.parquet as pq
import pytest

from published_run import NASTY_ID, publish
from starkiln.flags import BY_NAME
from starkiln.report import page_stats
from starkiln.report.page_stats import AXES, RESIDUAL, Axis, count, count_pairs, gather, quantiles, score, share_above

HALVES = Axis(0.0, 2.0, 4)


def test_values_are_counted_in_their_bins_and_those_beyond_at_the_ends():
    values = np.array([-7.0, 0.0, 0.49, 0.5, 1.0, 2.0, 9.0, np.nan])
    assert count(HALVES, values).tolist() == [3, 1, 1, 2]


def test_pairs_with_a_gap_are_left_out():
    x, y = np.array([0.1, 1.9, np.nan, 0.1]), np.array([1.9, 0.1, 0.1, np.nan])
    counts = count_pairs(HALVES, x, HALVES, y)
    assert (counts[0, 3], counts[3, 0], counts.sum()) == (1, 1, 2)


def test_quantiles_of_counts_are_those_of_the_values():
    values = np.random.default_rng(3).normal(0.0, 1.5, 20_000)
    found = quantiles(RESIDUAL, count(RESIDUAL, values), (0.16, 0.5, 0.84))
    assert found == pytest.approx(np.quantile(values, (0.16, 0.5, 0.84)), abs=0.02)


def test_the_ends_are_those_of_the_values_not_of_the_axis():
    assert quantiles(HALVES, np.array([0, 5, 0, 0]), (0.0, 1.0)) == pytest.approx([0.55, 0.95])


def test_quantiles_of_nothing_are_nan():
    assert np.isnan(quantiles(HALVES, np.zeros((3, 4), int), (0.5,))).all()


def test_share_above():
    assert share_above(HALVES, np.array([1, 1, 1, 1]), 1.5) == 0.25


def test_the_catalogue_is_counted_as_numpy_counts_it(tmp_path):
    folder = publish(tmp_path / "run", rows=300)
    table = pq.read_table(folder / "catalogue")
    stats = gather(folder)
    assert stats.rows == 300
    assert stats.id_name == "star_id"
    assert stats.flags["poor_parallax"] == 30
    assert stats.examples == {"poor_parallax": "star 0", "not_converged": NASTY_ID, "poor_fit": NASTY_ID}
    assert stats.flagged == 31
    assert stats.photospheres == {"calibrated": 300}
    median = 10.0 ** quantiles(AXES["log_teff"], stats.histograms["log_teff"], (0.5,))[0]
    assert median == pytest.approx(np.median(table["teff_p50"]), rel=0.012)
    assert stats.plane.sum() == 300
    assert all(counts.sum() == 300 for counts in stats.widths.values())
    width = 10.0 ** quantiles(page_stats.LOG_WIDTH, stats.widths["teff"].sum(axis=0), (0.5,))[0]
    assert width == pytest.approx(0.05, rel=0.06)


def test_files_and_batches_make_no_difference(tmp_path, monkeypatch):
    (tmp_path / "split").mkdir()
    whole = gather(publish(tmp_path / "run", rows=300))
    monkeypatch.setattr(page_stats, "BATCH_ROWS", 17)
    split = gather(publish(tmp_path / "split" / "run", rows=300, rows_per_file=120))
    assert whole.worst == split.worst
    assert whole.flags == split.flags
    assert whole.examples == split.examples
    for name in AXES:
        assert (whole.histograms[name] == split.histograms[name]).all()


def test_a_catalogue_without_residuals_has_no_bands(tmp_path):
    folder = publish(tmp_path / "run", rows=40)
    path = folder / "catalogue" / "part-000000.parquet"
    table = pq.read_table(path)
    pq.write_table(table.drop_columns([name for name in table.column_names if name.startswith("residual_")]), path)
    assert gather(folder).bands == {}


def test_a_folder_without_files_is_an_error(tmp_path):
    with pytest.raises(FileNotFoundError, match="holds no catalogue"):
        gather(tmp_path)


@pytest.mark.parametrize(
    ("flag", "p_value", "rhat", "residual", "expected"),
    [
        (0, 0.5, 1.0, 1.0, 0.0),
        (BY_NAME["not_converged"].value | BY_NAME["poor_fit"].value, 0.5, 1.0, 1.0, 8.0),
        (BY_NAME["poor_parallax"].value, 0.5, 1.0, 1.0, 0.0),
        (0, 1e-4, 1.0, 1.0, 2.0),
        (0, 0.5, 1.06, 1.0, 1.0),
        (0, 0.5, 1.0, 9.0, 2.0),
        (0, 0.0, 99.0, 99.0, 3.0 + 5.0 + 5.0),
        (0, np.nan, np.nan, 0.0, 0.0),
    ],
)
def test_score(flag, p_value, rhat, residual, expected):
    found = score(*(np.array([value]) for value in (flag, p_value, rhat, residual)))
    assert found == pytest.approx([expected])


def test_the_worst_rows_come_first(tmp_path):
    worst = gather(publish(tmp_path / "run", rows=300)).worst
    assert worst[0]["star_id"] == NASTY_ID
    assert [star["score"] for star in worst] == sorted((star["score"] for star in worst), reverse=True)
    assert all(star["score"] > 0 for star in worst)
