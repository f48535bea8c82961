"""The ledger: what is written stays, other versions and damage are told, and numbers are not used twice."""

import multiprocessing
import os
import signal
import sqlite3
import subprocess
from contextlib import suppress
from dataclasses import replace
from datetime import UTC, datetime

import pytest

from starkiln.engine import ledger as ledger_module
from starkiln.engine.ledger import SCHEMA_VERSION, open_ledger
from starkiln.engine.records import Attempt, Build, DonePart, PartFile, PlannedFile, SetAside
from starkiln.errors import EnvironmentTrouble

START = datetime(2026, 1, 2, 3, 4, 5, tzinfo=UTC)
BUILD = Build(1, "plan", "fit", False, True, "sha", 3, "building")
PART = DonePart(
    number=2,
    rows=10,
    fitted=8,
    files={"catalogue": PartFile(9, 1234, "aa"), "rejected": PartFile(1, 99, "bb")},
    reasons={"no id": 1},
    flags={"poor_fit": 3},
    audit=b"\x00\xff",
    seconds={"process": 4.0, "write": 0.5},
    peak_memory=10**10,
    host="one",
)
FILE = PlannedFile("k'; DROP TABLE runs; --", "ä\n.parquet", 7, 5, (3, 2), 1, "content", 160, "cc")


@pytest.fixture
def ledger(tmp_path):
    with open_ledger(tmp_path) as opened:
        yield opened


def look(folder, query):
    with sqlite3.connect(folder / "ledger.sqlite") as connection:
        rows = connection.execute(query).fetchall()
    connection.close()
    return rows


def test_what_is_written_is_there_when_it_is_opened_again(tmp_path):
    with open_ledger(tmp_path) as ledger:
        ledger.begin_run(START, {"starkiln": "1"})
        ledger.add_planned_file(FILE)
        ledger.begin_build(BUILD)
        ledger.add_part(1, PART)
        ledger.add_set_aside(1, 2, SetAside(9, "took too long", "45 s"))
        ledger.add_set_aside(1, 2, SetAside(4, "stage raised", "it's ?"))
        ledger.add_attempt(1, Attempt(2, 0, 10, "raised", "first line", "one", "a trace"))
    with open_ledger(tmp_path) as ledger:
        assert ledger.builds() == [BUILD]
        assert ledger.done_parts(1) == {2: PART}
        assert ledger.set_aside(1) == {2: (SetAside(4, "stage raised", "it's ?"), SetAside(9, "took too long", "45 s"))}
        assert ledger.planned_file(FILE.key) == FILE
        assert ledger.planned_file("another") is None
    assert look(tmp_path, 'SELECT start, "end", pid, exit_code FROM runs') == [
        ("2026-01-02T03:04:05.000+00:00", None, os.getpid(), None)
    ]
    assert look(tmp_path, "SELECT part, first, last, outcome, error, host, trace, run FROM attempts") == [
        (2, 0, 10, "raised", "first line", "one", "a trace", 1)
    ]


def test_what_has_returned_survives_a_kill(tmp_path):
    def write_and_die():
        with open_ledger(tmp_path) as ledger:
            ledger.begin_build(BUILD)
            ledger.add_part(1, PART)
            os.kill(os.getpid(), signal.SIGKILL)

    process = multiprocessing.get_context("fork").Process(target=write_and_die)
    process.start()
    process.join()
    assert process.exitcode == -signal.SIGKILL
    with open_ledger(tmp_path) as ledger:
        assert ledger.done_parts(1) == {2: PART}


def test_the_end_of_a_run_is_noted_for_that_run(tmp_path):
    for code in (5, 0):
        with open_ledger(tmp_path) as ledger:
            ledger.begin_run(START, {})
            ledger.end_run(code, f"ended with {code}")
    rows = look(tmp_path, 'SELECT exit_code, message, "end" IS NOT NULL FROM runs ORDER BY id')
    assert rows == [(5, "ended with 5", 1), (0, "ended with 0", 1)]


def test_states_change_and_a_dropped_build_takes_all_along_but_its_number(ledger, tmp_path):
    assert ledger.next_number() == 1
    for number in (1, 4):
        ledger.begin_build(replace(BUILD, number=number))
        ledger.add_part(number, PART)
        ledger.add_set_aside(number, 2, SetAside(0, "why", ""))
        ledger.add_attempt(number, Attempt(2, 0, 10, "done"))
    ledger.set_state(1, "earlier")
    assert [build.state for build in ledger.builds()] == ["earlier", "building"]
    ledger.drop_build(4)
    assert [build.number for build in ledger.builds()] == [1]
    assert (ledger.done_parts(4), ledger.set_aside(4)) == ({}, {})
    assert look(tmp_path, "SELECT build FROM attempts") == [(1,)]
    assert ledger.done_parts(1) == {2: PART}
    assert ledger.next_number() == 5


def test_a_part_done_again_replaces_what_was_noted_of_it(ledger):
    ledger.begin_build(BUILD)
    ledger.add_part(1, PART)
    again = replace(PART, host="other")
    ledger.add_part(1, again)
    assert ledger.done_parts(1) == {2: again}
    ledger.forget_part(1, 2)
    assert ledger.done_parts(1) == {}


def test_a_misuse_is_a_bug_and_no_trouble_with_the_disk(ledger):
    ledger.begin_build(BUILD)
    with pytest.raises(sqlite3.IntegrityError):
        ledger.begin_build(BUILD)
    with pytest.raises(sqlite3.IntegrityError):
        ledger.add_part(9, PART)
    with pytest.raises(sqlite3.IntegrityError):
        ledger.set_state(1, "no such state")


def test_planning_is_forgotten_at_once(ledger):
    ledger.add_planned_file(FILE)
    ledger.forget_planning()
    assert ledger.planned_file(FILE.key) is None


def test_the_pace_is_that_of_the_newest_parts_with_fits(ledger, monkeypatch):
    monkeypatch.setattr(ledger_module, "PARTS_OF_PACE", 20)
    ledger.begin_build(BUILD)
    for number in (*range(20, 1, -1), 0, 1):
        ledger.add_part(1, replace(PART, number=number, fitted=4, seconds={"process": float(number), "keep": 1e3}))
    ledger.add_part(1, replace(PART, number=999, fitted=0))
    rates = ledger.fit_rates()
    assert len(rates) == 20
    assert rates[:3] == [0.25, 0.0, 0.5]


def test_a_newer_file_is_refused_naming_both_versions(tmp_path):
    with open_ledger(tmp_path):
        pass
    look(tmp_path, f"PRAGMA user_version = {SCHEMA_VERSION + 6}")
    with pytest.raises(EnvironmentTrouble, match=rf"has version {SCHEMA_VERSION + 6}, .* knows {SCHEMA_VERSION}: "):
        open_ledger(tmp_path).__enter__()
    assert look(tmp_path, "PRAGMA user_version") == [(SCHEMA_VERSION + 6,)]


def add_column(connection):
    connection.execute("ALTER TABLE runs ADD COLUMN mood TEXT")


def stumble(connection):
    add_column(connection)
    raise sqlite3.OperationalError("out of luck")


def test_an_older_file_is_brought_up_to_date_after_a_copy(tmp_path, monkeypatch):
    with open_ledger(tmp_path) as ledger:
        ledger.begin_build(BUILD)
    monkeypatch.setattr(ledger_module, "SCHEMA_VERSION", 3)
    monkeypatch.setattr(ledger_module, "MIGRATIONS", {1: add_column, 2: lambda connection: None})
    with open_ledger(tmp_path) as ledger:
        assert ledger.builds() == [BUILD]
    assert look(tmp_path, "PRAGMA user_version") == [(3,)]
    assert look(tmp_path, "SELECT mood FROM runs") == []
    assert sorted(path.name for path in tmp_path.iterdir()) == ["ledger.sqlite", "ledger.sqlite.v1"]
    with sqlite3.connect(tmp_path / "ledger.sqlite.v1") as copy:
        assert copy.execute("SELECT number FROM builds").fetchall() == [(1,)]
        assert copy.execute("PRAGMA user_version").fetchone() == (1,)
    copy.close()


def test_a_step_that_fails_leaves_the_older_file_as_it_was(tmp_path, monkeypatch):
    with open_ledger(tmp_path):
        pass
    monkeypatch.setattr(ledger_module, "SCHEMA_VERSION", 2)
    monkeypatch.setattr(ledger_module, "MIGRATIONS", {1: stumble})
    with pytest.raises(EnvironmentTrouble, match="out of luck"):
        open_ledger(tmp_path).__enter__()
    assert look(tmp_path, "PRAGMA user_version") == [(1,)]
    with pytest.raises(sqlite3.OperationalError, match="mood"):
        look(tmp_path, "SELECT mood FROM runs")


@pytest.mark.parametrize("content", [b"no database at all, but long enough to be one" * 50, b"SQLite format 3\0torn"])
def test_a_damaged_file_is_trouble_with_the_remedy(tmp_path, content):
    (tmp_path / "ledger.sqlite").write_bytes(content)
    with pytest.raises(EnvironmentTrouble, match=r"ledger\.sqlite: .*; mend it and run again, or move it away") as told:
        open_ledger(tmp_path).__enter__()
    assert told.value.exit_code == 74


def test_damage_found_later_is_trouble_too(tmp_path):
    with open_ledger(tmp_path) as ledger:
        ledger.begin_build(BUILD)
        for number in range(100):
            ledger.add_part(1, replace(PART, number=number))
    path = tmp_path / "ledger.sqlite"
    whole = path.read_bytes()
    path.write_bytes(whole[:4096] + b"\xff" * (len(whole) - 4096))
    with pytest.raises(EnvironmentTrouble, match="malformed"), open_ledger(tmp_path) as ledger:
        ledger.done_parts(1)


def test_a_folder_in_its_place_is_trouble(tmp_path):
    (tmp_path / "ledger.sqlite").mkdir()
    with pytest.raises(EnvironmentTrouble, match=r"ledger\.sqlite: unable to open"):
        open_ledger(tmp_path).__enter__()


@pytest.fixture
def small_disk(tmp_path):
    folder = tmp_path / "small"
    folder.mkdir()
    if subprocess.run(["mount", "-t", "tmpfs", "-o", "size=200k", "tmpfs", folder], capture_output=True).returncode:
        pytest.skip("needs the right to mount a file system")
    yield folder
    subprocess.run(["umount", folder], check=True)


def test_a_full_disk_is_trouble_and_what_was_written_stays(small_disk):
    with open_ledger(small_disk) as ledger:
        ledger.begin_build(BUILD)
        ledger.add_part(1, PART)
        fill(small_disk / "ballast")
        with pytest.raises(EnvironmentTrouble, match="disk is full") as told:
            ledger.add_part(1, replace(PART, number=3, audit=bytes(20_000)))
        assert told.value.exit_code == 74
    (small_disk / "ballast").unlink()
    with open_ledger(small_disk) as ledger:
        assert ledger.done_parts(1) == {2: PART}
        ledger.add_part(1, replace(PART, number=99))


def fill(path):
    with path.open("wb", buffering=0) as file, suppress(OSError):
        while True:
            file.write(bytes(4096))
