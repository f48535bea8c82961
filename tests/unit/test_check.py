import pyarrow.parquet as pq

from small_survey import settings_for, stars
from starkiln.engine.check import describe_plan, row_bytes
from starkiln.tables.source import open_source


def plan_text(tmp_path, **changes):
    folder = tmp_path / "input"
    folder.mkdir(exist_ok=True)
    for name in "ab":
        pq.write_table(stars(600), folder / f"{name}.parquet", row_group_size=200)
    settings = settings_for(folder, tmp_path / "run", compute__workers=2, **changes)
    return describe_plan(open_source(settings), settings)


def test_the_plan_tells_what_a_run_will_take(tmp_path):
    assert plan_text(tmp_path).splitlines()[:6] == [
        f"run      tamarin in {tmp_path}/run",
        "input    1200 rows, 2 file(s), 6 row group(s)",
        "bands    3: panstarrs_g, panstarrs_r, panstarrs_i",
        "parts    about 5 of up to 250 rows",
        "workers  2, up to 2GB each",
        "memory   up to 4.7 GB in all",
    ]
    assert plan_text(tmp_path).splitlines()[-1] == (
        "time     about 12 seconds at 50 stars a second and worker, as measured on one machine: yours will differ"
    )


def test_filters_and_files_left_out_are_told(tmp_path):
    assert "\nfilters" not in plan_text(tmp_path)
    (tmp_path / "input" / "c.parquet").write_bytes(b"PAR1")
    changes = {"input__where": [["star_id", ">", 3]], "input__on_bad_file": "skip"}
    text = plan_text(tmp_path, **changes)
    assert "\nfilters  not counted here" in text
    assert "1 unusable files left out: c.parquet" in text


def test_bytes_of_a_row_follow_the_columns(tmp_path):
    changes = {"output__per_band": "none", "sampling__keep_draws": 0}
    schema = stars(1).schema
    least = row_bytes(schema, settings_for("a", **changes))
    with_ra = row_bytes(schema, settings_for("a", **changes, input__carry=["ra"]))
    with_bands = row_bytes(schema, settings_for("a", **changes | {"output__per_band": "both"}))
    with_draws = row_bytes(schema, settings_for("a", **changes | {"sampling__keep_draws": 100}))
    assert with_ra - least == 8
    assert with_bands - least == 3 * 2 * 4
    assert with_draws - least == 6 * 100 * 4 + 8
