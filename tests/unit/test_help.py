"""Help, versions, completion and errors: one voice, and nothing cut."""

import os
import re
import subprocess
import sys
from importlib.metadata import version

import pytest
from typer.main import get_command
from typer.testing import CliRunner

from starkiln import cli
from starkiln.errors import nearest
from starkiln.stages.model import METHOD_VERSION

COMMANDS = sorted(get_command(cli.app).commands)
PARAMETERS = [(name, parameter) for name in COMMANDS for parameter in get_command(cli.app).commands[name].params]


def call(*arguments):
    return CliRunner().invoke(cli.app, [str(argument) for argument in arguments])


# ---- help


def test_the_list_of_commands_cuts_no_sentence():
    shown = call("--help").output
    listed = re.findall(r"^  (\w+) +(\S.*)$", shown.partition("Commands:")[2], re.MULTILINE)
    assert sorted(name for name, _ in listed) == COMMANDS
    for _, sentence in listed:
        assert re.fullmatch(r"[A-Z].*[^.]\.", sentence)


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_has_an_example_that_it_would_take(name, repository):
    example = re.search(rf"Example: starkiln ({name}( .*)?)$", call(name, "--help").output, re.MULTILINE)
    words = example[1].split()
    for option in (word for word in words if word.startswith("--")):
        assert option in [text for _, parameter in PARAMETERS for text in parameter.opts]
    for path in (word for word in words if word.startswith("configs/")):
        assert (repository / path).is_file()


@pytest.mark.parametrize("pair", PARAMETERS, ids=lambda pair: f"{pair[0]} {pair[1].name}")
def test_every_option_and_argument_is_told_in_a_sentence(pair):
    assert re.fullmatch(r"[A-Z].*\.", pair[1].help)


# ---- version


def test_versions_that_matter():
    lines = call("--version").output.splitlines()
    assert lines[:2] == [f"starkiln {version('starkiln')}", f"method {METHOD_VERSION}"]
    assert lines[2] == "python " + ".".join(map(str, sys.version_info[:3]))
    assert lines[3:] == [
        f"{name} {version(name)}" for name in ("emcee", "numpy", "astropy", "pyarrow", "dask", "numba")
    ]


# ---- completion

NO_NETWORK = (
    "import socket\n"
    "def refuse(*_, **__): raise OSError('no network')\n"
    "socket.socket.connect = socket.getaddrinfo = refuse\n"
    "from starkiln.cli import main\n"
    "main()"
)


def complete(*arguments, **environment):
    command = [sys.executable, "-c", NO_NETWORK, *arguments]
    return subprocess.run(command, capture_output=True, text=True, env=os.environ | environment)


@pytest.mark.parametrize(
    ("shell", "words"), [("bash", "complete -o"), ("zsh", "#compdef"), ("fish", "complete --command")]
)
def test_completion_is_written_without_a_network(shell, words):
    shown = complete(_STARKILN_COMPLETE=f"source_{shell}")
    assert words in shown.stdout
    assert "starkiln" in shown.stdout
    assert shown.stderr == ""


def test_completion_is_installed_at_home_without_a_network(tmp_path):
    # Under a test runner there is no shell to be found out.
    environment = {"HOME": str(tmp_path), "_TYPER_COMPLETE_TEST_DISABLE_SHELL_DETECTION": "1"}
    shown = complete("--install-completion", "bash", **environment)
    assert shown.returncode == 0
    sourced = re.search(r"source '?([^'\n]+)", (tmp_path / ".bashrc").read_text())
    with open(sourced[1]) as script:
        assert "complete -o default -F _starkiln_completion starkiln" in script.read()


@pytest.mark.parametrize(
    ("typed", "offered"), [("starkiln pa", ["passbands", "path"]), ("starkiln run --time", ["--time-limit"])]
)
def test_completion_knows_commands_and_options(typed, offered):
    words = typed.split()
    shown = complete(_STARKILN_COMPLETE="complete_bash", COMP_WORDS=typed, COMP_CWORD=str(len(words) - 1))
    assert sorted(shown.stdout.split()) == offered


# ---- errors


SETTINGS = """
[run]
name = "my"
output = "run"
[input]
tables = "none.parquet"
id = "star_id"
"""
BAND = """
[[input.photometry]]
passband = "{}"
value = "g{}"
error = "e{}"
unit = "{}"
"""
BANDS = "".join(BAND.format("panstarrs_g", k, k, "nJy") + f'label = "b{k}"\n' for k in range(2))


@pytest.mark.parametrize(
    ("arguments", "text", "code", "said"),
    [
        (["check"], None, 2, r"my\.toml: cannot read the settings"),
        (["check"], "[run\n", 2, r"my\.toml: not valid TOML: .*line 1"),
        (["check"], SETTINGS + "[modell]\n", 2, r"modell: unknown key \(did you mean 'model'\?\)"),
        (["check"], SETTINGS + BANDS + BAND.format("panstars_g", 3, 3, "nJy"), 2, r"did you mean 'panstarrs_g'"),
        (["check"], SETTINGS + BANDS + BAND.format("panstarrs_g", 3, 3, "njansky"), 2, r"njansky"),
        (["check"], SETTINGS + BANDS + BAND.format("2mass_j", 3, 3, "mag"), 2, r"system"),
        (["check"], SETTINGS + BANDS + BAND.format("gaia_g", 3, 3, "nJy"), 2, r"gaia_dr3_g or gaia_dr2_g"),
        (["check"], SETTINGS + BANDS + BAND.format("2mass_j", 3, 3, "nJy"), 3, r"there is no file or folder .*none"),
        (["calibrate"], SETTINGS + BANDS + BAND.format("2mass_j", 3, 3, "nJy"), 2, r"add a \[calibrate\] section"),
        (["run", "--time-limit", "5x"], SETTINGS, 2, r"write it as 6h, 90m, 1h30m or 45s"),
        (["run", "--scheduler", "tcp://a:1", "--scheduler-file", "b"], SETTINGS, 2, r"exclude each other: give one"),
    ],
)
def test_errors_say_what_is_wrong_where_and_what_to_do(arguments, text, code, said, tmp_path):
    config = tmp_path / "my.toml"
    if text is not None:
        config.write_text(text)
    shown = call(*arguments, config)
    assert shown.exit_code == code
    assert_one_voice(shown.stderr, said)


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["status", "/nowhere"], r"/nowhere holds no run: name"),
        (["path", "/nowhere"], r"/nowhere holds no published catalogue: name"),
        (["passbands", "2mass_k"], r"did you mean '2mass_ks'\?"),
    ],
)
def test_errors_of_commands_without_settings(arguments, said):
    shown = call(*arguments)
    assert shown.exit_code == 2
    assert_one_voice(shown.stderr, said)


def assert_one_voice(stderr, said):
    first, *rest = stderr.splitlines()
    assert first.startswith("starkiln: ")
    assert all(line.startswith("  ") for line in rest)
    assert len(rest) <= 3
    assert re.search(said, stderr)
    assert "Traceback" not in stderr
    assert not re.search(r"[.!]$", first)


def test_an_unknown_command_and_option_name_the_nearest():
    assert "Did you mean 'run'?" in call("runn").stderr
    assert "--quiet" in call("run", "--quite").stderr


def test_the_nearest_name_is_found_in_any_case():
    assert nearest("jmag", ["Hmag", "Jmag", "Kmag"]) == " (did you mean 'Jmag'?)"
    assert nearest("flux", ["name", "ra"]) == ""
