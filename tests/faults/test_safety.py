"""What a run directory, an input or a setting can not do: run code, reach a shell or the ledger, or tell a secret."""

import os
import re
import socket
import sqlite3
import stat

import psutil
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from fake_stages import by_content, stages
from pipeline_survey import write
from real_runs import ended, still_running, wait_until, workers_of
from small_survey import settings_for, stars, with_column
from starkiln.engine.run import run_settings

NASTY = [
    "'; DROP TABLE parts; --",
    '"; rm -rf ~; echo "',
    "$(touch shell)",
    "`touch shell`",
    "<script>alert(1)</script>",
    "../../../etc/passwd",
    "a\nb",
    "nul\0byte",
    "\u202eright to left",
    "%s%n{0}",
    "",
]
BANNED = re.compile(
    r"\b(pickle|cloudpickle|marshal|shelve|yaml)\b|\beval\(|\bexec\(|shell=True|os\.system|allow_pickle=True"
)


def test_no_module_of_the_engine_loads_objects_or_calls_a_shell(repository):
    modules = sorted((repository / "pipeline" / "starkiln" / "engine").glob("*.py"))
    assert len(modules) > 20
    for module in [*modules, repository / "pipeline" / "starkiln" / "cli.py"]:
        assert BANNED.findall(module.read_text()) == [], module


def test_every_statement_of_the_ledger_binds_its_values(repository):
    text = (repository / "pipeline" / "starkiln" / "engine" / "ledger.py").read_text()
    for braces in re.findall(r'f"(?:SELECT|INSERT|UPDATE|DELETE|PRAGMA)[^"]*"', text):
        assert set(re.findall(r"{([^}]*)}", braces)) <= {"version:d", "PARTS_OF_PACE:d", "pragma"}, braces


def test_names_and_ids_are_data(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    table = with_column(stars(len(NASTY)), "star_id", pa.array(NASTY))
    folder = write(tmp_path / "it's; DROP TABLE builds; --", **{"$(touch shell) '; DROP TABLE parts; --": table})
    settings = settings_for(folder, tmp_path / "run <b>'$(touch shell)'")
    result = run_settings(settings, stages=stages(by_content))
    assert result.exit_code == 0
    ids = pq.read_table(result.path / "catalogue")["star_id"].to_pylist()
    rejected = pq.read_table(result.path / "rejected")["star_id"].to_pylist()
    assert sorted(ids + rejected) == sorted(NASTY)
    with sqlite3.connect(settings.run.output / "ledger.sqlite") as ledger:
        tables = {name for (name,) in ledger.execute("SELECT name FROM sqlite_master WHERE type = 'table'")}
    assert {"runs", "builds", "parts", "attempts", "set_aside", "planned_files"} <= tables
    assert not list(tmp_path.rglob("shell"))
    assert run_settings(settings, stages=stages(by_content)).message.startswith("nothing to do")


@pytest.fixture
def busy(start, tmp_path):
    """A run with two workers that are in the middle of a part."""
    folder = write(tmp_path / "survey", a=stars(100))
    settings = settings_for(folder, tmp_path / "run", compute__workers=2, compute__rows_per_part=10)
    os.environ["STARKILN_TEST_SECRET"] = "the word is tourmaline"
    try:
        process = start(settings, "take_a_moment")
    finally:
        del os.environ["STARKILN_TEST_SECRET"]
    wait_until(process, lambda: list((tmp_path / "run").glob("generations/*.partial/parts/catalogue/part-*")))
    return process


@pytest.mark.slow
def test_a_run_listens_on_the_loopback_interface_only_and_tells_no_secret(busy, tmp_path):
    processes = [psutil.Process(busy.pid), *psutil.Process(busy.pid).children(recursive=True)]
    assert len(workers_of(busy.pid)) == 2
    listening = [
        connection.laddr.ip
        for process in processes
        for connection in process.net_connections("inet")
        if connection.status == psutil.CONN_LISTEN
    ]
    assert len(listening) >= 3
    assert set(listening) <= {"127.0.0.1", "::1"}
    assert ended(busy)[0] == 0
    for path in (tmp_path / "run").rglob("*"):
        if path.is_file():
            assert b"tourmaline" not in path.read_bytes(), path
    psutil.wait_procs(processes, timeout=10)
    assert still_running(processes) == []


@pytest.mark.slow
def test_files_are_as_open_as_the_umask_and_a_setgid_folder_say(start, tmp_path):
    folder = write(tmp_path / "survey", a=stars(20))
    (tmp_path / "shared").mkdir()
    (tmp_path / "shared").chmod(0o2770)
    before = os.umask(0o027)
    try:
        process = start(settings_for(folder, tmp_path / "shared" / "run"), "pass_through", cluster=False)
    finally:
        os.umask(before)
    assert ended(process)[0] == 0
    for path in (tmp_path / "shared" / "run").rglob("*"):
        mode = stat.S_IMODE(path.lstat().st_mode)
        if path.is_symlink():
            continue
        if path.is_dir():
            assert mode & stat.S_ISGID, path
            assert mode & 0o777 == 0o750, path
        else:
            assert mode == 0o640, path


def test_an_answer_that_is_no_run_is_not_taken_for_one(tmp_path):
    """A holder's note in the lock is only words: what stands there is never run or followed."""
    (tmp_path / "run").mkdir()
    (tmp_path / "run" / "lock").write_text('{"host": "$(touch shell)", "pid": "x", "start": 1}')
    folder = write(tmp_path / "survey", a=stars(5))
    assert run_settings(settings_for(folder, tmp_path / "run"), stages=stages(by_content)).exit_code == 0
    assert socket.gethostname() in (tmp_path / "run" / "lock").read_text()
