"""What the README says of columns, flags, commands and exit codes is what the code has, and its links lead on."""

import re
import tomllib

import pytest
from typer.main import get_command

import starkiln
from readme_parts import README, TABLES, block_with, blocks, table_in_readme
from starkiln import cli, errors
from starkiln.settings import build_settings
from starkiln.tables.columns import QUANTITIES, fitted_columns

TEXT = README.read_text()


@pytest.mark.parametrize("name", TABLES)
def test_tables_are_those_of_the_registries(name):
    assert table_in_readme(name) == TABLES[name](), "run `python tests/readme_parts.py`"


def test_every_column_of_a_run_is_told():
    settings = build_settings(tomllib.loads(block_with("toml", '"my-survey"')))
    told = set(re.findall(r"^\| `(\w+)` \|", TEXT, re.MULTILINE))
    for column in fitted_columns(settings):
        quantity, _, suffix = column.name.rpartition("_")
        if suffix in ("lo95", "lo68", "p50", "hi68", "hi95") and quantity in {q.name for q in QUANTITIES}:
            assert quantity in told
        else:
            assert re.sub(r"^(residual|outlier)_.*", r"\1_BAND", column.name) in told


def test_every_name_of_the_python_door_exists():
    names = set(re.findall(r"starkiln\.(\w+)\(", TEXT))
    assert names >= {"run", "read", "units", "fit_table", "descriptions", "write_parquet"}
    for name in names:
        assert callable(getattr(starkiln, name))
    assert "`starkiln.flags.names(value)`" in TEXT
    assert starkiln.flags.names(3) == ["few_bands", "poor_parallax"]


def test_every_command_is_told_and_no_other():
    told = set(re.findall(r"`starkiln ([a-z]+)\b", TEXT))
    assert told == set(get_command(cli.app).commands)


def test_every_exit_code_of_an_error_is_told():
    told = {int(code) for code in re.findall(r"^\| (\d+) \| [^`]", TEXT, re.MULTILINE)}
    kinds = [
        kind for kind in vars(errors).values() if isinstance(kind, type) and issubclass(kind, errors.StarkilnError)
    ]
    assert {kind.exit_code for kind in kinds} | {cli.EXIT_STOPPED, cli.EXIT_INTERRUPTED} <= told


def test_pictures_and_links_lead_somewhere(repository):
    links = re.findall(r"\]\(([^)]+)\)", TEXT)
    assert "demo_catalog/temperature-luminosity.png" in links
    for link in links:
        assert (repository / link).is_file()
    for path in re.findall(r"python (tests/\S+\.py|demo_catalog/\S+\.py)", TEXT):
        assert (repository / path.rstrip("`")).is_file()
    assert (repository / "demo_catalog/temperature-luminosity.png").stat().st_size < 150_000


def test_python_blocks_are_python():
    for text in blocks("python"):
        compile(text, "README.md", "exec")
