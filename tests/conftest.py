"""Fixtures that more than one test file uses."""

import os
from pathlib import Path

import hypothesis
import pytest

hypothesis.settings.register_profile("untimed", deadline=None)  # a busy machine is no failure
hypothesis.settings.load_profile("untimed")

REPOSITORY = Path(__file__).parents[1]


@pytest.fixture(scope="session")
def repository() -> Path:
    """The root of the source tree."""
    return REPOSITORY


@pytest.fixture(scope="session")
def reference_dir() -> Path:
    """The folder of published tables, named by STARKILN_REFERENCE or beside the source tree."""
    folder = Path(os.environ.get("STARKILN_REFERENCE", REPOSITORY.parent / "shared" / "reference"))
    if not folder.is_dir():
        pytest.skip(f"no published tables at {folder}: set STARKILN_REFERENCE")
    return folder
