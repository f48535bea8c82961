"""What the README says of flags, commands and exit codes is what the code has."""

import re

from typer.testing import CliRunner

import starkiln
import starkiln.engine.run  # with all its errors
import starkiln.engine.work
from starkiln import cli
from starkiln.errors import StarkilnError
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


def subclasses(kind):
    return {kind}.union(*map(subclasses, kind.__subclasses__()))


def test_every_exit_code_is_told(repository):
    text = (repository / "README.md").read_text()
    table = text[text.index("| exit code | meaning |") :].partition("\n\n")[0]
    told = {int(code) for code in re.findall(r"^\| (\d+) \|", table, re.MULTILINE)}
    published, interrupted = {0, 4}, {cli.EXIT_INTERRUPTED}
    assert told == published | interrupted | {kind.exit_code for kind in subclasses(StarkilnError)}


def test_every_option_that_is_told_exists(repository):
    text = (repository / "README.md").read_text()
    shown = CliRunner().invoke(cli.app, ["run", "--help"], env={"COLUMNS": "200"}).output
    for option in ("--time-limit", "--refit-all", "--retry-failed", "--workers", "--scheduler", "--scheduler-file"):
        assert f"`{option}" in text
        assert option in shown


def test_the_crontab_line_is_the_one_of_the_example(repository):
    (line,) = re.findall(r"^30 19 .*$", (repository / "README.md").read_text(), re.MULTILINE)
    assert line in (repository / "configs" / "nightly.toml").read_text()
