from datetime import UTC, datetime
from types import SimpleNamespace

import pyarrow as pa
import pytest

from starkiln.engine.bench import Gains
from starkiln.engine.board import Board
from starkiln.engine.ledger import open_ledger
from starkiln.engine.records import Attempt, Build, Fitted, SetAside
from starkiln.engine.store import PartStore, make_part_folders, part_tables, sound_parts
from starkiln.engine.tally import Tally
from starkiln.errors import EnvironmentTrouble
from starkiln.tables.write import write_part

BUILD = Build(4, "plan", "fit", False, False, "sha", 2, "building")


class Log:
    def __init__(self):
        self.events = []

    def write(self, event, **fields):
        self.events.append((event, fields))


@pytest.fixture
def bench(tmp_path):
    """What a store works with: a ledger on disk that knows the build, and a log that remembers."""
    with open_ledger(tmp_path) as ledger:
        ledger.begin_build(BUILD)
        board = Board(tmp_path / "progress.json", "tamarin", datetime.now(UTC))
        yield SimpleNamespace(ledger=ledger, board=board, progress=board, log=Log(), gains=Gains())


@pytest.fixture
def store(tmp_path, bench):
    make_part_folders(tmp_path / "parts", draws=False)
    return PartStore(tmp_path / "parts", 4, Tally(), bench)


def fitted(parts, number):
    table = pa.table({"star_id": [1, 2, 3]})
    written = {name: write_part(table, parts / name / f"part-{number:06d}.parquet") for name in part_tables(False)}
    return Fitted(number, 0, 3, 3, written, {}, {}, b"", {"process": 1.0}, 7, "here")


def test_a_part_is_in_place_and_then_in_the_ledger(tmp_path, store, bench):
    made = fitted(tmp_path / "parts", 1)
    assert not (tmp_path / "parts" / "catalogue" / "part-000001.parquet").exists()
    store.part_done(made)
    done = bench.ledger.done_parts(4)[1]
    for name, file in done.files.items():
        path = tmp_path / "parts" / name / "part-000001.parquet"
        assert (path.stat().st_size, file.sha256) == (file.bytes, made.written[name].sha256)
    assert bench.gains.parts == 1
    assert not list(tmp_path.rglob("*.tmp"))


def test_a_part_that_cannot_be_put_in_place_is_not_in_the_ledger(tmp_path, store, bench):
    made = fitted(tmp_path / "parts", 1)
    made.written["index"].tmp_path.unlink()
    with pytest.raises(EnvironmentTrouble, match=r"index/part-000001\.parquet"):
        store.part_done(made)
    assert bench.ledger.done_parts(4) == {}
    assert bench.gains.parts == 0


@pytest.mark.parametrize("hurt", ["shorter", "changed", "gone"])
def test_only_parts_that_are_as_written_are_sound(tmp_path, store, bench, hurt):
    for number in (0, 1):
        store.part_done(fitted(tmp_path / "parts", number))
    path = tmp_path / "parts" / "index" / "part-000000.parquet"
    data = path.read_bytes()
    path.write_bytes(data[:-1] if hurt == "shorter" else bytes([data[0] ^ 1]) + data[1:])
    if hurt == "gone":
        path.unlink()
    assert list(sound_parts(tmp_path / "parts", bench.ledger, 4, bench.log)) == [1]
    assert list(bench.ledger.done_parts(4)) == [1]
    assert bench.log.events[-1] == ("recover", {"build": 4, "part": 0, "damaged": ["index"]})


def test_rows_set_aside_are_written_down_and_counted(store, bench):
    store.row_set_aside(1, SetAside(7, "stage raised", "ValueError: x"))
    assert bench.ledger.set_aside(4) == {1: (SetAside(7, "stage raised", "ValueError: x"),)}
    assert bench.log.events[-1][0] == "set_aside"


def test_only_tries_that_failed_are_news(store, bench):
    store.attempt(Attempt(1, 0, 3, "done", host="here"))
    assert bench.log.events == []
    store.attempt(Attempt(1, 0, 3, "slow", trace="where it hung"))
    (event,) = bench.log.events
    assert event[0] == "attempt"
    assert event[1]["trace"] == "where it hung"
