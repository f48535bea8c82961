"""Runs as cron starts them: no terminal, no home, little room, strict permissions, and often one too many."""

import json
import os
import re
import shutil
import signal
import subprocess
import sys
import tempfile
from pathlib import Path

import psutil
import pyarrow.parquet as pq
import pytest

from pipeline_survey import QUICK, blackbodies, write
from real_runs import MAIN, ended, wait_until
from small_survey import settings_for, stars
from starkiln.settings import dump_toml, load_settings

pytestmark = pytest.mark.slow

GROUP_ID = 12345
"""Of people who may read, and nothing else."""

ENVIRONMENT = {"PATH": "/usr/bin:/bin", "SHELL": "/bin/sh", "PYTHONPATH": os.pathsep.join(sys.path)}
"""What cron gives a command, but for HOME; and where the tests' own modules are."""

RUN = "import sys; from starkiln.cli import main; main()"


@pytest.fixture
def settings(tmp_path):
    """Settings of a run of ten parts with two workers."""
    folder = write(tmp_path / "survey", a=stars(100))
    return settings_for(folder, tmp_path / "run", compute__workers=2, compute__rows_per_part=10)


def fitting(process, run_dir):
    """Wait until parts are being fitted."""
    wait_until(process, lambda: list(run_dir.glob("generations/*.partial/parts/catalogue/part-*")))


# ---- one run at a time

LOADED = """
import sys
from starkiln.cli import main
try:
    main()
finally:
    print([name for name in ("dask", "distributed", "numba", "pyarrow", "scipy") if name in sys.modules])
"""


def test_a_second_run_ends_at_once_with_75_and_names_the_first(start, tmp_path, settings):
    first = start(settings, "take_a_moment")
    fitting(first, tmp_path / "run")
    second = subprocess.run(
        [sys.executable, "-c", LOADED, "run", tmp_path / "run.toml", "--quiet"], capture_output=True, text=True
    )
    assert second.returncode == 75
    # The heavy libraries take seconds to load; the lock is asked for before.
    assert second.stdout == "[]\n"
    assert re.fullmatch(
        rf"starkiln: \S+/run is in use by another run \(process {first.pid} on \S+, since 20\S+\); wait for it\n",
        second.stderr,
    )
    told = status_of(tmp_path / "run")
    assert (told["state"], told["pid"], told["stale"], told["exit_code"]) == ("fitting", first.pid, False, None)
    assert told["parts"]["total"] == 10
    assert ended(first)[0] == 0
    told = status_of(tmp_path / "run")
    assert (told["state"], told["exit_code"], told["rows"]["done"]) == ("ended", 0, 100)
    assert told["catalogue"]["counts"]["catalogue"] == 100


def status_of(run_dir):
    done = subprocess.run([sys.executable, "-c", RUN, "status", run_dir, "--json"], capture_output=True, check=True)
    return json.loads(done.stdout)


def test_a_run_that_was_killed_is_told_as_stale(start, tmp_path, settings):
    process = start(settings, "take_a_moment")
    fitting(process, tmp_path / "run")
    os.killpg(process.pid, signal.SIGKILL)
    process.wait()
    path = tmp_path / "run" / "progress.json"
    facts = json.loads(path.read_text())
    path.write_text(json.dumps(facts | {"updated": "2026-01-01T00:00:00+00:00"}))
    told = subprocess.run([sys.executable, "-c", RUN, "status", tmp_path / "run"], capture_output=True, text=True)
    assert told.returncode == 0
    assert "no news since 2026-01-01 00:00:00 UTC: if the run is dead, run again to go on" in told.stdout
    assert ended(start(settings, "pass_through"))[0] == 0


# ---- quiet


@pytest.mark.parametrize("cluster", [True, False])
def test_a_run_that_is_well_says_nothing_if_asked_to(start, tmp_path, settings, cluster):
    assert ended(start(settings, "pass_through", "--quiet", cluster=cluster)) == (0, "", "")
    assert ended(start(settings, "pass_through", "--quiet", cluster=cluster)) == (0, "", "")
    logs = sorted((tmp_path / "run" / "logs").iterdir())
    assert len(logs) == 2
    for log in logs:
        events = [json.loads(line) for line in log.read_text().splitlines()]
        assert (events[0]["event"], events[-1]["event"], events[-1]["exit_code"]) == ("start", "end", 0)


def test_a_run_that_is_stopped_says_nothing_either_and_the_log_does(start, tmp_path, settings):
    process = start(settings, "take_a_moment", "--quiet")
    fitting(process, tmp_path / "run")
    process.send_signal(signal.SIGTERM)
    assert ended(process) == (5, "", "")
    (log,) = (tmp_path / "run" / "logs").iterdir()
    assert json.loads(log.read_text().splitlines()[-1])["exit_code"] == 5


def test_what_needs_somebody_is_told_in_one_line(start, tmp_path, settings):
    (tmp_path / "survey" / "a.parquet").unlink()
    code, out, err = ended(start(settings, "pass_through", "--quiet"))
    assert (code, out) == (3, "")
    assert re.fullmatch(r"starkiln: input\.tables: no Parquet file .*\n", err)


# ---- the lines of configs/nightly.toml


@pytest.fixture
def crontab_line(repository):
    text = (repository / "configs" / "nightly.toml").read_text()
    (line,) = re.findall(r"^# +30 19 \* \* \*  (.*)$", text, re.MULTILINE)
    assert "%" not in line
    return line


@pytest.mark.parametrize("code", [0, 1, 2, 3, 4, 5, 74, 75])
def test_the_crontab_line_keeps_real_failures(tmp_path, crontab_line, code):
    stub = tmp_path / "starkiln"
    stub.write_text(f'#!/bin/sh\necho "$@"\necho trouble >&2\nexit {code}\n')
    stub.chmod(0o755)
    done = subprocess.run(
        ["/bin/sh", "-c", crontab_line], env={"PATH": f"{tmp_path}:/usr/bin:/bin"}, capture_output=True, text=True
    )
    if code in (0, 5, 75):
        assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
    else:
        told = "run /survey/nightly.toml --quiet --time-limit 10h\ntrouble\n"
        assert (done.returncode, done.stdout, done.stderr) == (code, told, "")


def test_the_nightly_settings_load_and_their_tables_fit(repository):
    done = subprocess.run(
        [sys.executable, "-c", RUN, "check", repository / "configs" / "nightly.toml"], capture_output=True, text=True
    )
    assert done.returncode == 0, done.stderr
    assert "2mass_ks" in done.stdout
    settings = load_settings(repository / "configs" / "nightly.toml")
    assert settings.input.on_bad_file == "skip"


# ---- little room and few rights

SMALL_ROOM = """
set -e
keep=$1; tree=$2; work=$3; shift 3
for place in "$tree" "$work"; do mkdir -p "$keep$place"; mount --bind "$place" "$keep$place"; done
mount -t tmpfs -o size=1m,mode=1777 tmpfs /tmp
for place in "$tree" "$work"; do mkdir -p "$place"; mount --bind "$keep$place" "$place"; done
mount -o remount,bind,ro "$tree"
if [ -d ~/.cache ]; then mount -t tmpfs -o ro tmpfs ~/.cache; fi
unset HOME
umask 027
cd /
exec "$@"
"""
"""Run a command where /tmp has 1 MB, the source tree is read-only, and no cache can be kept at home."""


@pytest.fixture
def small_room(repository):
    """A function that makes a command one that runs in little room."""
    if subprocess.run(["unshare", "-m", "true"], capture_output=True).returncode:
        pytest.skip("needs the right to mount file systems")
    with tempfile.TemporaryDirectory(dir="/var/tmp") as keep:
        yield lambda work, *command: ["unshare", "-m", "sh", "-c", SMALL_ROOM, "sh", keep, repository, work, *command]


@pytest.fixture
def shared_folder():
    """A folder of a group, whose files are the group's, outside of pytest's own, which are closed to others."""
    if os.geteuid() != 0:
        pytest.skip("needs the right to change owners")
    folder = Path(tempfile.mkdtemp(prefix="starkiln-test-"))
    os.chown(folder, 0, GROUP_ID)
    folder.chmod(0o2750)
    yield folder
    shutil.rmtree(folder)


def without_terminal(command):
    """Run a command as cron does, and return code, output and errors."""
    done = subprocess.run(
        command,
        env=ENVIRONMENT | {"HOME": os.path.expanduser("~")},
        stdin=subprocess.DEVNULL,
        capture_output=True,
        text=True,
        start_new_session=True,
        cwd="/",
        timeout=1400,
    )
    return done.returncode, done.stdout, done.stderr


def fake_run(folder, settings, stage):
    (folder / "run.toml").write_text(dump_toml(settings))
    (folder / "main.py").write_text(MAIN)
    return sys.executable, folder / "main.py", "-1", stage, "run", folder / "run.toml", "--quiet"


def test_workers_need_no_home_no_room_in_tmp_and_no_right_to_write_but_in_the_run_directory(small_room, shared_folder):
    tables = write(shared_folder / "survey", a=stars(100))
    settings = settings_for(tables, shared_folder / "run", compute__workers=2, compute__rows_per_part=10)
    command = fake_run(shared_folder, settings, "pass_through")
    assert without_terminal(small_room(shared_folder, *command)) == (0, "", "")
    run_dir = shared_folder / "run"
    check_permissions(run_dir)
    assert pq.read_table(run_dir / "catalogue").num_rows == 100


def check_permissions(run_dir):
    """Everything is the group's to read, and nobody else's."""
    places = [path for path in (run_dir, *run_dir.rglob("*")) if not path.is_symlink()]
    assert {path.name for path in places} >= {"ledger.sqlite", "progress.json", "lock", "logs", "run.json"}
    for path in places:
        wanted = 0o2750 if path.is_dir() else 0o640
        assert (path.stat().st_gid, path.stat().st_mode & 0o7777) == (GROUP_ID, wanted), path


@pytest.mark.timeout(1500)  # all kernels are compiled twice
def test_stars_are_fitted_where_kernels_cannot_be_kept(small_room, shared_folder):
    tables = write(shared_folder / "survey", a=blackbodies(6))
    changes = {"compute__workers": 1, "compute__rows_per_part": 3}
    (shared_folder / "run.toml").write_text(dump_toml(settings_for(tables, shared_folder / "run", **changes, **QUICK)))
    code = "from starkiln.engine import build; build.SMALL_RUN_ROWS = -1; " + RUN
    command = (sys.executable, "-c", code, "run", shared_folder / "run.toml", "--quiet")
    assert without_terminal(small_room(shared_folder, *command)) == (0, "", "")
    check_permissions(shared_folder / "run")
    assert pq.read_table(shared_folder / "run" / "catalogue").num_rows == 6


READ = """
import contextlib, io, os, sys
from starkiln.cli import main
group = int(sys.argv.pop(1))
with contextlib.redirect_stdout(io.StringIO()), contextlib.suppress(SystemExit):
    main()  # loads what it needs, which others may not be allowed to read
os.setgroups([])
os.setgid(group)
os.setuid(65534)
main()
"""


def test_who_may_only_read_may_ask_for_the_status_while_it_runs(shared_folder):
    tables = write(shared_folder / "survey", a=stars(100))
    settings = settings_for(tables, shared_folder / "run", compute__workers=2, compute__rows_per_part=10)
    process = subprocess.Popen(
        ["sh", "-c", 'umask 027; exec "$@"', "sh", *fake_run(shared_folder, settings, "take_a_moment")],
        env=os.environ | ENVIRONMENT,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    try:
        fitting(process, settings.run.output)
        before = contents(settings.run.output)
        command = [sys.executable, "-c", READ, str(GROUP_ID), "status", settings.run.output, "--json"]
        done = subprocess.run(command, capture_output=True, text=True)
        assert (done.returncode, done.stderr) == (0, "")
        assert json.loads(done.stdout)["state"] == "fitting"
        command[3] = "54321"
        done = subprocess.run(command, capture_output=True, text=True)
        assert (done.returncode, done.stdout) == (74, "")
        assert "progress.json: Permission denied" in done.stderr
        assert before <= contents(settings.run.output)
        assert ended(process) == (0, "", "")
    finally:
        if process.poll() is None:
            os.killpg(process.pid, signal.SIGKILL)
            process.communicate()


def contents(run_dir):
    return {path.name for path in run_dir.iterdir()} - {".progress.json.tmp"}


def test_nothing_is_left_running(start, tmp_path, settings):
    process = start(settings, "take_a_moment", "--quiet")
    fitting(process, tmp_path / "run")
    family = psutil.Process(process.pid).children(recursive=True)
    assert len(family) >= 2
    process.send_signal(signal.SIGTERM)
    assert ended(process)[0] == 5
    _, alive = psutil.wait_procs(family, timeout=30)  # the keeper of shared resources ends after the run itself
    assert [child for child in alive if child.status() != psutil.STATUS_ZOMBIE] == []
