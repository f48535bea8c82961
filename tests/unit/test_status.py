"""What is told of a run, from outside."""

import json
from datetime import UTC, datetime, timedelta

import pytest

from starkiln.engine.board import open_board
from starkiln.engine.status import describe_status, duration, read_status
from starkiln.errors import EnvironmentTrouble, SettingsError

START = datetime(2026, 1, 2, 3, 4, 5, tzinfo=UTC)


@pytest.fixture
def running(tmp_path):
    """A run that is fitting: a quarter of its rows are done."""
    with open_board(tmp_path, "night", START, 1e6) as board:
        board.note(parts={"total": 8, "done": 2}, rows={"selected": 400, "changed": 12, "set_aside": 1}, workers=2)
        board.note(deadline="2026-01-02T09:04:05+00:00", why="model.extinction.scale: 0.3 -> 0.5")
        board.begin("fitting", 400)
        board.advance(100)
        board.write()
        yield tmp_path


def publish(folder):
    generation = folder / "generations" / "000007"
    generation.mkdir(parents=True)
    facts = {
        "name": "night",
        "start": "2026-01-01T03:00:00.000+00:00",
        "end": "2026-01-01T05:00:00.000+00:00",
        "exit_code": 4,
        "counts": {"catalogue": 390, "rejected": 10},
    }
    (generation / "run.json").write_text(json.dumps(facts))
    (folder / "current").symlink_to("generations/000007")


def later(folder, **by):
    return datetime.fromisoformat(json.loads((folder / "progress.json").read_text())["updated"]) + timedelta(**by)


def rewrite(folder, **facts):
    path = folder / "progress.json"
    path.write_text(json.dumps(json.loads(path.read_text()) | facts))


def test_a_run_in_progress_is_told_with_its_counts(running):
    publish(running)
    status = read_status(running, later(running, seconds=2))
    assert (status["schema"], status["state"], status["age_s"], status["stale"]) == (1, "fitting", 2.0, False)
    assert status["catalogue"]["counts"] == {"catalogue": 390, "rejected": 10}
    json.dumps(status)
    text = describe_status(status)
    assert "night: fitting, 100 of 400 rows (25.0 %), 2 of 8 parts, " in text
    assert "rows a second" in text
    assert " left\n" in text
    assert "begun 2026-01-02 03:04:05 UTC by process " in text
    assert ", 2 workers, last news 2 s ago" in text
    assert "rows: 12 changed, 1 set aside for faults" in text
    assert "refits all: model.extinction.scale: 0.3 -> 0.5" in text
    assert "must end by 2026-01-02 09:04:05 UTC" in text
    assert text.endswith("published: generation 000007 of 2026-01-01 05:00:00 UTC, 390 stars, 10 rejected rows")


@pytest.mark.parametrize(("seconds", "stale"), [(29, False), (31, True)])
def test_a_run_without_news_is_stale(running, seconds, stale):
    status = read_status(running, later(running, seconds=seconds))
    assert status["stale"] is stale
    assert ("no news since " in describe_status(status)) is stale
    assert (" left" in describe_status(status)) is not stale


def test_a_run_that_lives_but_does_not_move_is_stale_since_it_moved(running):
    moved = "2026-01-02T03:04:05.000+00:00"
    rewrite(running, moved=moved, updated="2026-01-02T03:20:00.000+00:00")
    status = read_status(running, datetime(2026, 1, 2, 3, 20, 1, tzinfo=UTC))
    assert (status["stale"], status["stale_since"]) == (True, moved)
    assert "no news since 2026-01-02 03:04:05 UTC" in describe_status(status)


def test_a_run_that_has_ended_is_never_stale(running):
    rewrite(running, state="ended", exit_code=5, message="stopped by SIGTERM")
    status = read_status(running, later(running, days=3))
    assert not status["stale"]
    assert describe_status(status).splitlines()[0] == "night: ended with exit code 5"
    assert "stopped by SIGTERM" in describe_status(status)
    assert describe_status(status).endswith("nothing is published yet")


def test_a_clock_that_is_ahead_is_no_age(running):
    assert read_status(running, later(running, seconds=-100))["age_s"] == 0.0


def test_files_are_told_while_planning(tmp_path):
    with open_board(tmp_path, "night", START, 1e6) as board:
        board.note(files={"total": 5, "planned": 3})
        board.begin("planning", 1000)
        assert "night: planning, 0 of 1000 rows (0.0 %), 3 of 5 files planned\n" in describe_status(
            read_status(tmp_path)
        )


def test_a_published_generation_alone_tells_its_run(tmp_path):
    publish(tmp_path)
    status = read_status(tmp_path)
    assert (status["state"], status["exit_code"], status["name"], status["stale"]) == ("ended", 4, "night", False)
    assert describe_status(status).splitlines()[0] == "night: ended with exit code 4"


@pytest.mark.parametrize("folder", [".", "none", "file"])
def test_where_no_run_is_there_is_no_status(tmp_path, folder):
    (tmp_path / "file").touch()
    with pytest.raises(SettingsError, match=r"holds no run: name the run\.output of one"):
        read_status(tmp_path / folder)


def test_another_schema_is_not_guessed_at(running):
    rewrite(running, schema=2)
    with pytest.raises(SettingsError, match="has schema 2, and this starkiln knows 1"):
        read_status(running)


@pytest.mark.parametrize("content", ["{", "[]", ""])
def test_a_damaged_file_is_told(tmp_path, content):
    (tmp_path / "progress.json").write_text(content)
    with pytest.raises(EnvironmentTrouble, match=r"progress\.json is damaged"):
        read_status(tmp_path)


def test_a_file_that_cannot_be_read_is_told(tmp_path):
    (tmp_path / "progress.json").mkdir()
    with pytest.raises(EnvironmentTrouble, match=r"progress\.json: Is a directory"):
        read_status(tmp_path)


@pytest.mark.parametrize(
    ("seconds", "words"),
    [(0.4, "0 s"), (99, "99 s"), (720, "12 min"), (12_000, "3 h 20 min"), (359_970, "100 h 0 min")],
)
def test_time_spans_in_words(seconds, words):
    assert duration(seconds) == words
