"""Stages without physics, so that tests can run the engine alone; worker processes import them by name."""

from __future__ import annotations

import os
import signal
import time
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa

from starkiln.engine.job import Stages
from starkiln.flags import BY_NAME
from starkiln.settings import Settings
from starkiln.stages.process import PartTables
from starkiln.tables.columns import catalogue_schema, draws_schema, output_fields, rejected_schema
from starkiln.tables.hashes import id_hashes, row_hashes

FAILING_ID = 13
"""The id of the row at which the stages that fail do so."""


class NoModel:
    """Stands for the model of a run: no passband, nothing to hash."""

    passbands: dict[str, Any] = {}  # noqa: RUF012

    def digests(self) -> dict[str, str]:
        return {}

    def departures_digest(self) -> str:
        return ""


def build_no_model(settings: Settings) -> NoModel:
    return NoModel()


def pass_through(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    """Give every quantity the star's row as its value; reject rows without an id or with a repeated one."""
    return _divide(table, settings, [""] * len(table))


def reject_odd_ids(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    odd = [star is not None and star % 2 == 1 for star in table[settings.input.id].to_pylist()]
    return _divide(table, settings, ["odd id" if is_odd else "" for is_odd in odd])


def by_content(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    """Give every quantity a value that follows from the row's contents, and reject every fifth row or so for them."""
    hashes = row_hashes(table, settings)
    return _divide(table, settings, ["unlucky" if unlucky else "" for unlucky in hashes % 5 == 0], hashes % 1000)


def _divide(table: pa.Table, settings: Settings, reasons: list[str], values: np.ndarray | None = None) -> PartTables:
    if values is None:
        values = table["_input_row"].to_numpy() % 1000
    _, has_id = id_hashes(table[settings.input.id])
    later = table["_duplicate"].to_numpy() == 2
    told = np.where(has_id, np.where(later, "duplicate id", reasons), "no id")
    kept, rejected = table.filter(pa.array(told == "")), table.filter(pa.array(told != ""))
    values = values[told == ""]
    return PartTables(
        _catalogue(kept, settings, values),
        _rejected(rejected, told[told != ""], settings),
        _draws(kept, settings, values),
    )


def _catalogue(kept: pa.Table, settings: Settings, values: np.ndarray) -> pa.Table:
    schema = catalogue_schema(settings, *output_fields(kept.schema, settings))
    own = {
        "flags": np.where(kept["_duplicate"].to_numpy() == 1, BY_NAME["duplicate_id"].value, 0),
        "row_hash": row_hashes(kept, settings),
    }
    arrays = []
    for field in schema:
        if field.name in kept.column_names:
            arrays.append(kept[field.name].cast(field.type))
        elif field.name in own:
            arrays.append(pa.array(own[field.name], field.type))
        elif pa.types.is_string(field.type):
            arrays.append(pa.repeat(pa.scalar("blackbody"), kept.num_rows))
        else:
            arrays.append(pa.array(values, field.type, safe=False))
    return pa.table(arrays, schema=schema)


def _rejected(table: pa.Table, reasons: Any, settings: Settings) -> pa.Table:
    columns = [
        table[settings.input.id],
        table["_input_file"],
        table["_input_row"],
        pa.array(reasons, pa.string()),
        pa.array(reasons, pa.string()),
        pa.repeat(pa.scalar("data"), table.num_rows),
    ]
    return pa.table(columns, schema=rejected_schema(output_fields(table.schema, settings)[0]))


def _draws(kept: pa.Table, settings: Settings, values: np.ndarray) -> pa.Table | None:
    count = settings.sampling.keep_draws
    if not count:
        return None
    schema = draws_schema(settings, output_fields(kept.schema, settings)[0])
    lists = pa.FixedSizeListArray.from_arrays(pa.array(np.repeat(values, count).astype(np.float32)), count)
    return pa.table([kept[settings.input.id], *[lists] * (len(schema) - 1)], schema=schema)


def _has_failing_id(table: pa.Table, settings: Settings) -> bool:
    return FAILING_ID in table[settings.input.id].to_pylist()


def raise_at_failing_id(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    if _has_failing_id(table, settings):
        raise ArithmeticError("the stage has a bug")
    return pass_through(table, settings, model)


def raise_disk_full(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    if _has_failing_id(table, settings):
        raise OSError(28, "No space left on device")
    return pass_through(table, settings, model)


def raise_once(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    """Fail on the first attempt only, which a file beside the input remembers."""
    seen = Path(settings.input.tables).parent / "seen"
    if _has_failing_id(table, settings) and not seen.exists():
        seen.touch()
        raise ArithmeticError("only once")
    return pass_through(table, settings, model)


def kill_worker(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    if _has_failing_id(table, settings):
        time.sleep(1)
        os.kill(os.getpid(), signal.SIGKILL)
    return pass_through(table, settings, model)


def raise_at_two_ids(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    if {FAILING_ID, FAILING_ID + 4} & set(table[settings.input.id].to_pylist()):
        raise ArithmeticError("the stage has a bug")
    return pass_through(table, settings, model)


def raise_always(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    raise ArithmeticError("the stage has a bug")


def exit_at_failing_id(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    """End the process without a word to anyone, as a crash in compiled code does."""
    if _has_failing_id(table, settings):
        os._exit(1)
    return pass_through(table, settings, model)


def hang_at_failing_id(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    if _has_failing_id(table, settings):
        time.sleep(1e6)
    return pass_through(table, settings, model)


def hang_in_kernel(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    """Hang in compiled code, to which no signal handler and no exception of Python's comes through."""
    if _has_failing_id(table, settings):
        _endless()(1.0)
    return pass_through(table, settings, model)


def _endless() -> Any:
    from numba import njit

    @njit(nogil=True)
    def count(number: float) -> float:
        while number > 0.0:
            number = number + 1.0 if number < 1e6 else 1.0
        return number

    return count


def eat_memory(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    """Take more and more memory, 20 MB at a time, until this process is ended."""
    taken = []
    while _has_failing_id(table, settings):
        taken.append(np.ones(2_500_000))
        time.sleep(0.005)
    return pass_through(table, settings, model)


def slow_rows(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    """Take 0.02 s a row."""
    time.sleep(0.02 * len(table))
    return pass_through(table, settings, model)


def lose_a_row(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    made = pass_through(table, settings, model)
    return PartTables(made.catalogue.slice(1), made.rejected, made.draws)


def take_a_moment(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    time.sleep(0.5)
    return pass_through(table, settings, model)


def take_long(table: pa.Table, settings: Settings, model: NoModel) -> PartTables:
    time.sleep(30)
    return pass_through(table, settings, model)


def fit_and_tell_compilations(table: pa.Table, settings: Settings, model: Any) -> PartTables:
    """Fit, and leave a file beside the input that says how many kernels this process has compiled so far."""
    from starkiln.inference.compile import compilations
    from starkiln.stages.process import process_part

    made = process_part(table, settings, model)
    (Path(settings.input.tables).parent / f"compiled-{os.getpid()}").write_text(str(compilations()))
    return made


def stages(process: Any = pass_through) -> Stages:
    return Stages(build_no_model, process)
