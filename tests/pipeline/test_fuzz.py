"""Any settings and tables: a run publishes and accounts for each row, or it says what is wrong; it never stumbles.

The suite tries a few dozen surveys; STARKILN_FUZZ_CASES=2000 tries so many.
"""

import copy
import json
import os
import shutil
import tempfile
from collections import Counter
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, event, given, settings
from hypothesis import strategies as st

from odd_tables import TAG, Survey, stages, surveys
from starkiln.engine.run import run_settings
from starkiln.errors import StarkilnError
from starkiln.settings import build_settings

CASES = int(os.environ.get("STARKILN_FUZZ_CASES", "60"))

pytestmark = [pytest.mark.slow, pytest.mark.timeout(600 + 10 * CASES)]

fuzzed = settings(
    max_examples=CASES,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large, HealthCheck.filter_too_much],
    print_blob=True,
)


def run(survey: Survey, folder: Path, output: str):
    """Run a survey; return how that ended, or the error that a user is told."""
    data = copy.deepcopy(survey.settings)
    data["run"] = {"name": "odd", "output": output}
    try:
        return run_settings(build_settings(data, folder), stages=stages())
    except StarkilnError as error:
        return error


def facts_of(generation: Path) -> dict:
    return json.loads((generation / "run.json").read_text())


def read(generation: Path, table: str) -> pa.Table | None:
    paths = sorted((generation / table).rglob("*.parquet"))
    return pa.concat_tables([pq.ParquetFile(path).read() for path in paths]) if paths else None


def column(generation: Path, table: str, name: str) -> list:
    found = read(generation, table)
    return [] if found is None else found[name].to_pylist()


def check_rows(survey: Survey, result) -> None:
    """Every row is in the catalogue or among the rejected, and the counts say so."""
    facts = facts_of(result.path)
    counts, used = result.counts, {file["name"] for file in facts["input"]["files"]}
    assert result.exit_code == (4 if facts["input"]["skipped"] else 0)
    assert counts["read"] == counts["filtered"] + counts["selected"]
    assert counts["selected"] == counts["catalogue"] + counts["rejected"]
    assert counts["pending"] == 0
    assert len(used) + len(facts["input"]["skipped"]) == len(survey.files)
    rows = {place: row for place, row in survey.rows().items() if place[0] in used}
    selected = {place: row for place, row in rows.items() if survey.selects(row)}
    assert (counts["read"], counts["selected"]) == (len(rows), len(selected))
    place_of = {row["tag"]: place for place, row in selected.items()}
    fitted = [place_of[tag] for tag in column(result.path, "catalogue", TAG)]
    rejected = list(
        zip(column(result.path, "rejected", "input_file"), column(result.path, "rejected", "input_row"), strict=True)
    )
    assert Counter(fitted + rejected) == Counter(selected.keys())
    assert (len(fitted), len(rejected)) == (counts["catalogue"], counts["rejected"])
    if survey.settings["output"]["layout"] == "flat":
        assert fitted == sorted(fitted)
    stars = column(result.path, "catalogue", survey.settings["input"]["id"])
    assert stars == [selected[place]["id"] for place in fitted]
    assert len(set(stars)) == len(stars)


CHANGES = ("renamed", "in other groups", "some gone", "carried", "other values")


def check_another_night(survey: Survey, folder: Path, how: str, seed: int) -> None:
    """Run again: first with nothing to do, then with other tables, which must give what a run of those alone gives."""
    published = (folder / "run" / "current").resolve()
    again = run(survey, folder, "run")
    assert not isinstance(again, StarkilnError), again
    assert (folder / "run" / "current").resolve() == published
    shutil.rmtree(folder / "tables")
    other = survey.changed(how, seed)
    other.write(folder)
    refit, fresh = run(other, folder, "run"), run(other, folder, "fresh")
    if isinstance(fresh, StarkilnError):
        assert isinstance(refit, StarkilnError)
        assert refit.exit_code == fresh.exit_code
        return
    check_rows(other, fresh)
    assert not isinstance(refit, StarkilnError), refit
    assert facts_of(folder / "run" / "current")["files"] == facts_of(fresh.path)["files"]
    if how == "carried" and survey.settings["input"]["carry"][-1] != TAG:
        assert facts_of(folder / "run" / "current")["rows"]["changed"] == 0


@fuzzed
@given(surveys(), st.sampled_from(CHANGES), st.integers(0, 2**32 - 1))
def test_any_survey_is_published_row_by_row_or_refused_in_words(survey, how, seed):
    with tempfile.TemporaryDirectory() as made:
        folder = Path(made)
        survey.write(folder)
        result = run(survey, folder, "run")
        if isinstance(result, StarkilnError):
            event(f"refused with {result.exit_code}")
            assert result.exit_code in (2, 3), result
            assert str(result)
            return
        event(f"published with {result.exit_code}, then {how}")
        check_rows(survey, result)
        check_another_night(survey, folder, how, seed)
