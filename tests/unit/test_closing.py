import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from fake_stages import pass_through, reject_odd_ids
from part_runs import bytes_of, plan_run, rows_of, write_tables
from small_survey import stars, with_column
from starkiln.errors import EnvironmentTrouble
from starkiln.tables.hashes import id_hashes, row_hashes


def run(tmp_path, tables, process=pass_through, **changes):
    """Write tables as files, do every part of them, and return the settings and the generation."""
    planned = plan_run(tmp_path / "run", write_tables(tmp_path / "input", tables), process, **changes)
    return planned.job.settings, planned.finish()


@pytest.fixture
def repeated():
    """Thirty stars; the id of the third comes again as the eleventh, and the fifth has none."""
    ids = list(range(101, 131))
    ids[10], ids[4] = ids[2], None
    return with_column(stars(30), "star_id", pa.array(ids, pa.int64()))


def test_rows_are_packed_in_input_order_into_files_of_one_length(tmp_path, repeated):
    changes = {"part_rows": 4, "output__rows_per_file": 10, "input__carry": ["ra"]}
    _, generation = run(tmp_path, {"a.parquet": repeated}, **changes)
    files = sorted((generation / "catalogue").iterdir())
    assert [pq.read_metadata(path).num_rows for path in files] == [10, 10, 8]
    kept = [row for row in range(30) if row not in (4, 10)]
    catalogue = rows_of(generation, "catalogue")
    assert catalogue["star_id"].to_pylist() == [repeated["star_id"][row].as_py() for row in kept]
    assert catalogue["ra"].to_pylist() == [repeated["ra"][row].as_py() for row in kept]
    rejected = rows_of(generation, "rejected")
    assert rejected["input_row"].to_pylist() == [4, 10]


def test_closing_again_gives_the_same_bytes_whatever_was_left_there(tmp_path, repeated):
    folder = write_tables(tmp_path / "input", {"a.parquet": repeated})
    planned = plan_run(tmp_path / "run", folder, pass_through, sampling__keep_draws=2, output__rows_per_file=8)
    first = bytes_of(planned.finish())
    parts = bytes_of(planned.job.parts)
    for left in ("catalogue/part-000001.parquet", "catalogue/.part-000002.parquet.tmp", "run.json", "index/other"):
        (tmp_path / "run" / "result" / left).write_text("left by a run that was killed")
    assert bytes_of(planned.close()) == first
    assert bytes_of(planned.job.parts) == parts


def test_a_part_that_is_not_there_is_trouble(tmp_path, repeated):
    planned = plan_run(tmp_path / "run", write_tables(tmp_path / "input", {"a.parquet": repeated}))
    planned.finish()
    (planned.job.parts / "index" / "part-000002.parquet").unlink()
    with pytest.raises(EnvironmentTrouble, match=r"part-000002\.parquet"):
        planned.close()


def test_the_index_leads_to_the_row_of_every_id(tmp_path, repeated):
    changes = {"part_rows": 4, "output__rows_per_file": 10}
    settings, generation = run(tmp_path, {"a.parquet": repeated}, **changes)
    index = rows_of(generation, "index")
    hashes, has_id = id_hashes(repeated["star_id"])
    listed = has_id & (np.arange(30) != 10)
    assert sorted(index["id_hash"].to_pylist()) == index["id_hash"].to_pylist() == sorted(hashes[listed].tolist())
    found = dict(zip(hashes[listed].tolist(), row_hashes(repeated, settings)[listed].tolist(), strict=True))
    for entry in index.to_pylist():
        table = pq.read_table(generation / entry["file"])
        assert table["row_hash"][entry["row"]].as_py() == entry["row_hash"] == found[entry["id_hash"]]
        assert id_hashes(table["star_id"].slice(entry["row"], 1))[0][0] == entry["id_hash"]


def test_a_rejected_row_with_an_id_is_in_the_index(tmp_path):
    _, generation = run(tmp_path, {"a.parquet": stars(20)}, reject_odd_ids, part_rows=3)
    index = rows_of(generation, "index")
    assert len(index) == 20
    for entry in index.to_pylist():
        star = pq.read_table(generation / entry["file"])["star_id"][entry["row"]].as_py()
        assert entry["file"].startswith("rejected" if star % 2 else "catalogue")
        assert id_hashes(pa.array([star]))[0][0] == entry["id_hash"]


def test_hive_layout_keeps_the_partition_folders_of_the_input(tmp_path):
    tables = {
        "field=T1/a.parquet": stars(12, 1),
        "field=T2/b.parquet": stars(9, 13),
        "field=T2/c.parquet": stars(3, 22),
    }
    changes = {"output__layout": "hive", "output__rows_per_file": 10, "sampling__keep_draws": 2}
    _, generation = run(tmp_path, tables, **changes)
    for table in ("catalogue", "draws"):
        rows = {
            path.relative_to(generation / table).as_posix(): pq.ParquetFile(path).metadata.num_rows
            for path in (generation / table).rglob("*.parquet")
        }
        assert rows == {
            "field=T1/part-000000.parquet": 10,
            "field=T1/part-000001.parquet": 2,
            "field=T2/part-000000.parquet": 10,
            "field=T2/part-000001.parquet": 2,
        }
    for entry in rows_of(generation, "index").to_pylist():
        star = pq.ParquetFile(generation / entry["file"]).read()["star_id"][entry["row"]]
        assert id_hashes(pa.array([star.as_py()]))[0][0] == entry["id_hash"]


def test_draws_are_kept_row_by_row_with_the_catalogue(tmp_path, repeated):
    _, generation = run(tmp_path, {"a.parquet": repeated}, part_rows=4, sampling__keep_draws=3)
    draws = rows_of(generation, "draws")
    assert draws["star_id"].to_pylist() == rows_of(generation, "catalogue")["star_id"].to_pylist()
    assert draws["teff"].type == pa.list_(pa.float32(), 3)
