"""A disk that is full, in the run directory or in the scratch folder: nothing is published, and the place is named."""

import json
import subprocess

import pytest

from fake_stages import pass_through, stages
from pipeline_survey import write
from real_runs import ended
from small_survey import settings_for, stars
from starkiln.engine.run import run_settings

pytestmark = pytest.mark.slow

ROWS = 10_000


@pytest.fixture
def small_disk(tmp_path):
    """A function that makes the folder tmp_path / "small" a file system of a size."""
    folder = tmp_path / "small"
    folder.mkdir()
    mounted = []

    def mount(size):
        options = f"remount,size={size}" if mounted else f"size={size}"
        done = subprocess.run(["mount", "-t", "tmpfs", "-o", options, "tmpfs", folder], capture_output=True)
        if done.returncode:
            pytest.skip("needs the right to mount a file system")
        mounted.append(folder)
        return folder

    yield mount
    if mounted:
        subprocess.run(["umount", folder], check=True)


def settings_on(tmp_path, place, workers):
    """Settings of a run whose run directory, or only its scratch folder, is on the small disk."""
    folder = write(tmp_path / "survey", a=stars(ROWS))
    changes = {"compute__workers": workers, "compute__rows_per_part": 2500}
    if place == "scratch":
        return settings_for(folder, tmp_path / "run", compute__scratch=str(tmp_path / "small"), **changes)
    return settings_for(folder, tmp_path / "small" / "run", **changes)


@pytest.mark.parametrize(
    ("place", "size", "workers", "cluster"),
    [
        ("run", "40k", 1, False),
        ("run", "300k", 1, False),
        ("run", "600k", 1, False),
        ("run", "900k", 1, False),
        ("run", "1100k", 2, True),
        ("scratch", "100k", 1, False),
        ("scratch", "500k", 2, True),
    ],
)
def test_a_full_disk_ends_with_74_and_the_next_run_goes_on(start, tmp_path, small_disk, place, size, workers, cluster):
    disk, settings = small_disk(size), settings_on(tmp_path, place, workers)
    code, out, err = ended(start(settings, "pass_through", cluster=cluster))
    assert (code, out) == (74, "")
    assert err.startswith("starkiln: ")
    assert err.count("\n") == 1
    assert f"{disk}/" in err
    assert "No space left on device" in err or "database or disk is full" in err
    run_dir = settings.run.output
    assert not (run_dir / "current").exists()
    assert not (run_dir / "scratch").exists()
    assert not list(run_dir.glob("generations/0*[0-9]"))
    assert [path for path in disk.iterdir() if path != run_dir] == []
    small_disk("50m")
    assert ended(start(settings, "pass_through", cluster=cluster))[0] == 0
    undisturbed = settings_for(settings.input.tables, tmp_path / "undisturbed")
    expected = run_settings(undisturbed, stages=stages(pass_through)).path
    assert files_of(run_dir / "current") == files_of(expected)


def files_of(generation):
    return json.loads((generation / "run.json").read_text())["files"]
