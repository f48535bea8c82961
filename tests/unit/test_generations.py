import os
import threading
from concurrent.futures import ThreadPoolExecutor

import pytest

from starkiln.engine.generations import Generations


def fill(generations, number, text):
    result = generations.begin(number) / "result"
    (result / "catalogue").mkdir(parents=True)
    (result / "catalogue" / "part-000000.parquet").write_text(text)
    (result / "rejected").mkdir()


def publish(generations, text, keep=2):
    number = max(generations.numbers(), default=0) + 1
    fill(generations, number, text)
    return generations.publish(number, keep, lambda state: None)


def test_links_lead_to_the_newest_generation(tmp_path):
    generations = Generations(tmp_path)
    assert generations.current() is None
    assert publish(generations, "one") == tmp_path / "generations" / "000001"
    assert publish(generations, "two") == tmp_path / "generations" / "000002"
    assert os.readlink(tmp_path / "current") == "generations/000002"
    assert generations.current() == 2
    assert os.readlink(tmp_path / "catalogue") == "current/catalogue"
    assert (tmp_path / "catalogue" / "part-000000.parquet").read_text() == "two"
    assert (tmp_path / "rejected").is_dir()
    assert not (tmp_path / "report").is_symlink()


def test_states_are_told_before_the_rename_and_after_the_link_has_moved(tmp_path):
    generations = Generations(tmp_path)
    fill(generations, 7, "seven")
    seen = []
    generations.publish(7, 2, lambda state: seen.append((state, generations.numbers(), generations.current())))
    assert seen == [("publishing", [], None), ("published", [7], 7)]


def test_a_publication_is_finished_from_wherever_it_was(tmp_path):
    generations = Generations(tmp_path)
    publish(generations, "one")
    fill(generations, 2, "two")
    (generations.partial(2) / "result").rename(generations.folder(2))
    states = []
    for _ in range(2):
        assert generations.finish(2, 1, states.append) == generations.folder(2)
        assert (generations.current(), generations.numbers()) == (2, [2])
    assert states == ["published", "published"]
    assert (tmp_path / "catalogue" / "part-000000.parquet").read_text() == "two"


def test_a_reader_of_the_old_generation_keeps_it_whole(tmp_path):
    generations = Generations(tmp_path)
    publish(generations, "one")
    resolved = (tmp_path / "catalogue").resolve()
    with (tmp_path / "catalogue" / "part-000000.parquet").open() as reader:
        publish(generations, "two")
        assert reader.read() == "one"
    assert (resolved / "part-000000.parquet").read_text() == "one"


@pytest.mark.parametrize("keep", [1, 2, 3])
def test_only_the_newest_generations_are_kept(tmp_path, keep):
    generations = Generations(tmp_path)
    for text in ("one", "two", "three", "four"):
        publish(generations, text, keep)
    assert generations.numbers() == [1, 2, 3, 4][-keep:]
    assert generations.partials() == [1, 2, 3, 4]
    assert not list((tmp_path / "generations").glob(".*"))


def test_there_is_a_catalogue_at_every_moment(tmp_path):
    generations = Generations(tmp_path)
    publish(generations, "0")
    done, missing, seen = threading.Event(), [], set()

    def keep_reading():
        while not done.is_set():
            try:
                seen.add(os.readlink(tmp_path / "current"))
            except FileNotFoundError as error:
                missing.append(error)

    with ThreadPoolExecutor(1) as threads:
        reader = threads.submit(keep_reading)
        for number in range(100):
            publish(generations, str(number))
        done.set()
        reader.result()
    assert missing == []
    assert len(seen) > 10


def test_what_nobody_knows_of_is_swept_away_and_the_rest_stays(tmp_path):
    generations = Generations(tmp_path)
    publish(generations, "one")
    for number in (1, 2, 3):
        (generations.begin(number) / "half").write_text("half")
    (tmp_path / "generations" / ".000005.removed" / "catalogue").mkdir(parents=True)
    (tmp_path / ".current.0123.tmp").symlink_to("generations/000009")
    assert generations.sweep({3}) == [1, 2]
    assert generations.partials() == [3]
    assert generations.numbers() == [1]
    assert sorted(path.name for path in (tmp_path / "generations").iterdir()) == ["000001", "000003.partial"]
    assert not list(tmp_path.glob(".*"))


def test_a_new_one_begins_empty(tmp_path):
    generations = Generations(tmp_path)
    (generations.begin(4) / "half").write_text("half")
    assert list(generations.begin(4).iterdir()) == []
    generations.remove_partial(4)
    generations.remove_partial(4)
    assert generations.partials() == []


def test_a_current_that_leads_nowhere_is_none(tmp_path):
    (tmp_path / "current").symlink_to("generations/000003")
    assert Generations(tmp_path).current() is None


def test_nothing_but_the_generation_and_its_links_is_left(tmp_path):
    generations = Generations(tmp_path)
    publish(generations, "one")
    generations.remove_partial(1)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["catalogue", "current", "generations", "rejected"]
    assert [path.name for path in (tmp_path / "generations").iterdir()] == ["000001"]
