"""Earlier results: the published generation, and builds that were given up, as far as rows can be taken from them."""

from __future__ import annotations

import hashlib
import json
import re
import tomllib
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
from numpy.typing import NDArray

from starkiln.engine.disk import disk_trouble
from starkiln.engine.join import CATALOGUE, DATA, FAULT, OLD, STALE
from starkiln.engine.keys import ROWS_VERSION
from starkiln.engine.reasons import why_refit
from starkiln.engine.records import Build, DonePart, EarlierFile
from starkiln.errors import EnvironmentTrouble, StarkilnError
from starkiln.settings import Settings, build_settings
from starkiln.tables.columns import catalogue_schema, output_fields
from starkiln.tables.source import Source
from starkiln.tables.write import file_sha256, read_groups


@dataclass(frozen=True, kw_only=True)
class EarlierSource:
    """One set of earlier results.

    Attributes
    ----------
    folder
        The generation, or the build's partial folder.
    files
        Where results can be taken from.
    published
        Whether it is the published generation.
    usable
        Whether results may be taken; if not, the index only tells which ids there were.
    index
        The files of its index.
    parts
        The parts of a build that were done.
    """

    folder: Path
    files: tuple[EarlierFile, ...]
    published: bool
    usable: bool
    index: tuple[Path, ...]
    parts: tuple[int, ...] = ()


@dataclass(frozen=True)
class Earlier:
    """All earlier results, the newest first, and why those that are published cannot be taken over, if so."""

    sources: tuple[EarlierSource, ...] = ()
    why: str = ""


def published_facts(run_dir: Path) -> dict[str, Any] | None:
    """Return the run.json of the published generation, with its `number` and its own `sha256`; None if there is none.

    Raises
    ------
    EnvironmentTrouble
        If it is there and cannot be read.
    """
    path = run_dir / "current" / "run.json"
    try:
        text = path.read_bytes()
        facts: dict[str, Any] = json.loads(text)
        number = int(path.parent.resolve().name)
    except FileNotFoundError:
        return None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise EnvironmentTrouble(f"cannot read {path} ({reason}): mend it, or set another run.output") from error
    return facts | {"number": number, "sha256": hashlib.sha256(text).hexdigest()}


def find_earlier(
    run_dir: Path,
    builds: Sequence[tuple[Build, Mapping[int, DonePart]]],
    settings: Settings,
    hashes: Mapping[str, Any],
    source: Source,
    *,
    refit_all: bool,
    check: Callable[[], None] = lambda: None,
) -> Earlier:
    """Return the results that a run can take rows from.

    Parameters
    ----------
    run_dir
        The run directory.
    builds
        Builds that were given up, with their parts that are done.
    settings
        The settings of this run.
    hashes
        The key of its fits, and the key's parts.
    source
        Its input.
    refit_all
        Whether only results of builds that refitted all rows themselves count.
    check
        Called for each part whose files are read through; may raise to stop.
    """
    wanted = catalogue_schema(settings, *output_fields(source.schema, settings))
    fitted = [field for field in wanted if field.name not in (settings.input.id, *settings.input.carry)]
    sources = []
    for build, parts in sorted(builds, key=lambda pair: -pair[0].number):
        same = build.fit_key == hashes["fit_key"] and build.refit_all >= refit_all
        folder = run_dir / "generations" / f"{build.number:06d}.partial"
        found = _build_source(folder, parts, fitted, check) if same else None
        if found is not None:
            sources.append(found)
    facts = published_facts(run_dir)
    if facts is None:
        return Earlier(tuple(sources))
    folder = (run_dir / "current").resolve()
    why = "--refit-all was given" if refit_all else _why_unusable(folder, facts, settings, hashes, fitted)
    if facts["hashes"].get("rows") == ROWS_VERSION:
        sources.append(_published_source(folder, facts["files"], usable=not why))
    return Earlier(tuple(sources), why)


def _build_source(
    folder: Path, parts: Mapping[int, DonePart], fitted: Sequence[pa.Field], check: Callable[[], None]
) -> EarlierSource | None:
    """Return the parts of a build that are as they were written, None if there are none or its columns do not do."""
    whole = []
    for number, part in sorted(parts.items()):
        check()
        if _is_whole(folder / "parts", part):
            whole.append(number)
    catalogues = [_part(folder, "catalogue", number) for number in whole]
    if not whole or _missing_columns(catalogues[0], fitted):
        return None
    files = tuple(
        EarlierFile(path, _part(folder, "draws", number) if "draws" in parts[number].files else None, "catalogue")
        for number, path in zip(whole, catalogues, strict=True)
    )
    index = tuple(_part(folder, "index", number) for number in whole)
    return EarlierSource(folder=folder, files=files, published=False, usable=True, index=index, parts=tuple(whole))


def _part(folder: Path, table: str, number: int) -> Path:
    return folder / "parts" / table / f"part-{number:06d}.parquet"


def _is_whole(parts: Path, part: DonePart) -> bool:
    for table, file in part.files.items():
        path = parts / table / f"part-{part.number:06d}.parquet"
        with disk_trouble(path):
            if not path.is_file() or path.stat().st_size != file.bytes or file_sha256(path) != file.sha256:
                return False
    return True


def _why_unusable(
    folder: Path, facts: Mapping[str, Any], settings: Settings, hashes: Mapping[str, Any], fitted: Sequence[pa.Field]
) -> str:
    lost = [name for name in facts["files"] if not (folder / name).is_file()]
    if lost:
        return f"the published generation lacks {lost[0]}"
    catalogue = next((folder / name for name in facts["files"] if _table(name) == "catalogue"), None)
    missing = [] if catalogue is None else _missing_columns(catalogue, fitted)
    then = _fit_settings(folder / "settings.toml")
    return why_refit(facts["hashes"], hashes, then, settings.fit_settings(), missing)


def _missing_columns(catalogue: Path, fitted: Sequence[pa.Field]) -> list[str]:
    with disk_trouble(catalogue):
        stored = pq.read_schema(catalogue)
    return [
        field.name for field in fitted if field.name not in stored.names or stored.field(field.name).type != field.type
    ]


def _fit_settings(path: Path) -> dict[str, Any] | None:
    """Return the settings of a published generation that matter to a fit; None if they can no longer be read."""
    try:
        return build_settings(tomllib.loads(path.read_text())).fit_settings()
    except (OSError, ValueError, StarkilnError):
        return None


def _table(name: str) -> str:
    return name.partition("/")[0]


def _published_source(folder: Path, names: Mapping[str, Any], *, usable: bool) -> EarlierSource:
    files = []
    for name in names:
        table = _table(name)
        if table in ("catalogue", "rejected"):
            twin = re.sub("^catalogue/", "draws/", name)
            draws = folder / twin if table == "catalogue" and twin in names else None
            files.append(EarlierFile(folder / name, draws, table))
    index = tuple(folder / name for name in names if _table(name) == "index")
    return EarlierSource(folder=folder, files=tuple(files), published=True, usable=usable, index=index)


def index_size(source: EarlierSource) -> int:
    """Return how many records `index_records` will yield at most."""
    with disk_trouble(source.folder):
        return sum(pq.read_metadata(path).num_rows for path in source.index)


def index_records(source: EarlierSource, first_number: int) -> Iterator[NDArray[np.void]]:
    """Yield records of the rows of earlier results, many at a time.

    Parameters
    ----------
    source
        The results.
    first_number
        The number of the first of its files.
    """
    numbers = {_name(file.path, source): first_number + k for k, file in enumerate(source.files)}
    faults: dict[str, NDArray[np.bool_]] = {}
    for path in source.index:
        for entries in read_groups(path):
            records = np.empty(entries.num_rows, OLD)
            for field in ("id_hash", "row_hash", "row"):
                records[field] = entries[field].to_numpy()
            records["published"] = source.published
            records["source"], records["kind"] = first_number, STALE
            if source.usable:
                _place(records, entries["file"], path, source, numbers, faults)
            # A fault of a build that was never published is tried again, so that it is told when it is.
            yield records if source.published else records[records["kind"] != FAULT]


def _place(
    records: NDArray[np.void],
    names: pa.ChunkedArray,
    index: Path,
    source: EarlierSource,
    numbers: Mapping[str, int],
    faults: dict[str, NDArray[np.bool_]],
) -> None:
    """Write into records which file holds each row, and what became of the row."""
    encoded = names.combine_chunks().dictionary_encode()
    which = encoded.indices.to_numpy()
    for code, name in enumerate(encoded.dictionary.to_pylist()):
        here = which == code
        # In a part's index the file is the table's name alone.
        name = name if source.published else f"parts/{name}/{index.name}"
        if name in numbers:
            records["source"][here] = numbers[name]
        if "/rejected/" in f"/{name}":
            if name not in faults:
                faults[name] = _faults(source.folder / name)
            records["kind"][here] = np.where(faults[name][records["row"][here]], FAULT, DATA)
        else:
            records["kind"][here] = CATALOGUE


def _name(path: Path, source: EarlierSource) -> str:
    return path.relative_to(source.folder).as_posix()


def _faults(rejected: Path) -> NDArray[np.bool_]:
    """Return which rows of a file of rejected rows a fault is to blame for."""
    kinds = [pc.equal(rows["kind"], "fault").to_numpy() for rows in read_groups(rejected)]
    return np.concatenate([np.zeros(0, bool), *kinds])
