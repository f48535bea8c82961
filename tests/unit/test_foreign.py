from concurrent.futures import CancelledError
from pathlib import Path

import pytest
from distributed import KilledWorker

from starkiln.engine import foreign
from starkiln.engine.executors import ClusterTrouble, Finished, WorkerDied
from starkiln.engine.foreign import ForeignExecutor, open_foreign
from starkiln.engine.identity import identify
from starkiln.engine.records import Identity
from starkiln.errors import EnvironmentTrouble, SettingsError

IDENTITY = Identity("m", "l", "n", Path("/run/nonce"))


class Future:
    def __init__(self, function, args, options):
        self.function, self.args, self.options = function, args, options
        self.status, self.value, self.callbacks = "pending", None, []

    def end(self, value, status="finished"):
        self.value, self.status = value, status
        for callback in self.callbacks:
            callback(self)

    def add_done_callback(self, callback):
        self.callbacks.append(callback)

    def done(self):
        return self.status != "pending"

    def result(self, timeout=None):
        if isinstance(self.value, Exception):
            raise self.value
        return self.value

    def release(self):
        pass


class Client:
    """A scheduler with workers that do nothing until told."""

    def __init__(self):
        self.workers, self.sent, self.cancelled, self.error = {}, [], [], None

    def add(self, *addresses, folder="a", nanny="tcp://nanny", nthreads=1):
        for address in addresses:
            self.workers[address] = {"local_directory": folder, "nanny": nanny, "nthreads": nthreads}

    @property
    def scheduler(self):
        return self

    def sync(self, function, **options):
        return function(**options)

    def identity(self, n_workers):
        assert n_workers == -1
        if self.error:
            raise self.error
        return {"workers": self.workers}

    def submit(self, function, *args, **options):
        self.sent.append(Future(function, args, options))
        return self.sent[-1]

    def cancel(self, futures):
        self.cancelled += futures

    def tasks(self):
        return [future for future in self.sent if future.function is not identify]

    def agree(self, text=""):
        for future in self.sent:
            if future.function is identify and not future.done():
                future.end(text)


class Log:
    def __init__(self):
        self.lines = []

    def write(self, event, **facts):
        self.lines.append((event, *facts.values()))


@pytest.fixture
def client(monkeypatch):
    monkeypatch.setattr(foreign, "LOOK_SECONDS", 0.0)
    monkeypatch.setattr(foreign, "POLL_SECONDS", 0.01)
    return Client()


@pytest.fixture
def executor(client):
    return ForeignExecutor(client, "tcp://scheduler", IDENTITY, Log())


def look(executor, client, text=""):
    """Let the executor see new workers, and hear what they say."""
    assert executor.next_finished() is None
    client.agree(text)
    assert executor.next_finished() is None


def test_a_task_waits_for_a_worker_that_agrees(client, executor):
    executor.submit("a", max, 1, 2, urgent=True)
    client.add("tcp://1")
    executor.next_finished()
    assert not client.tasks()
    (vetting,) = client.sent
    assert vetting.args == (IDENTITY,)
    assert vetting.options["workers"] == ["tcp://1"]
    vetting.end("")
    executor.next_finished()
    (task,) = client.tasks()
    assert (task.function, task.args, task.options["priority"]) == (max, (1, 2), 1)
    assert (task.options["workers"], task.options["allow_other_workers"]) == (["tcp://1"], False)
    task.end(2)
    assert executor.next_finished() == Finished("a", 2, None)


def test_as_many_workers_count_as_have_agreed(client, executor):
    assert executor.workers == 1
    client.add("tcp://1", "tcp://2", "tcp://3")
    look(executor, client)
    assert executor.workers == 3
    client.add("tcp://4")
    look(executor, client)
    assert executor.workers == 4
    del client.workers["tcp://1"]
    executor.next_finished()
    assert executor.workers == 3


@pytest.mark.parametrize("facts", [{"nanny": None}, {"nthreads": 2}])
def test_a_late_comer_that_is_unfit_is_refused_unasked(client, executor, facts):
    client.add("tcp://1", **facts)
    look(executor, client)
    assert executor._log.lines[0][:2] == ("refused", "tcp://1")
    assert not client.sent


@pytest.mark.parametrize(
    ("facts", "text"),
    [
        ({"nanny": None}, "worker tcp://1 .*no nanny.* dask worker tcp://scheduler --nthreads 1 --nanny"),
        ({"nthreads": 2}, "worker tcp://1 .*2 threads"),
    ],
)
def test_a_cluster_that_is_unfit_from_the_start_is_a_matter_of_settings(client, executor, facts, text):
    client.add("tcp://1", **facts)
    with pytest.raises(SettingsError, match=text):
        executor.check_workers()


def test_a_worker_that_disagrees_gets_nothing(client, executor):
    client.add("tcp://1")
    look(executor, client, "another version")
    executor.submit("a", max, 1, 2)
    executor.next_finished()
    assert not client.tasks()
    assert executor._log.lines == [("refused", "tcp://1", "another version")]


def test_a_worker_that_cannot_tell_what_it_is_gets_nothing(client, executor):
    client.add("tcp://1")
    executor.next_finished()
    client.sent[0].end(ModuleNotFoundError("No module named 'starkiln'"), "error")
    executor.next_finished()
    assert executor._log.lines == [
        ("refused", "tcp://1", "it cannot say what it is: ModuleNotFoundError: No module named 'starkiln'")
    ]


def test_a_worker_that_is_refused_later_loses_its_tasks(client, executor):
    client.add("tcp://1")
    look(executor, client)
    executor.submit("a", max, 1, 2)
    executor.refuse("tcp://1")
    assert client.cancelled == client.tasks()
    client.add("tcp://2")
    look(executor, client)
    assert client.tasks()[1].options["workers"] == ["tcp://2"]
    assert executor.workers == 1


def test_a_task_whose_workers_are_all_gone_goes_to_others(client, executor):
    client.add("tcp://1", "tcp://2")
    look(executor, client)
    executor.submit("a", max, 1, 2)
    del client.workers["tcp://1"]
    look(executor, client)
    assert not client.cancelled
    del client.workers["tcp://2"]
    client.add("tcp://3")
    look(executor, client)
    first, second = client.tasks()
    assert client.cancelled == [first]
    assert second.options["workers"] == ["tcp://3"]
    assert first.options["key"] != second.options["key"]
    first.end(CancelledError(), "cancelled")
    assert executor.next_finished() is None
    second.end(2)
    assert executor.next_finished() == Finished("a", 2, None)


def test_a_worker_that_starts_anew_under_its_old_address_is_asked_again(client, executor):
    client.add("tcp://1")
    look(executor, client)
    client.add("tcp://1", folder="b")
    executor.next_finished()
    assert executor._agreed == {}
    client.agree()
    executor.next_finished()
    assert executor._agreed == {"tcp://1": "b"}


def test_a_worker_that_is_back_is_asked_again(client, executor):
    client.add("tcp://1")
    look(executor, client)
    away = client.workers.copy()
    client.workers.clear()
    look(executor, client)
    assert executor._agreed == {}
    client.workers = away
    look(executor, client)
    assert executor._agreed == {"tcp://1": "a"}


def test_a_worker_that_was_refused_is_not_asked_again(client, executor):
    client.add("tcp://1")
    look(executor, client, "another version")
    look(executor, client)
    assert executor._agreed == {}
    assert len(client.sent) == 1


def test_a_result_that_is_lost_is_waited_for(client, executor):
    client.add("tcp://1")
    look(executor, client)
    executor.submit("a", max, 1, 2)
    (task,) = client.tasks()
    task.end(TimeoutError())
    assert executor.next_finished() is None
    task.end(2)
    assert executor.next_finished() == Finished("a", 2, None)


@pytest.mark.parametrize(
    ("error", "kind"),
    [(KilledWorker("a", None, 3), WorkerDied), (CancelledError(), ClusterTrouble), (KeyError("x"), KeyError)],
)
def test_errors_come_in_terms_of_this_program(client, executor, error, kind):
    client.add("tcp://1")
    look(executor, client)
    executor.submit("a", max, 1, 2)
    client.tasks()[0].end(error, "error")
    assert type(executor.next_finished().error) is kind


def test_a_scheduler_that_does_not_answer_is_trouble(client, executor):
    client.error = OSError("refused")
    with pytest.raises(ClusterTrouble, match=r"scheduler tcp://scheduler cannot be reached any more \(refused\)"):
        executor.next_finished()


def test_without_a_worker_to_use_the_run_ends_and_tells_why(client, executor, monkeypatch):
    monkeypatch.setattr(foreign, "NO_WORKERS_SECONDS", 0.0)
    client.add("tcp://1")
    executor._had_worker += 1000
    look(executor, client, "another version")
    executor._had_worker -= 2000
    with pytest.raises(ClusterTrouble, match=r"no worker of tcp://scheduler .*\(tcp://1: another version\)"):
        executor.next_finished()


def test_abandoned_tasks_are_cancelled(client, executor):
    client.add("tcp://1")
    look(executor, client)
    executor.submit("a", max, 1, 2)
    executor.abandon()
    assert client.cancelled == client.tasks()


def opened(scheduler=None, scheduler_file=None):
    with open_foreign(scheduler, scheduler_file, IDENTITY, Log()):
        raise AssertionError


def test_no_scheduler_is_trouble(monkeypatch):
    monkeypatch.setattr(foreign, "CONNECT_SECONDS", 0.3)
    with pytest.raises(ClusterTrouble, match=r"no scheduler answers at tcp://127\.0\.0\.1:9"):
        opened("tcp://127.0.0.1:9")


def test_an_address_that_is_none_is_a_matter_of_settings():
    with pytest.raises(SettingsError, match="scheduler nonsense://x"):
        opened("nonsense://x")


def test_a_scheduler_file_that_is_missing_is_trouble_and_a_strange_one_a_matter_of_settings(tmp_path):
    with pytest.raises(EnvironmentTrouble, match=r"scheduler\.json: No such file"):
        opened(scheduler_file=tmp_path / "scheduler.json")
    (tmp_path / "scheduler.json").write_text("[]")
    with pytest.raises(SettingsError, match="not a file that a dask scheduler has written"):
        opened(scheduler_file=tmp_path / "scheduler.json")
