"""Runs in processes of their own."""

import os
import signal
from contextlib import suppress

import pytest

from real_runs import start_run


@pytest.fixture
def start(tmp_path):
    """A function that starts a run of a fake stage (`real_runs.start_run`); nothing of it outlives the test."""
    started = []

    def start(settings, stage, *arguments, **options):
        started.append(start_run(tmp_path, settings, stage, *arguments, **options))
        return started[-1]

    yield start
    for process in started:
        with suppress(ProcessLookupError):
            os.killpg(process.pid, signal.SIGKILL)
        process.communicate()
