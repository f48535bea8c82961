"""Runs on a dask cluster of other processes, some of which come, die, or are of no use."""

import json

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from dask_cluster import DaskCluster, another_version, kill_tree
from fake_stages import FAILING_ID, pass_through, stages
from pipeline_survey import write
from real_runs import ended, wait_until
from small_survey import settings_for, stars
from starkiln.engine.run import run_settings

pytestmark = pytest.mark.slow


@pytest.fixture
def settings(tmp_path):
    """Settings of a run of 30 parts."""
    folder = write(tmp_path / "survey", a=stars(300))
    return settings_for(folder, tmp_path / "run", compute__rows_per_part=10)


@pytest.fixture
def cluster(tmp_path):
    with DaskCluster(tmp_path / "dask") as cluster:
        yield cluster


def rows_of(run_dir):
    paths = sorted((run_dir / "catalogue").rglob("*.parquet"))
    return pa.concat_tables([pq.ParquetFile(path).read() for path in paths])


def undisturbed(settings, tmp_path):
    calm = settings_for(settings.input.tables, tmp_path / "calm")
    assert run_settings(calm, stages=stages(pass_through)).exit_code == 0
    return rows_of(calm.run.output)


def log_of(run_dir):
    (path,) = (run_dir / "logs").iterdir()
    return [json.loads(line) for line in path.read_text().splitlines()]


def refusals(run_dir):
    return [line["reason"] for line in log_of(run_dir) if line["event"] == "refused"]


def parts_done(run_dir):
    return len(list(run_dir.glob("generations/*.partial/parts/catalogue/part-*")))


def test_workers_die_and_come_and_another_version_is_refused(start, tmp_path, settings, cluster):
    workers = [cluster.worker() for _ in range(3)]
    cluster.worker(package=another_version(tmp_path / "other"))
    process = start(settings, "take_a_moment", "--scheduler-file", str(cluster.scheduler_file))
    run_dir = settings.run.output
    wait_until(process, lambda: parts_done(run_dir) >= 3)
    kill_tree(workers[0])
    late = cluster.worker()
    wait_until(process, lambda: parts_done(run_dir) >= 8)
    kill_tree(workers[1])
    code, out, err = ended(process)
    assert (code, err) == (0, ""), (out, err)
    assert rows_of(run_dir).equals(undisturbed(settings, tmp_path))
    (refusal,) = refusals(run_dir)
    assert "another one" in refusal
    assert str(tmp_path / "other") in refusal
    assert [worker.poll() for worker in (*cluster.processes[:1], workers[2], late)] == [None] * 3


def test_a_row_at_fault_is_found_on_a_cluster_too(start, tmp_path, settings, cluster):
    cluster.worker()
    cluster.worker()
    code, out, err = ended(start(settings, "exit_at_failing_id", "--scheduler", cluster.address))
    assert code == 4, (out, err)
    expected = undisturbed(settings, tmp_path)
    others = pa.array([star != FAILING_ID for star in expected["star_id"].to_pylist()])
    assert rows_of(settings.run.output).equals(expected.filter(others))


@pytest.mark.parametrize(
    ("options", "text"), [(["--no-nanny"], "has no nanny"), (["--nthreads", "2"], "has 2 threads")]
)
def test_workers_that_cannot_be_used_are_told_at_once(start, settings, cluster, options, text):
    cluster.worker(*options)
    wait_for_worker(cluster)
    code, out, err = ended(start(settings, "pass_through", "--scheduler-file", str(cluster.scheduler_file)))
    assert (code, out) == (2, "")
    assert text in err
    assert f"dask worker {cluster.address} --nthreads 1 --nanny" in err


def wait_for_worker(cluster):
    from distributed import Client

    with Client(cluster.address, set_as_default=False) as client:
        client.wait_for_workers(1, timeout=60)


def test_a_scheduler_that_dies_is_trouble_and_the_run_goes_on_with_another(start, tmp_path, settings, cluster):
    cluster.worker()
    process = start(settings, "take_a_moment", "--scheduler-file", str(cluster.scheduler_file))
    wait_until(process, lambda: parts_done(settings.run.output) >= 2)
    kill_tree(cluster.scheduler)
    code, out, err = ended(process)
    assert (code, out) == (74, "")
    assert err.startswith("starkiln: ")
    assert "run again when" in err
    assert not (settings.run.output / "current").exists()
    with DaskCluster(tmp_path / "other") as other:
        other.worker()
        assert ended(start(settings, "pass_through", "--scheduler", other.address))[0] == 0
    assert rows_of(settings.run.output).equals(undisturbed(settings, tmp_path))


def test_a_stopped_run_leaves_the_workers_as_they_are(start, settings, cluster):
    worker = cluster.worker()
    process = start(settings, "take_a_moment", "--scheduler-file", str(cluster.scheduler_file))
    wait_until(process, lambda: parts_done(settings.run.output) >= 2)
    process.terminate()
    assert ended(process)[0] == 5
    assert worker.poll() is None
    assert ended(start(settings, "pass_through", "--scheduler-file", str(cluster.scheduler_file)))[0] == 0


def test_without_a_scheduler_the_run_ends_with_74(start, settings):
    code, out, err = ended(start(settings, "pass_through", "--scheduler", "tcp://127.0.0.1:9"))
    assert (code, out) == (74, "")
    assert "no scheduler answers at tcp://127.0.0.1:9" in err
