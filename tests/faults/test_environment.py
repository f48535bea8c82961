"""Trouble that is no row's doing: the run ends with 74, parts that are done stay done, nothing is published."""

import json
import sqlite3
import subprocess

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from fake_stages import by_content, stages
from pipeline_survey import write
from real_runs import ended
from small_survey import settings_for, stars, with_column
from starkiln.engine import build
from starkiln.engine.run import run_settings
from starkiln.errors import EnvironmentTrouble

pytestmark = pytest.mark.slow


@pytest.fixture
def settings(tmp_path):
    """Settings of a run of three files, each a part."""
    folder = write(tmp_path / "survey", a=stars(30, 1), b=stars(30, 101), c=stars(30, 201))
    return settings_for(folder, tmp_path / "run", compute__rows_per_part=30)


def facts_of(generation):
    return json.loads((generation / "run.json").read_text())


def undisturbed(settings, tmp_path):
    other = settings_for(settings.input.tables, tmp_path / "undisturbed")
    return facts_of(run_settings(other, stages=stages(by_content)).path)["files"]


def at_the_last_file(monkeypatch, happens):
    """Let something happen to the input when two parts are done."""
    part_done, done = build.PartStore.part_done, []

    def then(store, fitted):
        part_done(store, fitted)
        done.append(fitted.number)
        if len(done) == 2:
            happens()

    monkeypatch.setattr(build.PartStore, "part_done", then)


def parts_of_last_run(run_dir):
    lines = max((run_dir / "logs").iterdir()).read_text().splitlines()
    return [event["number"] for event in map(json.loads, lines) if event["event"] == "part"]


def one_cut_at_a_time(monkeypatch):
    monkeypatch.setattr(build.SerialExecutor, "workers", 0.5)


@pytest.fixture
def last_file(settings, monkeypatch, tmp_path):
    """The last input file, which is read when two parts are done."""
    one_cut_at_a_time(monkeypatch)
    return tmp_path / "survey" / "c.parquet"


def test_an_input_file_that_vanishes(settings, tmp_path, monkeypatch, last_file):
    away = tmp_path / "c.away"
    with monkeypatch.context() as patch:
        at_the_last_file(patch, lambda: last_file.rename(away))
        with pytest.raises(EnvironmentTrouble, match=r"c\.parquet: No such file"):
            run_settings(settings, stages=stages(by_content))
    away.rename(last_file)
    result = run_settings(settings, stages=stages(by_content))
    assert parts_of_last_run(tmp_path / "run") == [2]
    assert facts_of(result.path)["files"] == undisturbed(settings, tmp_path)


def test_an_input_file_that_is_replaced(settings, tmp_path, monkeypatch, last_file):
    with monkeypatch.context() as patch:
        at_the_last_file(patch, lambda: pq.write_table(stars(40, 301), last_file))
        with pytest.raises(EnvironmentTrouble, match=r"c\.parquet has changed since the run was planned; run again"):
            run_settings(settings, stages=stages(by_content))
    result = run_settings(settings, stages=stages(by_content))
    facts = facts_of(result.path)
    assert (facts["rows"]["kept"], facts["rows"]["new"]) == (60, 40), "the two parts that were done are taken over"
    assert facts["files"] == undisturbed(settings, tmp_path)
    assert len(list((tmp_path / "run" / "generations").iterdir())) == 1


def test_an_input_folder_that_is_not_there_leaves_the_catalogue(settings, tmp_path):
    first = run_settings(settings, stages=stages(by_content))
    (tmp_path / "survey").rename(tmp_path / "away")
    with pytest.raises(Exception, match="survey"):
        run_settings(settings, stages=stages(by_content))
    (tmp_path / "away").rename(tmp_path / "survey")
    again = run_settings(settings, stages=stages(by_content))
    assert (again.path, again.message.partition(":")[0]) == (first.path, "nothing to do")


def test_a_published_file_that_is_gone_is_told_and_all_rows_are_fitted(settings, tmp_path):
    first = run_settings(settings, stages=stages(by_content))
    (first.path / "catalogue" / "part-000000.parquet").unlink()
    write(tmp_path / "survey", d=stars(5, 301))
    second = run_settings(settings, stages=stages(by_content))
    assert facts_of(second.path)["why"] == "the published generation lacks catalogue/part-000000.parquet"
    assert facts_of(second.path)["files"] == undisturbed(settings, tmp_path)


@pytest.mark.parametrize(
    ("hurt", "told"),
    [
        (lambda path: path.write_bytes(b"no database" * 99), "file is not a database"),
        (lambda path: sqlite3.connect(path).execute("PRAGMA user_version = 99").connection.close(), "newer starkiln"),
        (lambda path: (path.unlink(), path.mkdir()), "unable to open database file"),
    ],
)
def test_a_ledger_that_cannot_be_used(start, tmp_path, settings, hurt, told):
    first = run_settings(settings, stages=stages(by_content))
    hurt(tmp_path / "run" / "ledger.sqlite")
    code, out, err = ended(start(settings, "by_content", cluster=False))
    assert (code, out) == (74, "")
    assert told in err
    assert "only the unfinished part of the run is lost" in err
    (tmp_path / "run" / "ledger.sqlite").rename(tmp_path / "moved")
    again = run_settings(settings, stages=stages(by_content))
    assert (again.path, again.message.partition(":")[0]) == (first.path, "nothing to do")


@pytest.fixture
def read_only(tmp_path):
    """A function that makes a folder, a file system of its own, read-only."""
    mounted = []

    def mount(folder, options):
        done = subprocess.run(["mount", "-t", "tmpfs", "-o", options, "tmpfs", folder], capture_output=True)
        if done.returncode:
            pytest.skip("needs the right to mount a file system")
        mounted.append(folder)

    yield mount
    for folder in set(mounted):
        subprocess.run(["umount", folder], check=True)


@pytest.mark.parametrize("place", ["run", "scratch"])
def test_a_folder_that_cannot_be_written(start, tmp_path, settings, read_only, place):
    (tmp_path / "disk").mkdir()
    read_only(tmp_path / "disk", "size=1m")
    if place == "run":
        settings = settings_for(settings.input.tables, tmp_path / "disk" / "run")
    else:
        settings = settings_for(settings.input.tables, tmp_path / "run", compute__scratch=str(tmp_path / "disk"))
    read_only(tmp_path / "disk", "remount,ro")
    code, out, err = ended(start(settings, "by_content", cluster=False))
    assert (code, out) == (74, "")
    assert "Read-only file system" in err
    assert ("set run.output" if place == "run" else "set compute.scratch") in err


def test_a_disk_that_becomes_read_only_while_parts_are_done(start, tmp_path, settings, read_only):
    (tmp_path / "disk").mkdir()
    read_only(tmp_path / "disk", "size=10m")
    changes = {"compute__workers": 2, "compute__rows_per_part": 5}
    settings = settings_for(settings.input.tables, tmp_path / "disk" / "run", **changes)
    process = start(settings, "take_a_moment")
    while not list(settings.run.output.glob("generations/*.partial/parts/catalogue/part-*")):
        assert process.poll() is None
    # A file system that is being written to cannot be made read-only, so the folder's parts are taken from it instead.
    parts = next(settings.run.output.glob("generations/*.partial/parts"))
    parts.rename(parts.with_name("away"))
    code, out, err = ended(process)
    assert (code, out) == (74, "")
    assert "No such file or directory" in err
    parts.with_name("away").rename(parts)
    assert ended(start(settings, "pass_through"))[0] == 0


def test_a_column_that_a_file_has_lost_names_the_file(settings, tmp_path):
    first = run_settings(settings, stages=stages(by_content))
    table = with_column(stars(30, 201), "parallax", pa.array(["?"] * 30))
    write(tmp_path / "survey", c=table)
    with pytest.raises(Exception, match=r"c\.parquet"):
        run_settings(settings, stages=stages(by_content))
    assert facts_of(tmp_path / "run" / "current")["counts"] == first.counts
