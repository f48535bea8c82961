import os
import re
import shutil
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import pytest

import starkiln
from starkiln.engine.identity import identify, make_identity, method_hash
from starkiln.errors import EnvironmentTrouble

TELL = "from starkiln.engine.identity import method_hash; print(method_hash())"


def test_a_process_agrees_with_itself(tmp_path):
    assert identify(make_identity(tmp_path)) == ""


@pytest.mark.parametrize(
    ("changes", "text"),
    [
        ({"method": "0"}, "its starkiln is another one"),
        ({"libraries": "0"}, "its libraries have other versions"),
        ({"nonce": "0"}, "it sees another .*nonce than the run"),
        ({"nonce_file": Path("/nowhere/nonce")}, "it does not see the run's folder: .*No such file"),
    ],
)
def test_a_process_that_differs_says_in_what(tmp_path, changes, text):
    assert re.search(text, identify(replace(make_identity(tmp_path), **changes)))


def test_a_folder_has_a_nonce_of_each_run(tmp_path):
    assert make_identity(tmp_path).nonce != make_identity(tmp_path).nonce


def test_a_nonce_that_cannot_be_written_is_trouble(tmp_path):
    with pytest.raises(EnvironmentTrouble, match="nonce"):
        make_identity(tmp_path / "missing")


def test_one_byte_more_makes_another_method(tmp_path):
    shutil.copytree(Path(starkiln.__file__).parent, tmp_path / "starkiln", ignore=shutil.ignore_patterns("__pycache__"))

    def told():
        environment = os.environ | {"PYTHONPATH": str(tmp_path)}
        return subprocess.check_output([sys.executable, "-c", TELL], env=environment, text=True).strip()

    assert told() == method_hash()
    with (tmp_path / "starkiln" / "flags.py").open("a") as file:
        file.write("#")
    assert told() != method_hash()
