"""What every task of a run needs, and how worker processes come by it: as data and names, never as stored objects."""

from __future__ import annotations

import base64
import json
import tomllib
import uuid
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from importlib import import_module
from pathlib import Path
from typing import Any

import pyarrow as pa
from distributed import get_worker

from starkiln.engine.disk import disk_trouble
from starkiln.engine.identity import identify
from starkiln.engine.provenance import hashes
from starkiln.engine.records import EarlierFile, Identity, WorkerDisagrees
from starkiln.errors import EnvironmentTrouble
from starkiln.settings import Settings, build_settings, dump_toml
from starkiln.tables.source import Source, SourceFile


def _nothing(settings: Settings, model: Any) -> None:
    pass


@dataclass(frozen=True)
class Stages:
    """The functions that know the physics; worker processes import them by their names.

    Attributes
    ----------
    build_model
        From settings to whatever `process_part` needs, once in each process.
    process_part
        From a table of input rows, the settings and the model to the output tables.
    warm_up
        Called once with the settings and the model before workers start, to leave them less to do.
    prepare
        Called before it where the run began, and not by workers.
    """

    build_model: Callable[[Settings], Any]
    process_part: Callable[[pa.Table, Settings, Any], Any]
    warm_up: Callable[[Settings, Any], None] = _nothing
    prepare: Callable[[Settings, Any], None] = _nothing


def fitting_stages() -> Stages:
    """Return the stages that fit stars."""
    from starkiln.stages.model import build_model
    from starkiln.stages.process import process_part
    from starkiln.stages.warm_up import compile_in_two, warm_up

    return Stages(build_model, process_part, warm_up, compile_in_two)


@dataclass(frozen=True, kw_only=True)
class Job:
    """What every task of a run needs.

    Attributes
    ----------
    model
        What `stages.build_model` made of the settings.
    stamps
        Size and modification time of each input file when the run was planned.
    scratch
        Folder of the cut files.
    parts
        Folder of the output of the parts.
    notes
        Folder of the notes about rows.
    earlier
        The files of earlier results; notes count from this list.
    """

    source: Source
    settings: Settings
    stages: Stages
    model: Any
    stamps: tuple[tuple[int, int], ...]
    scratch: Path
    parts: Path
    notes: Path
    earlier: tuple[EarlierFile, ...] = ()

    def save(self, identity: Identity | None = None) -> SavedJob:
        """Write the job's data into the scratch folder, and return what a worker needs to take it up.

        Parameters
        ----------
        identity
            What workers that this run has not started must agree on.
        """
        files = [
            {
                "path": str(file.path),
                "name": file.name,
                "rows": file.rows,
                "row_group_rows": file.row_group_rows,
                "partition": dict(file.partition),
            }
            for file in self.source.files
        ]
        data = {
            "settings": dump_toml(self.settings),
            "files": files,
            "schema": base64.b64encode(self.source.schema.serialize()).decode(),
            "stamps": self.stamps,
            "parts": str(self.parts),
            "notes": str(self.notes),
            "earlier": [[str(file.path), file.draws and str(file.draws), file.table] for file in self.earlier],
            "hashes": hashes(self.settings, self.model),
        }
        # Processes remember the job by its path, so no two jobs ever share one.
        path = self.scratch / f"job.{uuid.uuid4().hex}.json"
        with disk_trouble(path):
            path.write_text(json.dumps(data))
        stages = self.stages
        return SavedJob(
            path,
            build_model=name_of(stages.build_model),
            process_part=name_of(stages.process_part),
            warm_up=name_of(stages.warm_up),
            identity=identity,
        )


@dataclass(frozen=True)
class SavedJob:
    """Where a job's data lie, and the names of its stages; small enough to go with every task.

    Workers that the run has not started must agree with the `identity`, and warm up before their first task.
    """

    path: Path
    build_model: str
    process_part: str
    warm_up: str
    identity: Identity | None = None


def open_job(job: Job | SavedJob) -> Job:
    """Return the job, which a process reads, and builds the model of, only once.

    Raises
    ------
    EnvironmentTrouble
        If the model is not the one that the run began with.
    WorkerDisagrees
        If this process is not what the run expects of its workers.
    """
    return job if isinstance(job, Job) else _read_job(job)


@lru_cache(maxsize=1)
def _read_job(saved: SavedJob) -> Job:
    if saved.identity is not None and (disagreement := identify(saved.identity)):
        raise WorkerDisagrees(_worker_address(), disagreement)
    with disk_trouble(saved.path):
        data = json.loads(saved.path.read_text())
    settings = build_settings(tomllib.loads(data["settings"]))
    stages = Stages(named(saved.build_model), named(saved.process_part), named(saved.warm_up))
    model = stages.build_model(settings)
    _check_hashes(hashes(settings, model), data["hashes"])
    stages.warm_up(settings, model)  # what compiles here does not count as the time of a task
    return Job(
        source=Source(tuple(map(_source_file, data["files"])), _schema(data["schema"])),
        settings=settings,
        stages=stages,
        model=model,
        stamps=tuple((size, modified_ns) for size, modified_ns in data["stamps"]),
        scratch=saved.path.parent,
        parts=Path(data["parts"]),
        notes=Path(data["notes"]),
        earlier=tuple(EarlierFile(Path(path), draws and Path(draws), table) for path, draws, table in data["earlier"]),
    )


def _worker_address() -> str:
    try:
        return str(get_worker().address)
    except ValueError:
        return "this process"


def _check_hashes(found: dict[str, Any], expected: dict[str, Any]) -> None:
    changed = [name for name in expected if found[name] != expected[name] and name != "fit_key"]
    if "passbands" in changed:
        labels = expected["passbands"]
        changed += [label for label in labels if found["passbands"].get(label) != labels[label]]
    if changed:
        raise EnvironmentTrouble(
            f"a worker has not the same {', '.join(changed)} as the run began with: a file has changed; run again"
        )


def _source_file(data: dict[str, Any]) -> SourceFile:
    changed = {"path": Path(data["path"]), "row_group_rows": tuple(data["row_group_rows"])}
    return SourceFile(**data | changed)


def _schema(text: str) -> pa.Schema:
    return pa.ipc.read_schema(pa.py_buffer(base64.b64decode(text)))


def name_of(function: Callable[..., Any]) -> str:
    """Return "module:function", by which another process can import a function.

    Raises
    ------
    ValueError
        If no import leads to it.
    """
    name = f"{function.__module__}:{function.__qualname__}"
    try:
        found = named(name)
    except (ImportError, AttributeError):
        found = None
    if found is not function:
        raise ValueError(f"{name} cannot be imported by a worker: define it at the top level of a module")
    return name


def named(name: str) -> Any:
    """Import the function that `name_of` gave a name."""
    module, _, function = name.partition(":")
    return getattr(import_module(module), function)
