import os
import threading
from concurrent.futures import ThreadPoolExecutor

import pytest

from starkiln.engine.generations import Generations


def publish(generations, text, keep=2):
    partial = generations.begin()
    (partial / "catalogue").mkdir()
    (partial / "catalogue" / "part-000000.parquet").write_text(text)
    (partial / "rejected").mkdir()
    return generations.publish(partial, keep)


def test_links_lead_to_the_newest_generation(tmp_path):
    generations = Generations(tmp_path)
    assert publish(generations, "one") == tmp_path / "generations" / "000001"
    assert publish(generations, "two") == tmp_path / "generations" / "000002"
    assert os.readlink(tmp_path / "current") == "generations/000002"
    assert os.readlink(tmp_path / "catalogue") == "current/catalogue"
    assert (tmp_path / "catalogue" / "part-000000.parquet").read_text() == "two"
    assert (tmp_path / "rejected").is_dir()
    assert not (tmp_path / "report").is_symlink()


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


def test_what_an_unfinished_run_left_is_removed(tmp_path):
    generations = Generations(tmp_path)
    stale = generations.begin()
    (stale / "half").write_text("half")
    fresh = generations.begin()
    assert fresh == stale
    assert list(fresh.iterdir()) == []
    generations.discard(fresh)
    assert generations.numbers() == []
    assert not fresh.exists()


def test_nothing_but_the_generation_and_its_links_is_left(tmp_path):
    publish(Generations(tmp_path), "one")
    assert sorted(path.name for path in tmp_path.iterdir()) == [
        "catalogue",
        "current",
        "generations",
        "rejected",
    ]
