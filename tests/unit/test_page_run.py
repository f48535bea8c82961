"""The quality page after a run: built once for each generation, and never the reason for an exit code."""

import pyarrow.parquet as pq
import pytest
from typer.testing import CliRunner

from fake_stages import raise_at_failing_id, stages
from small_survey import settings_for, stars
from starkiln import cli
from starkiln.engine import run as engine_run
from starkiln.report import page
from starkiln.settings import dump_toml


@pytest.fixture
def command(monkeypatch):
    """Call the command line in this process, with stages that know no physics."""
    monkeypatch.setattr(engine_run, "fitting_stages", stages)
    return lambda *arguments: CliRunner().invoke(cli.app, [str(argument) for argument in arguments])


@pytest.fixture
def config(tmp_path):
    """Settings of a run of twenty stars."""
    (tmp_path / "input").mkdir()
    pq.write_table(stars(20), tmp_path / "input" / "a.parquet")
    path = tmp_path / "run.toml"
    path.write_text(dump_toml(settings_for(tmp_path / "input", tmp_path / "run")))
    return path


@pytest.fixture
def broken_page(monkeypatch):
    def fail(run, figures):
        raise ArithmeticError("no picture today\nand more of it")

    monkeypatch.setattr(page, "render", fail)


def test_a_run_has_a_page_and_nothing_is_built_when_nothing_is_done(command, config, tmp_path):
    assert command("run", config, "--quiet").output == ""
    path = tmp_path / "run" / "report" / "index.html"
    before = path.stat().st_mtime_ns
    again = command("run", config)
    assert again.stdout.startswith("nothing to do: ")
    assert again.stdout.endswith(f"the quality page is {path}\n")
    assert path.stat().st_mtime_ns == before


def test_a_page_that_is_gone_is_built_although_nothing_is_to_do(command, config, tmp_path):
    command("run", config)
    path = tmp_path / "run" / "report" / "index.html"
    path.unlink()
    command("run", config)
    assert path.is_file()


def test_a_new_generation_has_a_page_of_its_own(command, config, tmp_path):
    command("run", config)
    pq.write_table(stars(5, first_id=100), tmp_path / "input" / "b.parquet")
    command("run", config)
    text = (tmp_path / "run" / "report" / "index.html").read_text()
    assert "Of 25 selected rows 25 were fitted" in text


@pytest.mark.parametrize(("stage", "code"), [(None, 0), (raise_at_failing_id, 4)])
@pytest.mark.usefixtures("broken_page")
def test_a_page_that_fails_changes_no_exit_code(command, config, tmp_path, monkeypatch, stage, code):
    if stage is not None:
        monkeypatch.setattr(engine_run, "fitting_stages", lambda: stages(stage))
    shown = command("run", config)
    assert shown.exit_code == code
    assert shown.stderr == (
        "starkiln: the quality page could not be built (ArithmeticError: no picture today); the catalogue is whole\n"
    )
    assert "quality page" not in shown.stdout
    assert (tmp_path / "run" / "catalogue" / "part-000000.parquet").is_file()
    assert not (tmp_path / "run" / "report").exists()


@pytest.mark.usefixtures("broken_page")
def test_debug_shows_where_a_page_fails(command, config):
    assert "Traceback" in command("run", config, "--debug").stderr


@pytest.mark.usefixtures("broken_page")
def test_the_report_command_fails_with_a_page(command, config, tmp_path):
    command("run", config)
    shown = command("report", tmp_path / "run")
    assert shown.exit_code == 1
    assert "no picture today" in shown.stderr
