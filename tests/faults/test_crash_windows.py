"""A run whose process dies at each step that changes the run directory, and the run after it.

The next run publishes what an undisturbed one would have, nothing is left behind, and in between a reader has the
generation that was published before, whole, or the new one.
"""

import json
import os
import sqlite3

import pyarrow.parquet as pq
import pytest

from fake_stages import by_content, raise_at_failing_id, stages
from pipeline_survey import write
from real_runs import DIE, MAIN, ended
from small_survey import settings_for, stars
from starkiln.engine.run import run_settings
from starkiln.tables.write import file_sha256

pytestmark = pytest.mark.slow

DIED = 77
STEPS = {
    "hashes of a file written, not renamed": "die(hashing.Path, 'replace', when=in_planning)",
    "hashes of a file in place, not in the ledger": "die(Ledger, 'add_planned_file', call=2)",
    "a file in the ledger": "die(Ledger, 'add_planned_file', call=2, after=True)",
    "plan written, not in the ledger": "die(Ledger, 'begin_build')",
    "plan in the ledger": "die(Ledger, 'begin_build', after=True)",
    "a part written, not renamed": "die(store, 'publish')",
    "a part with two of its files renamed": "die(store, 'publish', call=5, after=True)",
    "a part renamed, not in the ledger": "die(Ledger, 'add_part', call=2)",
    "a part in the ledger": "die(Ledger, 'add_part', call=2, after=True)",
    "the first table packed": "die(closing, 'pack', after=True)",
    "the second table begun": "die(closing, 'pack', call=2)",
    "packed, run.json not written": "die(build, 'write_facts')",
    "run.json written": "die(build, 'write_facts', after=True)",
    "about to publish": "die(Ledger, 'set_state', when=to_publishing, after=True)",
    "renamed, link not moved": "die(Generations, '_switch')",
    "one of the links moved": "die(generations, '_link', after=True)",
    "link moved, not in the ledger": "die(Ledger, 'set_state', when=to_published)",
    "published, older ones not removed": "die(generations.shutil, 'rmtree', when=of_removed)",
    "published, not tidied up": "die(run, 'clear_away')",
    "tidied up in part": "die(Ledger, 'forget_planning')",
    "about to end": "die(Ledger, 'end_run')",
}
IMPORTS = """
from starkiln.engine import closing, generations, hashing, store
from starkiln.engine.generations import Generations
from starkiln.engine.ledger import Ledger

def in_planning(path, to):
    return path.parent.name == "planning"

def of_removed(path, *more):
    return ".removed" in str(path)

def to_publishing(ledger, number, state):
    return state == "publishing"

def to_published(ledger, number, state):
    return state == "published"

def to_earlier(ledger, number, state):
    return state == "earlier"
"""


def dying_main(step):
    return IMPORTS + DIE + MAIN.replace("    cli.main()", f"    {step}\n    cli.main()")


@pytest.fixture
def survey(tmp_path):
    """Settings of a run of two files in small parts, one generation of which is published before a file is added."""
    folder = write(tmp_path / "survey", a=stars(60, 100), b=stars(50, 200))

    def settings(output="run"):
        changes = {"compute__rows_per_part": 25, "input__carry": ["ra"], "sampling__keep_draws": 2}
        return settings_for(folder, tmp_path / output, run__keep_generations=1, **changes)

    run_settings(settings(), stages=stages(by_content))
    changed = stars(50, 200)
    write(
        folder, b=changed.set_column(changed.column_names.index("parallax"), "parallax", changed["ra"]), c=stars(70, 1)
    )
    return settings


def facts_of(generation):
    return json.loads((generation / "run.json").read_text())


def is_whole(generation):
    """Whether the files of a generation are as its run.json says."""
    files = facts_of(generation)["files"]
    return all(file_sha256(generation / name) == file["sha256"] for name, file in files.items())


def states(run_dir):
    with sqlite3.connect(run_dir / "ledger.sqlite") as ledger:
        return [state for (state,) in ledger.execute("SELECT state FROM builds")]


def nothing_is_left(run_dir):
    found = {path.name for path in run_dir.iterdir()}
    assert found == {
        "catalogue",
        "current",
        "generations",
        "ledger.sqlite",
        "lock",
        "logs",
        "progress.json",
        "rejected",
    }
    assert [path.name for path in (run_dir / "generations").iterdir()] == [(run_dir / "current").resolve().name]
    assert not list(run_dir.rglob("*.tmp"))
    assert states(run_dir) in (["published"], ["published"] * 2)


@pytest.mark.parametrize("step", STEPS)
def test_a_run_that_dies_at_a_step_loses_nothing(start, tmp_path, survey, step):
    settings, run_dir = survey(), tmp_path / "run"
    assert ended(start(settings, "by_content", cluster=False, main=dying_main(STEPS[step])))[0] == DIED
    assert is_whole((run_dir / "current").resolve())
    result = run_settings(settings, stages=stages(by_content))
    assert result.exit_code == 0
    undisturbed = run_settings(survey("undisturbed"), stages=stages(by_content))
    assert facts_of(result.path)["files"] == facts_of(undisturbed.path)["files"]
    assert result.counts == undisturbed.counts
    assert result.path == (run_dir / "current").resolve()
    assert result.path.name == "000002", "what was done is not done again"
    nothing_is_left(run_dir)
    again = run_settings(settings, stages=stages(by_content))
    assert again.message.startswith("nothing to do")
    nothing_is_left(run_dir)


@pytest.mark.parametrize("hurt", ["cut short", "another byte", "gone"])
def test_a_part_whose_file_is_damaged_is_done_again(start, tmp_path, survey, hurt):
    settings = survey()
    step = "die(Ledger, 'add_part', call=3, after=True)"
    assert ended(start(settings, "by_content", cluster=False, main=dying_main(step)))[0] == DIED
    (part,) = tmp_path.glob("run/generations/*.partial/parts/catalogue/part-000001.parquet")
    data = part.read_bytes()
    if hurt == "gone":
        part.unlink()
    else:
        part.write_bytes(data[:-1] if hurt == "cut short" else data[:99] + bytes([data[99] ^ 1]) + data[100:])
    result = run_settings(settings, stages=stages(by_content))
    undisturbed = run_settings(survey("undisturbed"), stages=stages(by_content))
    assert facts_of(result.path)["files"] == facts_of(undisturbed.path)["files"]
    log = max((tmp_path / "run" / "logs").iterdir()).read_text()
    events = [json.loads(line) for line in log.splitlines()]
    assert [event["part"] for event in events if event["event"] == "recover"] == [1]
    assert [event["done"] for event in events if event["event"] == "resume"] == [2]


def test_a_row_set_aside_before_the_run_died_stays_so(start, tmp_path, survey):
    settings = survey()
    step = "die(Ledger, 'add_set_aside', after=True)"
    assert ended(start(settings, "raise_at_failing_id", cluster=False, main=dying_main(step)))[0] == DIED
    result = run_settings(settings, stages=stages(raise_at_failing_id))
    undisturbed = run_settings(survey("undisturbed"), stages=stages(raise_at_failing_id))
    assert (result.exit_code, undisturbed.exit_code) == (4, 4)
    rejected = [pq.read_table(path / "rejected") for path in (result.path, undisturbed.path)]
    assert rejected[0].equals(rejected[1])
    assert rejected[0]["kind"].to_pylist() == ["fault"]
    assert rejected[0]["star_id"].to_pylist() == [13]
    nothing_is_left(tmp_path / "run")


def test_a_plan_that_no_longer_holds_leaves_its_parts_to_the_next_one(start, tmp_path, survey):
    settings = survey()
    step = "die(Ledger, 'add_part', call=3, after=True)"
    assert ended(start(settings, "by_content", cluster=False, main=dying_main(step)))[0] == DIED
    write(tmp_path / "survey", d=stars(10, 1000))
    given_up = "die(Ledger, 'set_state', when=to_earlier, after=True)"
    assert ended(start(settings, "by_content", cluster=False, main=dying_main(given_up)))[0] == DIED
    assert states(tmp_path / "run") == ["published", "earlier"]
    result = run_settings(settings, stages=stages(by_content))
    facts = facts_of(result.path)
    assert facts["rows"]["kept"] > 60, "those of the published generation, and those of the plan that was given up"
    undisturbed = run_settings(survey("undisturbed"), stages=stages(by_content))
    assert facts["files"] == facts_of(undisturbed.path)["files"]
    nothing_is_left(tmp_path / "run")


def test_a_lost_ledger_costs_the_unfinished_part_only(start, tmp_path, survey):
    settings, run_dir = survey(), tmp_path / "run"
    step = STEPS["renamed, link not moved"]
    assert ended(start(settings, "by_content", cluster=False, main=dying_main(step)))[0] == DIED
    (run_dir / "ledger.sqlite").unlink()
    (run_dir / "ledger.sqlite-journal").unlink(missing_ok=True)
    result = run_settings(settings, stages=stages(by_content))
    assert result.path.name == "000003", "a number is never used again"
    assert facts_of(result.path)["rows"]["kept"] == 60
    undisturbed = run_settings(survey("undisturbed"), stages=stages(by_content))
    assert facts_of(result.path)["files"] == facts_of(undisturbed.path)["files"]
    nothing_is_left(run_dir)


def test_a_link_that_somebody_points_back_is_respected(tmp_path, survey):
    settings, run_dir = survey(), tmp_path / "run"
    settings = settings.model_copy(update={"run": settings.run.model_copy(update={"keep_generations": 3})})
    second = run_settings(settings, stages=stages(by_content))
    (run_dir / "current").unlink()
    (run_dir / "current").symlink_to("generations/000001")
    third = run_settings(settings, stages=stages(by_content))
    assert third.path.name == "000003"
    assert facts_of(third.path)["files"] == facts_of(second.path)["files"]
    assert sorted(path.name for path in (run_dir / "generations").iterdir()) == ["000001", "000002", "000003"]
    assert os.readlink(run_dir / "current") == "generations/000003"
