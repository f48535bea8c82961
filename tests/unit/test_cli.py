import json
import os
import signal
import subprocess
import sys

import pyarrow.parquet as pq
import pytest
from typer.testing import CliRunner

import starkiln
from fake_stages import build_no_model, raise_always, raise_at_failing_id, stages
from small_survey import settings_for, stars
from starkiln import cli
from starkiln.engine import run as engine_run
from starkiln.settings import dump_toml
from starkiln.stages import model


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


@pytest.mark.parametrize("name", ["check", "run", "status", "path", "passbands"])
def test_help_has_an_example(command, name):
    shown = command(name, "--help")
    assert shown.exit_code == 0
    assert f"Example: starkiln {name}" in shown.output


def test_the_command_line_loads_nothing_heavy():
    heavy = ["numpy", "pandas", "pyarrow", "pydantic", "dask", "distributed", "numba", "astropy", "rich"]
    code = f"import sys, starkiln.cli; print([name for name in {heavy} if name in sys.modules])"
    shown = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True)
    assert shown.stdout == "[]\n"


def test_version(command):
    assert command("--version").output.splitlines()[0] == f"starkiln {starkiln.__version__}"


def test_a_run_tells_where_the_catalogue_is_and_shows_its_first_rows(command, config, tmp_path):
    shown = command("run", config)
    assert shown.exit_code == 0
    lines = shown.stdout.splitlines()
    assert lines[0] == f"20 of 20 stars are in {tmp_path}/run/catalogue"
    assert len(lines) == 1 + 1 + 5 + 1
    assert lines[-1] == f"the quality page is {tmp_path}/run/report/index.html"
    assert shown.stderr == ""
    assert command("path", tmp_path / "run").output == f"{tmp_path}/run/generations/000001\n"


def test_quiet_is_silent_if_all_is_well(command, config):
    shown = command("run", config, "--quiet")
    assert (shown.exit_code, shown.output) == (0, "")


def test_files_left_out_end_with_4_and_a_line_even_if_quiet(command, config, tmp_path):
    (tmp_path / "input" / "b.parquet").write_bytes(b"PAR1")
    settings = settings_for(tmp_path / "input", tmp_path / "run", input__on_bad_file="skip")
    config.write_text(dump_toml(settings))
    shown = command("run", config, "--quiet")
    assert shown.exit_code == 4
    assert "1 unusable input files left out" in shown.stdout
    assert len(shown.stdout.splitlines()) == 1


def test_workers_are_taken_from_the_command_line(command, config, tmp_path):
    assert command("run", config, "--workers", 7).exit_code == 0
    assert "workers = 7" in (tmp_path / "run" / "current" / "settings.toml").read_text()
    assert command("run", config, "--workers", 0).exit_code == 2


def test_check_prints_the_plan_and_makes_nothing(command, config, tmp_path):
    shown = command("check", config)
    assert shown.exit_code == 0
    assert "20 rows, 1 file(s), 1 row group(s)" in shown.stdout
    assert not (tmp_path / "run").exists()


def test_an_error_is_a_line_and_its_code_and_debug_adds_the_traceback(command, config, tmp_path):
    config.write_text(config.read_text().replace("star_id", "starid"))
    shown = command("run", config)
    assert shown.exit_code == 3
    assert shown.stderr.startswith("starkiln: ")
    assert "did you mean 'star_id'?" in shown.stderr
    assert "Traceback" not in shown.stderr
    assert "Traceback" in command("run", config, "--debug").stderr


def test_a_bug_is_one_line_with_a_hint_and_code_1(command, config, monkeypatch):
    monkeypatch.setattr(engine_run, "open_source", None)
    shown = command("run", config)
    assert shown.exit_code == 1
    assert shown.stderr == (
        "starkiln: unexpected TypeError: 'NoneType' object is not callable "
        "(a bug, please report it; --debug shows where)\n"
    )


def test_the_log_of_a_bug_has_the_traceback(command, config, monkeypatch, tmp_path):
    monkeypatch.setattr(engine_run, "fitting_stages", lambda: stages(raise_always))
    shown = command("run", config)
    assert shown.exit_code == 1
    assert shown.stderr.startswith("starkiln: part 0 of 20 rows failed")
    (log,) = (tmp_path / "run" / "logs").iterdir()
    end = json.loads(log.read_text().splitlines()[-1])
    assert end["exit_code"] == 1
    assert "in raise_always" in end["traceback"]


def test_a_row_at_fault_is_set_aside_and_told_even_if_quiet(command, config, monkeypatch, tmp_path):
    monkeypatch.setattr(engine_run, "fitting_stages", lambda: stages(raise_at_failing_id))
    shown = command("run", config, "--quiet")
    assert shown.exit_code == 4
    assert shown.stdout == (
        f"19 of 20 stars are in {tmp_path}/run/catalogue, 1 rejected rows in {tmp_path}/run/rejected; "
        f"1 rows were set aside for faults: see `kind` in {tmp_path}/run/rejected\n"
    )
    assert shown.stderr == ""
    again = command("run", config, "--quiet")
    assert (again.exit_code, again.output) == (0, "")


def test_rows_set_aside_are_tried_again_when_asked_for(command, config, monkeypatch, tmp_path):
    monkeypatch.setattr(engine_run, "fitting_stages", lambda: stages(raise_at_failing_id))
    assert command("run", config).exit_code == 4
    assert command("run", config, "--retry-failed").exit_code == 4
    monkeypatch.setattr(engine_run, "fitting_stages", stages)
    shown = command("run", config, "--retry-failed")
    assert shown.exit_code == 0
    assert shown.stdout.startswith("20 of 20 stars are in")
    facts = json.loads((tmp_path / "run" / "current" / "run.json").read_text())
    assert (facts["rows"]["retried"], facts["rows"]["kept"]) == (1, 19)
    assert command("run", config, "--retry-failed").stdout.startswith("nothing to do: ")


def test_status_tells_how_the_run_ended(command, config, tmp_path):
    assert command("status", tmp_path / "run").exit_code == 2
    command("run", config)
    shown = command("status", tmp_path / "run")
    assert shown.exit_code == 0
    assert "ended with exit code 0" in shown.stdout
    found = json.loads(command("status", tmp_path / "run", "--json").stdout)
    assert (found["schema"], found["state"], found["rows"]["new"], found["parts"]) == (
        1,
        "ended",
        20,
        {"total": 1, "done": 1},
    )


def test_check_counts_rows_when_asked(command, config, tmp_path, monkeypatch):
    command("run", config)
    pq.write_table(stars(25), tmp_path / "input" / "b.parquet")
    monkeypatch.setattr(model, "build_model", build_no_model)
    shown = command("check", config, "--rows")
    assert shown.exit_code == 0
    for told in ("20 rows as published", "5 rows: 5 new", "20 rows whose id has come before"):
        assert told in shown.stdout


@pytest.mark.parametrize("limit", ["6", "soon", "0s", "1h30", "-3m"])
def test_a_time_limit_that_is_none_is_refused(command, config, limit):
    shown = command("run", config, f"--time-limit={limit}")
    assert shown.exit_code == 2
    assert "write it as 6h, 90m, 1h30m or 45s" in shown.stderr


def test_a_scheduler_is_named_once(command, config):
    shown = command("run", config, "--scheduler", "tls://host:1", "--scheduler-file", "f.json")
    assert (shown.exit_code, shown.stderr) == (
        2,
        "starkiln: --scheduler and --scheduler-file exclude each other: give one\n",
    )


def test_a_path_without_a_catalogue_is_an_error_of_the_command_line(command, tmp_path):
    shown = command("path", tmp_path)
    assert (shown.exit_code, shown.stderr) == (
        2,
        f"starkiln: {tmp_path} holds no published catalogue: name the run.output of a finished run\n",
    )


def test_passbands_are_listed_and_told_in_full(command):
    assert "\n2mass_j " in command("passbands").stdout
    shown = command("passbands", "2mass_j").stdout
    assert "zero_point_vega_jy 1594" in shown
    assert "Cohen" in shown


def test_a_passband_with_editions_is_refused_by_its_bare_name(command):
    shown = command("passbands", "gaia_g")
    assert shown.exit_code == 2
    assert "gaia_dr3_g or gaia_dr2_g" in shown.stderr


@pytest.mark.parametrize("quiet", [True, False])
def test_a_signal_ends_with_5_and_no_word_if_quiet(command, config, monkeypatch, tmp_path, quiet):
    monkeypatch.setattr(engine_run, "fitting_stages", lambda: stages(signal_this_process))
    shown = command("run", config, *(["--quiet"] if quiet else []))
    assert shown.exit_code == 5
    assert shown.stdout == ""
    assert shown.stderr.startswith("" if quiet else "starkiln: stopped by SIGTERM: 0 of 1 parts are done")
    assert not quiet or shown.stderr == ""
    assert not (tmp_path / "run" / "current").exists()
    assert not (tmp_path / "run" / "scratch").exists()


def signal_this_process(*arguments):
    os.kill(os.getpid(), signal.SIGTERM)
    raise ArithmeticError


def test_check_compiles_nothing(config):
    code = (
        f"import sys; sys.argv = ['starkiln', 'check', {str(config)!r}]\n"
        "from starkiln import cli\n"
        "try:\n    cli.main()\n"
        "finally:\n    print([name for name in ('numba', 'emcee', 'scipy.stats') if name in sys.modules])"
    )
    shown = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True)
    assert shown.stdout.splitlines()[-1] == "[]"
