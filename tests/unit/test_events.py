import json
from datetime import UTC, datetime, timedelta

from starkiln.engine.events import LOGS_KEPT, open_log


def test_events_are_json_lines_with_a_time_as_soon_as_written(tmp_path):
    start = datetime(2026, 1, 2, 3, 4, 5, 6000, UTC)
    with open_log(tmp_path, start) as log:
        log.write("plan", parts=3)
        (path,) = (tmp_path / "logs").iterdir()
        line = json.loads(path.read_text())
    assert path.name == "20260102T030405.006Z.jsonl"
    assert (line["event"], line["parts"]) == ("plan", 3)
    assert datetime.fromisoformat(line["time"]).tzinfo is not None


def test_the_oldest_logs_go(tmp_path):
    start = datetime(2026, 1, 1, tzinfo=UTC)
    for day in range(LOGS_KEPT + 5):
        with open_log(tmp_path, start + timedelta(days=day)):
            pass
    names = sorted(path.name for path in (tmp_path / "logs").iterdir())
    assert len(names) == LOGS_KEPT
    assert names[0].startswith("20260106")


def test_any_fact_can_be_told(tmp_path):
    with open_log(tmp_path, datetime(2026, 1, 1, tzinfo=UTC)) as log:
        log.write("refused", path=tmp_path, name="\udcff\n")
        (line,) = next((tmp_path / "logs").iterdir()).read_text().splitlines()
    assert json.loads(line)["path"] == str(tmp_path)
    assert json.loads(line)["name"] == "\udcff\n"
