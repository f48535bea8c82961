import pytest

from small_survey import settings_for
from starkiln.engine import resources


@pytest.mark.parametrize(
    ("cpus", "memory", "per_worker", "expected"),
    [(8, 64e9, "2GB", 8), (8, 5e9, "2GB", 2), (8, 1e9, "2GB", 1), (1, 64e9, "2GB", 1), (8, 64e9, "16GB", 4)],
)
def test_workers_go_by_processors_and_memory(monkeypatch, cpus, memory, per_worker, expected):
    monkeypatch.setattr(resources, "cpu_count", lambda: cpus)
    monkeypatch.setattr(resources, "memory_limit", lambda: int(memory))
    assert resources.worker_count(settings_for("a", compute__memory_per_worker=per_worker)) == expected


def test_a_number_of_workers_is_taken_as_it_is():
    assert resources.worker_count(settings_for("a", compute__workers=37)) == 37


def test_peak_memory_is_in_bytes():
    assert 20e6 < resources.peak_memory() < 1e12
