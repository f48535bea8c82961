"""Runs with too little time: each gets further than the one before, and nothing is done twice."""

import json
import os
import signal
import time
from collections import Counter

import pytest

from fake_stages import pass_through, stages
from pipeline_survey import write
from real_runs import ended
from small_survey import settings_for, stars
from starkiln.engine import build, plan
from starkiln.engine.run import run_settings
from starkiln.engine.stopping import RunStopped, StopFlag
from starkiln.errors import SettingsError

pytestmark = pytest.mark.slow


@pytest.fixture
def settings(tmp_path):
    """Settings of a run of six files, each a part."""
    tables = {f"t{number}": stars(20, 1 + 20 * number) for number in range(6)}
    folder = write(tmp_path / "survey", **tables)
    return settings_for(folder, tmp_path / "run", compute__rows_per_part=20)


def files_of(generation):
    return json.loads((generation / "run.json").read_text())["files"]


def undisturbed_files(settings, tmp_path):
    undisturbed = settings_for(settings.input.tables, tmp_path / "undisturbed")
    return files_of(run_settings(undisturbed, stages=stages(pass_through)).path)


def parts_done(run_dir):
    """How often each part was done, over all runs."""
    lines = [line for log in (run_dir / "logs").iterdir() for line in log.read_text().splitlines()]
    return Counter(event["number"] for event in map(json.loads, lines) if event["event"] == "part")


def test_nights_add_up(start, tmp_path):
    folder = write(tmp_path / "survey", a=stars(800))
    settings = settings_for(folder, tmp_path / "run", compute__rows_per_part=10)
    codes, told = [], []
    while not codes or codes[-1] == 5:
        code, out, err = ended(start(settings, "take_a_moment", "--time-limit", "20s", "--quiet", cluster=False))
        assert out == err == ""
        codes.append(code)
        told.append(parts_done(settings.run.output).total())
        assert len(codes) < 20
    assert codes == [5] * (len(codes) - 1) + [0]
    assert len(codes) >= 3
    assert told == sorted(set(told)), "each night got further"
    assert parts_done(settings.run.output) == dict.fromkeys(range(80), 1)
    assert files_of(settings.run.output / "current") == undisturbed_files(settings, tmp_path)


def test_a_limit_that_leaves_no_time_at_all_is_an_error_of_the_command_line(start, settings):
    code, out, err = ended(start(settings, "pass_through", "--time-limit", "0.1s", cluster=False))
    assert (code, out) == (2, "")
    assert err == "starkiln: --time-limit is too short to start, or to read a single input file; give more\n"


def stop_instead_of_working(monkeypatch):
    monkeypatch.setattr(build.Making, "work", lambda making: os.kill(os.getpid(), signal.SIGTERM))


def test_a_part_that_takes_longer_than_the_limit_is_told_with_the_remedy(settings, monkeypatch):
    with monkeypatch.context() as patch:
        stop_instead_of_working(patch)
        with pytest.raises(RunStopped):
            run_settings(settings, stages=stages(pass_through))
    monkeypatch.setattr(StopFlag, "has_time_for", lambda stop, seconds: False)
    told = r"a part of 20 rows takes about 1 s.*or lower compute.rows_per_part"
    with StopFlag(1e6) as stop, pytest.raises(SettingsError, match=told):
        run_settings(settings, stages=stages(pass_through), stop=stop)


def test_workers_are_not_started_when_there_is_no_time_left(settings, monkeypatch):
    monkeypatch.setattr(build, "SMALL_RUN_ROWS", -1)
    monkeypatch.setattr(build, "open_cluster", None)
    monkeypatch.setattr(StopFlag, "has_time_for", lambda stop, seconds: seconds != build.START_SECONDS)
    with pytest.raises(RunStopped, match="stopped by the time limit: 0 of 6 parts are done"):
        run_settings(settings, stages=stages(pass_through))


def test_workers_that_are_killed_at_the_end_of_the_time_make_no_noise(start, settings):
    code, out, err = ended(start(settings, "take_long", "--time-limit", "20s", "--quiet"))
    assert (code, out, err) == (5, "", "")


def test_planning_goes_on_with_the_next_file(settings, tmp_path, monkeypatch):
    hashed, hash_file = [], plan.hash_file

    def stop_after_three(source, index, *rest):
        hashed.append(index)
        if len(hashed) == 4:
            os.kill(os.getpid(), signal.SIGTERM)
        return hash_file(source, index, *rest)

    monkeypatch.setattr(plan, "hash_file", stop_after_three)
    with pytest.raises(RunStopped, match=r"stopped by SIGTERM: 3 of 6 input files have been read; run again"):
        run_settings(settings, stages=stages(pass_through))
    assert run_settings(settings, stages=stages(pass_through)).exit_code == 0
    assert hashed == [0, 1, 2, 3, 3, 4, 5]
    assert files_of(tmp_path / "run" / "current") == undisturbed_files(settings, tmp_path)


def test_smaller_parts_are_made_while_none_is_done(settings, tmp_path, monkeypatch):
    with monkeypatch.context() as patch:
        stop_instead_of_working(patch)
        with pytest.raises(RunStopped):
            run_settings(settings, stages=stages(pass_through))
    compute = settings.compute.model_copy(update={"rows_per_part": 5})
    run_settings(settings.model_copy(update={"compute": compute}), stages=stages(pass_through))
    assert parts_done(tmp_path / "run") == dict.fromkeys(range(24), 1)


def test_a_limit_that_is_reached_while_packing_leaves_that_to_the_next_run(settings, tmp_path, monkeypatch):
    close_generation = build.close_generation

    def close_late(*arguments):
        time.sleep(max(0.0, stop.deadline - time.monotonic()))
        return close_generation(*arguments)

    monkeypatch.setattr(build, "close_generation", close_late)
    with pytest.raises(RunStopped, match="6 of 6 parts are done"), StopFlag(30.0, time.monotonic()) as stop:
        run_settings(settings, stages=stages(pass_through), stop=stop)
    assert not (tmp_path / "run" / "current").exists()
    with StopFlag(30.0, time.monotonic()) as stop:
        assert run_settings(settings, stages=stages(pass_through), stop=stop).exit_code == 0
        assert stop.requested() == "the time limit"
    assert parts_done(tmp_path / "run") == dict.fromkeys(range(6), 1)
    assert files_of(tmp_path / "run" / "current") == undisturbed_files(settings, tmp_path)


def test_the_end_is_told_beforehand(settings, tmp_path):
    with StopFlag(1000.0, time.monotonic()) as stop:
        run_settings(settings, stages=stages(pass_through), stop=stop)
    assert json.loads((tmp_path / "run" / "progress.json").read_text())["deadline"] is not None
