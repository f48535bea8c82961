"""Worker processes and the kernels: compiled before they start, and only once."""

import os
import subprocess
import sys

import numpy as np
import pytest

from pipeline_survey import QUICK, blackbodies, write
from small_survey import BANDS, band, settings_for, with_column
from starkiln.settings import dump_toml

RUN = """
import sys
from dataclasses import replace
from fake_stages import fit_and_tell_compilations
from starkiln import cli
from starkiln.engine import build, run
from starkiln.engine.job import fitting_stages
if __name__ == "__main__":
    build.SMALL_RUN_ROWS = -1
    run.fitting_stages = lambda: replace(fitting_stages(), process_part=fit_and_tell_compilations)
    cli.main()
"""


@pytest.mark.slow
def test_workers_compile_nothing(tmp_path):
    table = blackbodies(80)
    mag = -2.5 * np.log10(table["panstarrs_i"].to_numpy() / 3631e9)
    table = with_column(with_column(table, "panstarrs_i", mag), "panstarrs_i_error", np.full(80, 0.02))
    folder = write(tmp_path / "survey", a=table)
    bands = [band(label) for label in BANDS[:-1]] + [band("panstarrs_i", unit="mag", system="AB")]
    changes = {"compute__workers": 2, "compute__rows_per_part": 20, "input__photometry": bands}
    (tmp_path / "run.toml").write_text(dump_toml(settings_for(folder, tmp_path / "run", **QUICK | changes)))
    (tmp_path / "main.py").write_text(RUN)
    subprocess.run(
        [sys.executable, tmp_path / "main.py", "run", tmp_path / "run.toml"],
        env=os.environ | {"PYTHONPATH": os.pathsep.join(sys.path), "STARKILN_KERNEL_CACHE": str(tmp_path / "cache")},
        check=True,
    )
    told = {path.name: path.read_text() for path in tmp_path.glob("compiled-*")}
    assert told
    assert set(told.values()) == {"0"}
    assert len(list((tmp_path / "cache").rglob("*.nbc"))) > 15
