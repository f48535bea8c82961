import pyarrow.parquet as pq

from planning import written
from small_survey import settings_for, stars
from starkiln.engine.check import count_rows, describe_plan, row_bytes
from starkiln.engine.records import Plan, RowCounts, Unit
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
        "time     about 3 seconds at 200 stars a second and worker, as measured on one machine: yours will differ"
    )


def test_a_choice_of_photosphere_takes_longer(tmp_path):
    text = plan_text(tmp_path, model__photosphere="auto")
    assert text.splitlines()[-1].startswith("time     about 10 seconds at 60 stars a second and worker")


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


class Told:
    """Notes what it is told of progress."""

    def __init__(self):
        self.begun, self.rows = [], 0

    def begin(self, what, rows):
        self.begun.append((what, rows))

    def advance(self, rows):
        self.rows += rows


def test_rows_are_counted_and_nothing_of_the_run_is_touched(tmp_path):
    source, settings = written(tmp_path / "input", [stars(40)], output=tmp_path / "run", compute__workers=2)
    told = Told()
    plan = count_rows(source, settings, {"fit_key": "one"}, told)
    assert (plan.rows, plan.parts) == (RowCounts(new=40), 1)
    assert (told.begun, told.rows) == ([("planning", 40)], 40)
    assert [path.name for path in tmp_path.iterdir()] == ["input"]
    assert describe_plan(source, settings, plan).splitlines()[1:5] == [
        "input    40 rows, 1 file(s), 2 row group(s)",
        "selected 40 rows; the filters turn 0 away",
        "to fit   40 rows: 40 new, 0 changed",
        "kept     0 rows as published",
    ]


def test_a_counted_plan_tells_all_that_becomes_of_rows(tmp_path):
    source, settings = written(tmp_path / "input", [stars(40)], output=tmp_path / "run", compute__workers=2)
    unit = Unit(0, ".", ((0, 0),), 0, 40, 30, 0, (15, 15))
    counts = RowCounts(new=1, changed=2, kept=14, failed=3, retried=4, duplicate=5, without_id=1, gone=7)
    plan = Plan(read=40, selected=30, units=(unit,), stamps=(), rows=counts, why="departures changed")
    lines = describe_plan(source, settings, plan).splitlines()
    assert lines[2:8] == [
        "selected 30 rows; the filters turn 10 away",
        "to fit   7 rows: 1 new, 2 changed, 4 retried",
        "why      departures changed",
        "kept     14 rows as published, 3 left out for a fault before",
        "left out 5 rows whose id has come before, 1 without an id",
        "gone     7 ids of the published catalogue",
    ]
    assert "parts    2" in lines
    assert lines[-1].startswith("time     about 0.018 seconds")


def test_counting_makes_do_with_the_systems_folder_for_temporary_files(tmp_path):
    source, settings = written(tmp_path / "input", [stars(40)], output=tmp_path / "not" / "there" / "run")
    assert count_rows(source, settings, {"fit_key": "one"}, Told()).selected == 40
    assert [path.name for path in tmp_path.iterdir()] == ["input"]
