from pathlib import Path

from fake_stages import NoModel
from small_survey import settings_for
from starkiln.engine import provenance


class OneBand(NoModel):
    def digests(self):
        return {"panstarrs_g": "abc"}

    def departures_digest(self) -> str:
        return ""


def key(settings, model=None):
    return provenance.hashes(settings, model or NoModel())["fit_key"]


def test_the_fit_key_changes_with_what_changes_a_fit_only(monkeypatch):
    first = key(settings_for("a"))
    assert key(settings_for("b", "/results/elsewhere", compute__workers=3, output__rows_per_file=10)) == first
    assert key(settings_for("a", run__seed=1)) != first
    assert key(settings_for("a", sampling__walkers=64)) != first
    assert key(settings_for("a"), OneBand()) != first
    monkeypatch.setattr(provenance, "METHOD_VERSION", provenance.METHOD_VERSION + 1)
    assert key(settings_for("a")) != first


def test_a_digest_does_not_hang_on_the_order_of_keys():
    assert provenance.digest({"a": 1, "b": [1, 2]}) == provenance.digest({"b": [1, 2], "a": 1})
    assert provenance.digest({"a": 1, "b": [1, 2]}) != provenance.digest({"a": 1, "b": [2, 1]})


def test_every_library_has_a_version():
    found = provenance.versions()
    assert set(provenance.LIBRARIES) < set(found)
    assert all(version[0].isdigit() for version in found.values())


def test_the_platform_tells_processor_features_and_c_library():
    facts = provenance.platform_facts()
    assert facts["libc"]
    if Path("/proc/cpuinfo").exists():
        assert len(facts["cpu_features"]) == 64
        assert facts["cpu_features"] != provenance.digest([])
