import json
import os
import subprocess
import sys

import pytest

from starkiln.engine.directory import check_name, hold, scratch_folder
from starkiln.errors import DirectoryBusy, EnvironmentTrouble, SettingsError

HOLD_AND_WAIT = """
import sys
from pathlib import Path
from starkiln.engine.directory import hold
with hold(Path(sys.argv[1])):
    print("held", flush=True)
    sys.stdin.read()
"""


def test_a_held_directory_is_busy_and_the_holder_is_named_until_it_dies(tmp_path):
    holder = subprocess.Popen(
        [sys.executable, "-c", HOLD_AND_WAIT, tmp_path], stdin=subprocess.PIPE, stdout=subprocess.PIPE
    )
    with holder:
        assert holder.stdout.readline() == b"held\n"
        for _ in range(2):
            with pytest.raises(DirectoryBusy, match=rf"process {holder.pid} on .+, since 20") as caught:
                hold(tmp_path).__enter__()
        assert caught.value.exit_code == 75
        holder.kill()
    with hold(tmp_path):
        assert json.loads((tmp_path / "lock").read_text())["pid"] == os.getpid()


def test_a_folder_that_cannot_be_made_is_trouble_with_the_remedy(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(EnvironmentTrouble, match=r"file/run as the run directory \(Not a directory\): set run\.output"):
        hold(tmp_path / "file" / "run").__enter__()


def test_a_run_directory_belongs_to_one_name(tmp_path):
    check_name(tmp_path, "any")
    (tmp_path / "current").mkdir()
    (tmp_path / "current" / "run.json").write_text(json.dumps({"name": "mine"}))
    check_name(tmp_path, "mine")
    with pytest.raises(SettingsError, match=r"belongs to run 'mine', and run\.name is 'yours'"):
        check_name(tmp_path, "yours")
    (tmp_path / "current" / "run.json").write_text("{")
    with pytest.raises(EnvironmentTrouble, match=r"cannot read .*run\.json"):
        check_name(tmp_path, "mine")


@pytest.mark.parametrize("inside", [True, False])
def test_scratch_is_private_empty_and_gone_afterwards(tmp_path, inside):
    base = None if inside else tmp_path / "fast"
    with scratch_folder(tmp_path / "run", base) as scratch:
        (scratch / "left").write_text("by a run that was killed")
        assert (tmp_path / "run" if inside else base) in scratch.parents
        with scratch_folder(tmp_path / "run", base) as again:
            assert again == scratch
            assert list(again.iterdir()) == []
            assert again.stat().st_mode & 0o777 == 0o700
    assert not scratch.exists()


def test_two_run_directories_do_not_share_scratch(tmp_path):
    with scratch_folder(tmp_path / "a", tmp_path) as one, scratch_folder(tmp_path / "b", tmp_path) as other:
        assert one != other


def test_who_holds_a_directory_may_hold_it_again(tmp_path):
    with hold(tmp_path):
        holder = (tmp_path / "lock").read_text()
        with hold(tmp_path):
            pass
        assert refused(tmp_path).startswith(f"{tmp_path} is in use by another run (process {os.getpid()} on ")
        assert (tmp_path / "lock").read_text() == holder
    assert refused(tmp_path) == ""


def refused(run_dir):
    """Try to hold a directory in another process, and return what that was told."""
    attempt = (
        "import sys; from pathlib import Path; from starkiln.engine.directory import hold\n"
        "with hold(Path(sys.argv[1])): pass"
    )
    done = subprocess.run([sys.executable, "-c", attempt, run_dir], capture_output=True, text=True)
    return done.stderr.splitlines()[-1].partition(": ")[2] if done.returncode else ""


def test_a_lock_is_asked_for_without_loading_what_runs_need():
    ask = (
        "import sys, starkiln.engine.directory\n"
        "print([name for name in ('numpy', 'pyarrow', 'dask', 'distributed', 'astropy') if name in sys.modules])"
    )
    assert subprocess.run([sys.executable, "-c", ask], capture_output=True, text=True).stdout == "[]\n"
