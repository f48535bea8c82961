import errno
import os
import threading
import time
from contextlib import suppress
from pathlib import Path

import pytest

from starkiln.engine import disk
from starkiln.engine.disk import disk_trouble, remove_folder, sweep
from starkiln.engine.events import EventLog
from starkiln.errors import EnvironmentTrouble


@pytest.mark.parametrize(
    ("error", "told"),
    [
        (
            OSError(errno.ENOSPC, "Error writing bytes. Detail: long"),
            "/a/b: No space left on device; mend it and run again",
        ),
        (OSError(errno.EIO, "in other words", "/a/c"), "/a/c: Input/output error; mend it and run again"),
        (OSError("without a number"), "/a/b: without a number; mend it and run again"),
    ],
)
def test_trouble_names_the_file_or_else_the_place(error, told):
    with pytest.raises(EnvironmentTrouble) as caught, disk_trouble(Path("/a/b")):
        raise error
    assert str(caught.value) == told


def test_other_errors_pass():
    with pytest.raises(KeyError), disk_trouble(Path("/a/b")):
        raise KeyError


def write_on(folder, until):
    """Write as a worker does that has not noticed yet that its run is gone."""
    while time.monotonic() < until:
        with suppress(FileNotFoundError, FileExistsError):
            (folder / "below" / "deeper").mkdir(parents=True, exist_ok=True)
            for number in range(50):
                (folder / "below" / "deeper" / f"{number}").touch()


def test_a_folder_goes_while_others_still_write_there(tmp_path):
    folder = tmp_path / "scratch"
    writer = threading.Thread(target=write_on, args=(folder, time.monotonic() + 1.0))
    writer.start()
    time.sleep(0.1)
    for _ in range(100):
        remove_folder(folder)
    writer.join()
    remove_folder(folder)
    assert not folder.exists()


def test_a_folder_that_cannot_be_removed_is_an_error(tmp_path, monkeypatch):
    monkeypatch.setattr(disk, "PATIENCE_SECONDS", 0.2)
    (tmp_path / "file").touch()
    with pytest.raises(NotADirectoryError):
        remove_folder(tmp_path / "file")


def test_a_log_on_a_full_disk_stops_nothing():
    with open("/dev/full", "wb", buffering=0) as full:
        EventLog(full).write("plan", parts=3)
        with pytest.raises(OSError, match=os.strerror(errno.ENOSPC)):
            full.write(b"full indeed")


def test_what_killed_writers_left_is_swept_and_nothing_else(tmp_path):
    keep, elsewhere = tmp_path / "run", tmp_path / "elsewhere"
    for folder in (keep / "parts" / "catalogue", elsewhere):
        folder.mkdir(parents=True)
        for name in (".part-000001.abc.tmp", "part-000001.parquet", "part.tmp", ".lock"):
            (folder / name).touch()
    (keep / "parts" / "link").symlink_to(elsewhere)
    (keep / ".current.abc.tmp").symlink_to(elsewhere)
    sweep(keep)
    left = sorted(path.relative_to(keep).as_posix() for path in keep.rglob("*"))
    assert left == [
        "parts",
        "parts/catalogue",
        "parts/catalogue/.lock",
        "parts/catalogue/part-000001.parquet",
        "parts/catalogue/part.tmp",
        "parts/link",
    ]
    assert len(list(elsewhere.iterdir())) == 4


def test_there_is_nothing_to_sweep_where_there_is_no_folder(tmp_path):
    sweep(tmp_path / "none")
    assert list(tmp_path.iterdir()) == []
