"""What a user can do wrong, with the message and the exit code each brings; nothing is published."""

import json
import os
import subprocess
import sys

import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from typer.testing import CliRunner

from pipeline_survey import QUICK, blackbodies, write
from small_survey import settings_for, with_column
from starkiln import cli
from starkiln.settings import dump_toml

CONFIG = dump_toml(settings_for("/tables", "/output", **QUICK))


class Survey:
    """A settings file and its tables, to be spoilt and run."""

    def __init__(self, folder):
        self.folder = folder
        write(folder / "tables", a=blackbodies(20, 1), b=blackbodies(20, 21))
        self.config = folder / "run.toml"
        self.config.write_text(CONFIG.replace("/tables", f"{folder}/tables").replace("/output", f"{folder}/run"))

    def change(self, old, new):
        text = self.config.read_text()
        assert old in text
        self.config.write_text(text.replace(old, new, 1))

    def rewrite(self, name, table):
        pq.write_table(table, self.folder / "tables" / f"{name}.parquet")

    def refused(self, code, *, check=None):
        """Run, expect a code, and return the message; `starkiln check` says the same where it can know."""
        for command in ("run", *(["check"] if check is None else check)):
            shown = CliRunner().invoke(cli.app, [command, str(self.config)])
            assert (shown.exit_code, shown.stdout) == (code, ""), shown.output
            assert "Traceback" not in shown.stderr
        assert not (self.folder / "run" / "current").exists()
        return shown.stderr.replace(str(self.folder), "")


@pytest.fixture
def survey(tmp_path):
    return Survey(tmp_path)


def test_no_such_column(survey):
    survey.change('value = "panstarrs_g"', 'value = "panstars_g"')
    assert survey.refused(3) == (
        "starkiln: 2 of 2 input files of /tables cannot be used:\n"
        "  each of them: has no column 'panstars_g' (did you mean 'panstarrs_g'?) "
        "(input.photometry panstarrs_g value)\n"
    )


def test_a_unit_that_is_none(survey):
    survey.change('unit = "nJy"', 'unit = "nJyy"')
    told = survey.refused(2)
    assert "input.photometry[0].unit (panstarrs_g): 'nJyy' is not a unit (did you mean nJy?)" in told


def test_a_unit_that_the_file_contradicts(survey):
    table = blackbodies(20)
    survey.rewrite("a", with_column(table, "panstarrs_g", table["panstarrs_g"], {"unit": "mJy"}))
    told = survey.refused(3)
    assert "a.parquet: column 'panstarrs_g' is in 'mJy' by the file's metadata" in told
    assert "has 'nJy'" in told


def test_a_magnitude_without_a_system(survey):
    survey.change('unit = "nJy"', 'unit = "mag"')
    told = survey.refused(2)
    assert "input.photometry[0].system (panstarrs_g) is missing" in told
    assert 'add system = "AB" or system = "Vega"' in told


def test_an_unknown_passband(survey):
    survey.change('passband = "panstarrs_g"', 'passband = "panstars_g"')
    told = survey.refused(2)
    assert told.startswith("starkiln: input.photometry[0].passband: no passband is called 'panstars_g'")
    assert "did you mean 'panstarrs_g'?" in told


def test_an_empty_table(survey):
    for name in ("a", "b"):
        survey.rewrite(name, blackbodies(20).slice(0, 0))
    assert survey.refused(3) == "starkiln: input.tables: no row in the 2 files of /tables\n"


def test_a_truncated_file(survey):
    path = survey.folder / "tables" / "b.parquet"
    path.write_bytes(path.read_bytes()[:-100])
    told = survey.refused(3)
    assert "1 of 2 input files of /tables cannot be used" in told
    assert "b.parquet: is no whole Parquet file" in told


def test_filters_that_leave_no_row(survey):
    survey.change("[input]", '[input]\nwhere = [["star_id", "<", 0]]')
    assert survey.refused(3, check=[]) == (
        "starkiln: input.where and input.only leave none of the 40 rows of /tables: loosen them\n"
    )


def test_an_output_folder_that_cannot_be_made(survey):
    (survey.folder / "run").write_text("a file")
    survey.change("/run", "/run/here")
    assert survey.refused(74, check=[]) == (
        "starkiln: cannot use /run/here as the run directory (Not a directory): "
        "set run.output to a folder you can write to\n"
    )


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write everywhere")
def test_an_output_folder_that_may_not_be_written(survey):
    (survey.folder / "run").mkdir(mode=0o500)
    assert "run as the run directory (Permission denied)" in survey.refused(74, check=[])


def test_two_misspelt_keys_are_both_named(survey):
    survey.change("effective_samples", "efective_samples")
    survey.change("min_bands", "min_band")
    told = survey.refused(2)
    assert "2 problems in the settings" in told
    assert "input.min_band: unknown key (did you mean 'min_bands'?)" in told
    assert "sampling.efective_samples: unknown key (did you mean 'effective_samples'?)" in told


def test_two_files_with_different_schemas(survey):
    table = blackbodies(20, 21)
    survey.rewrite("b", with_column(table, "panstarrs_g", table["panstarrs_g"].cast(pa.float32())))
    told = survey.refused(3)
    assert "1 of 2 input files of /tables cannot be used" in told
    assert "b.parquet: column 'panstarrs_g' holds float, but double in a.parquet" in told


def test_a_run_directory_of_another_name(survey):
    assert CliRunner().invoke(cli.app, ["run", str(survey.config), "--quiet"]).exit_code == 0
    survey.change('name = "tamarin"', 'name = "baobab"')
    shown = CliRunner().invoke(cli.app, ["run", str(survey.config)])
    assert shown.exit_code == 2
    assert "belongs to run 'tamarin', and run.name is 'baobab'" in shown.stderr
    assert len(list((survey.folder / "run" / "generations").iterdir())) == 1


HOLD = """
import sys
from pathlib import Path
from starkiln.engine.directory import hold
with hold(Path(sys.argv[1])):
    print("held", flush=True)
    sys.stdin.read()
"""


def test_a_run_directory_that_is_in_use(survey):
    command = [sys.executable, "-c", HOLD, survey.folder / "run"]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as holder:
        assert holder.stdout.readline() == b"held\n"
        told = survey.refused(75, check=[])
        holder.stdin.close()
    assert told.startswith(f"starkiln: /run is in use by another run (process {holder.pid} on ")


def test_the_log_of_a_failed_run_tells_why(survey):
    survey.change("[input]", '[input]\nwhere = [["star_id", "<", 0]]')
    survey.refused(3, check=[])
    (log,) = (survey.folder / "run" / "logs").iterdir()
    end = json.loads(log.read_text().splitlines()[-1])
    assert (end["event"], end["exit_code"]) == ("end", 3)
    assert "leave none of the 40 rows" in end["message"]
    assert "traceback" not in end
