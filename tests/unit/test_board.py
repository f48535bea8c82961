"""The notice board: always whole, told in time, and never in the way of the run."""

import json
import os
import subprocess
import sys
import time
from datetime import UTC, datetime
from pathlib import Path

import pytest

from starkiln.engine import board as board_module
from starkiln.engine.board import open_board

START = datetime(2026, 1, 2, 3, 4, 5, tzinfo=UTC)
NEVER = 1e6


def told(folder):
    return json.loads((folder / "progress.json").read_text())


@pytest.fixture
def clock(monkeypatch):
    """A clock that stands still until it is moved."""
    now = [100.0]
    monkeypatch.setattr(board_module.time, "monotonic", lambda: now[0])
    return now


def test_each_step_is_told_as_it_begins(tmp_path):
    with open_board(tmp_path, "night", START, NEVER) as board:
        assert told(tmp_path)["state"] == "starting"
        board.note(files={"total": 2}, build="000003")
        board.begin("planning", 100)
        first = told(tmp_path)
        assert (first["state"], first["step"]) == ("planning", {"rows": 100, "done": 0})
        assert first["files"] == {"total": 2, "planned": 0}
        assert (first["schema"], first["name"], first["pid"], first["build"]) == (1, "night", os.getpid(), "000003")
        assert (first["exit_code"], first["start"]) == (None, "2026-01-02T03:04:05.000+00:00")
        board.advance(100)
        board.begin("fitting", 40)
        assert told(tmp_path)["rows"]["done"] == 0
    assert [path.name for path in tmp_path.iterdir()] == ["progress.json"]


def test_rows_done_before_and_now_add_up_and_tell_the_time_left(tmp_path, clock):
    with open_board(tmp_path, "night", START, NEVER) as board:
        board.note(rows={"selected": 100, "done": 60})
        board.begin("fitting", 40)
        clock[0] += 5.0
        board.advance(10)
        board.write()
        now = told(tmp_path)
        assert now["rows"]["done"] == 70
        assert now["step"] == {"rows": 40, "done": 10}
        assert (now["rate"], now["seconds_left"]) == (2.0, 15.0)
        board.begin("packing", 0)
        assert (told(tmp_path)["rate"], told(tmp_path)["seconds_left"]) == (None, None)


def test_the_end_is_told_at_once_and_stays(tmp_path):
    with open_board(tmp_path, "night", START, NEVER) as board:
        board.begin("fitting", 40)
        board.advance(40)
        board.end(4, "done, but")
        assert told(tmp_path)["state"] == "ended"
    last = told(tmp_path)
    assert (last["state"], last["exit_code"], last["message"], last["rate"]) == ("ended", 4, "done, but", None)


def test_an_error_that_nobody_noted_is_an_end_too(tmp_path):
    with pytest.raises(KeyError, match="unforeseen"), open_board(tmp_path, "night", START, NEVER):
        raise KeyError("unforeseen")
    last = told(tmp_path)
    assert (last["state"], last["exit_code"], last["message"]) == ("ended", None, "'unforeseen'")


def test_news_come_by_themselves(tmp_path):
    with open_board(tmp_path, "night", START, 0.01) as board:
        board.begin("fitting", 10)
        board.advance(3)
        until = time.monotonic() + 30
        while told(tmp_path)["step"]["done"] != 3:
            assert time.monotonic() < until
            time.sleep(0.01)


def test_a_reader_never_sees_half_a_file(tmp_path):
    with open_board(tmp_path, "x" * 100_000, START, 0.0005):
        for _ in range(300):
            assert told(tmp_path)["name"] == "x" * 100_000


@pytest.mark.parametrize("facts", [{"nonsense": 1}, {"rows": {"nonsense": 1}}])
def test_there_is_no_place_for_unknown_facts(tmp_path, facts):
    with open_board(tmp_path, "night", START, NEVER) as board, pytest.raises(KeyError, match="nonsense"):
        board.note(**facts)


def test_a_disk_that_takes_nothing_stops_nothing(tmp_path):
    (tmp_path / "progress.json").mkdir()
    with open_board(tmp_path, "night", START, NEVER) as board:
        board.begin("fitting", 1)
        board.end(0, "done")
    with open_board(tmp_path / "gone", "night", START, NEVER) as board:
        board.begin("fitting", 1)


GROUP_ID = 12345

WRITE = """
import os, sys
from datetime import UTC, datetime
from pathlib import Path
from starkiln.engine.board import open_board
os.umask(0o027)
with open_board(Path(sys.argv[1]), "night", datetime.now(UTC)) as board:
    board.end(0, "done")
"""


def test_a_group_that_may_read_the_folder_may_read_the_news(tmp_path):
    if os.geteuid() != 0:
        pytest.skip("needs the right to change owners")
    folder = Path("/tmp") / f"starkiln-test-{os.getpid()}"  # pytest's own folders are closed to others
    folder.mkdir()
    try:
        os.chown(folder, 0, GROUP_ID)
        folder.chmod(0o2750)
        subprocess.run([sys.executable, "-c", WRITE, folder], check=True)
        path = folder / "progress.json"
        assert (path.stat().st_gid, path.stat().st_mode & 0o777) == (GROUP_ID, 0o640)
        read = {"capture_output": True, "user": "nobody", "env": {}}
        assert subprocess.run(["cat", path], group=GROUP_ID, extra_groups=[], **read).returncode == 0
        assert subprocess.run(["cat", path], group="nogroup", extra_groups=[], **read).returncode != 0
    finally:
        (folder / "progress.json").unlink(missing_ok=True)
        folder.rmdir()
