"""What the README says of flags, commands and exit codes is what the code has."""

import re

import starkiln
from starkiln.flags import FLAGS


def test_every_flag_is_told_with_its_bit_and_sentence(repository):
    text = (repository / "README.md").read_text()
    for flag in FLAGS:
        assert f"| {flag.bit} | `{flag.name}` | {flag.sentence} |" in text


def test_every_name_of_the_python_door_exists(repository):
    names = set(re.findall(r"starkiln\.(\w+)\(", (repository / "README.md").read_text()))
    assert names >= {"run", "read", "units", "fit_table", "descriptions"}
    for name in names:
        assert callable(getattr(starkiln, name))
