import asyncio
import gc
import logging
import os
import signal
import tempfile
import time
import traceback

import dask
import psutil
import pytest

from real_runs import still_running, workers_of
from starkiln.engine import executors
from starkiln.engine.executors import (
    ClusterTrouble,
    Finished,
    SerialExecutor,
    WorkerDied,
    asyncio_silenced,
    open_cluster,
)

MEMORY = 1_000_000_000


def add(first, second):
    return first + second


def fail(text):
    raise ArithmeticError(text)


def die():
    time.sleep(1)  # one that dies while it starts is a worker less
    os.kill(os.getpid(), signal.SIGKILL)


def thread_settings():
    return {name: os.environ.get(name) for name in ("OMP_NUM_THREADS", "NUMBA_NUM_THREADS")}


def spill_settings():
    return [dask.config.get(f"distributed.worker.memory.{name}") for name in ("target", "spill")]


def next_of(executor, tries=100):
    for _ in range(tries):
        if (finished := executor.next_finished()) is not None:
            return finished
    raise AssertionError("no task has ended")


def test_serial_tasks_run_in_order_but_for_urgent_ones():
    executor = SerialExecutor()
    executor.submit("a", add, 1, 1)
    executor.submit("b", add, 2, 2)
    executor.submit("c", add, 3, 3, urgent=True)
    ended = [executor.next_finished() for _ in range(4)]
    assert ended == [Finished("c", 6, None), Finished("a", 2, None), Finished("b", 4, None), None]


def test_a_serial_error_is_handed_over():
    executor = SerialExecutor()
    executor.submit("a", fail, "no")
    finished = executor.next_finished()
    assert str(finished.error) == "no"


def test_serial_tasks_that_are_abandoned_are_never_run():
    executor = SerialExecutor()
    executor.submit("a", fail, "no")
    executor.refuse("anywhere")
    executor.abandon()
    assert executor.next_finished() is None


@pytest.fixture(scope="module")
def cluster(tmp_path_factory):
    with open_cluster(2, MEMORY, tmp_path_factory.mktemp("scratch")) as executor:
        yield executor


def test_a_cluster_hands_over_results_and_errors(cluster):
    cluster.submit("a", add, 1, 1)
    assert next_of(cluster) == Finished("a", 2, None)
    cluster.submit("b", fail, "no")
    finished = next_of(cluster)
    assert (finished.key, type(finished.error), str(finished.error)) == ("b", ArithmeticError, "no")
    assert "raise ArithmeticError(text)" in "".join(traceback.format_exception(finished.error))


def test_a_task_that_kills_its_workers_ends_and_others_go_on(cluster):
    cluster.submit("killer", die)
    assert isinstance(next_of(cluster).error, WorkerDied)
    cluster.submit("other", add, 2, 3)
    assert next_of(cluster).result == 5


def test_a_task_that_is_lost_is_trouble_with_the_cluster(cluster):
    cluster.submit("lost", time.sleep, 3)
    time.sleep(1)
    cluster._client.cancel(list(cluster._futures.values()), force=True)
    assert isinstance(next_of(cluster).error, ClusterTrouble)


def test_a_timeout_of_the_task_itself_is_its_error(cluster):
    cluster.submit("late", be_late)
    assert str(next_of(cluster).error) == "the task's own"


def be_late():
    raise TimeoutError("the task's own")


def test_a_result_lost_with_its_worker_is_made_again_while_the_run_looks_on(cluster, monkeypatch):
    monkeypatch.setattr(executors, "HAND_OVER_SECONDS", 0.2)
    cluster.submit("first", os.getpid)
    while cluster._done.empty():
        time.sleep(0.05)
    for worker in workers_of(os.getpid()):
        worker.kill()
    assert cluster.next_finished() is None
    assert next_of(cluster).result in {worker.pid for worker in workers_of(os.getpid())}


def close_nannies(executor):
    async def close():
        for nanny in list(executor._cluster.workers.values()):
            await nanny.close()

    executor._cluster.sync(close)


def test_a_worker_that_is_gone_for_good_is_replaced(tmp_path, monkeypatch):
    monkeypatch.setattr(executors, "LOST_WORKER_SECONDS", 0.5)
    with open_cluster(1, MEMORY, tmp_path) as executor:
        close_nannies(executor)
        executor.submit("a", add, 1, 1)
        assert next_of(executor).result == 2


def test_without_any_worker_the_run_does_not_wait_for_ever(tmp_path, monkeypatch):
    monkeypatch.setattr(executors, "NO_WORKERS_SECONDS", 1.0)
    with open_cluster(1, MEMORY, tmp_path) as executor:
        close_nannies(executor)
        executor.submit("a", add, 1, 1)
        error = next_of(executor).error
        assert isinstance(error, ClusterTrouble)
        assert "worker processes are gone" in str(error)


def test_workers_have_one_thread(cluster):
    cluster.submit("threads", thread_settings)
    assert next_of(cluster).result == {"OMP_NUM_THREADS": "1", "NUMBA_NUM_THREADS": "1"}


def test_workers_store_no_objects_on_disk(cluster):
    cluster.submit("spill", spill_settings)
    assert next_of(cluster).result == [False, False]


@pytest.mark.parametrize("variable", [None, "/tmp"])
def test_temporary_files_are_in_the_folder_of_the_run(tmp_path, monkeypatch, variable):
    monkeypatch.delenv("TMPDIR", raising=False)
    if variable:
        monkeypatch.setenv("TMPDIR", variable)
    before = tempfile.gettempdir()
    with open_cluster(1, MEMORY, tmp_path) as executor:
        assert tempfile.gettempdir() == str(tmp_path)
        executor.submit("temporary", tempfile.gettempdir)
        assert next_of(executor).result == str(tmp_path)
    assert tempfile.gettempdir() == before
    assert os.environ.get("TMPDIR") == variable


def test_nothing_listens_beyond_this_machine(cluster):
    me = psutil.Process()
    listening = [
        connection.laddr.ip
        for process in (me, *me.children(recursive=True))
        for connection in process.net_connections("inet")
        if connection.status == psutil.CONN_LISTEN
    ]
    assert listening
    assert set(listening) == {"127.0.0.1"}


def test_errors_that_nobody_fetched_are_not_told_while_there_is_a_cluster(tmp_path, caplog):
    async def leave_an_error():
        async def fail_unseen():
            raise ArithmeticError("unseen")

        asyncio.ensure_future(fail_unseen())  # noqa: RUF006
        await asyncio.sleep(0.1)

    with open_cluster(1, MEMORY, tmp_path) as executor:
        executor._cluster.sync(leave_an_error)
    gc.collect()
    assert "unseen" not in caplog.text


def test_closing_in_the_middle_of_a_task_leaves_no_worker(tmp_path):
    before = set(psutil.Process().children(recursive=True))
    with pytest.raises(KeyError):
        leave_in_the_middle_of_a_task(tmp_path)
    left = set(psutil.Process().children(recursive=True)) - before
    assert [process for process in left if process.status() != psutil.STATUS_ZOMBIE] == []


def test_tasks_that_are_abandoned_end_with_their_workers(tmp_path):
    others = workers_of(os.getpid())
    with open_cluster(2, MEMORY, tmp_path) as executor:
        executor.submit("a", time.sleep, 60)
        executor.submit("b", time.sleep, 60)
        time.sleep(1)
        workers = [worker for worker in workers_of(os.getpid()) if worker not in others]
        assert len(workers) == 2
        executor.abandon()
        assert still_running(workers) == []


def leave_in_the_middle_of_a_task(scratch):
    with open_cluster(1, MEMORY, scratch) as executor:
        executor.submit("long", time.sleep, 60)
        time.sleep(1)
        raise KeyError


def test_workers_that_do_not_start_are_trouble(tmp_path, monkeypatch):
    monkeypatch.setattr("distributed.LocalCluster", refuse)
    with (
        pytest.raises(ClusterTrouble, match=r"cannot start 3 worker processes \(no\)"),
        open_cluster(3, MEMORY, tmp_path),
    ):
        pass


def refuse(**options):
    raise RuntimeError("no")


def test_dask_is_silent_until_a_cluster_is_closed_and_speaks_again():
    told = logging.getLogger("distributed.nanny")
    before = told.isEnabledFor(logging.WARNING)
    with asyncio_silenced():
        assert not told.isEnabledFor(logging.ERROR)
    assert told.isEnabledFor(logging.WARNING) == before
