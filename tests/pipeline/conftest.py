"""Runs of a small survey."""

import pytest

from pipeline_survey import QUICK, blackbodies, write
from small_survey import settings_for


@pytest.fixture
def survey(tmp_path):
    """Settings of a run of blackbodies in two files; keyword arguments change the settings."""
    folder = write(tmp_path / "survey", a=blackbodies(30, 1), b=blackbodies(20, 31))
    return lambda output="run", **changes: settings_for(folder, tmp_path / output, **QUICK | changes)
