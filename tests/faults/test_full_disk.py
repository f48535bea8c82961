"""A disk that is full, in the run directory or in the scratch folder: nothing is published, and the place is named."""

import subprocess

import pytest

from pipeline_survey import write
from real_runs import ended
from small_survey import settings_for, stars

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
    ("place", "size", "workers", "cluster", "named"),
    [
        ("run", "100k", 1, False, "run/scratch/ids/000000.bin: "),
        ("run", "600k", 1, False, "run/generations/000001.partial/parts/catalogue/part-"),
        ("run", "800k", 2, True, "run/"),
        ("scratch", "100k", 1, False, "ids/000000.bin: "),
        ("scratch", "300k", 1, False, "part-"),
        ("scratch", "300k", 2, True, "part-"),
    ],
)
def test_a_full_disk_ends_with_74_and_nothing_published(
    start, tmp_path, small_disk, place, size, workers, cluster, named
):
    disk, settings = small_disk(size), settings_on(tmp_path, place, workers)
    code, out, err = ended(start(settings, "pass_through", cluster=cluster))
    assert (code, out) == (74, "")
    assert err.startswith("starkiln: ")
    assert err.count("\n") == 1
    assert f"{disk}/" in err
    assert named in err
    assert "No space left on device" in err
    left = sorted(path.name for path in settings.run.output.iterdir())
    assert left in (["generations", "lock", "logs"], ["lock", "logs"])
    assert list(settings.run.output.glob("generations/*")) == []
    assert [path for path in disk.iterdir() if path != settings.run.output] == []
    small_disk("50m")
    assert ended(start(settings, "pass_through", cluster=cluster))[0] == 0
