"""Finding the files of a table: one file, a folder, a glob pattern or a hive layout."""

from __future__ import annotations

import glob
import os
from collections.abc import Sequence
from pathlib import Path
from urllib.parse import unquote

from starkiln.errors import InputError

SUFFIXES = (".parquet", ".parq", ".pq")
"""Endings of the files taken from a folder; a file named outright or by a glob may have any."""

PartitionValue = int | str | None

_NULL_PARTITION = "__HIVE_DEFAULT_PARTITION__"


def find_files(tables: str) -> tuple[Path, list[Path]]:
    """Return the folder that names are relative to, and the files in order of their names.

    Folders are searched to any depth for files with one of `SUFFIXES`; names below the folder that begin
    with "." or "_" are passed by.

    Raises
    ------
    InputError
        If nothing is found.
    """
    path = Path(tables)
    if path.is_file():
        return path.parent, [path]
    if path.is_dir():
        root, found = path, _files_below(path)
    elif glob.has_magic(tables):
        root, found = _glob_files(tables)
    else:
        raise InputError(f"input.tables: there is no file or folder {tables}")
    if not found:
        raise InputError(f"input.tables: no Parquet file ({', '.join(SUFFIXES)}) in {tables}")
    return root, sorted(set(found), key=lambda file: file.relative_to(root).as_posix())


def _glob_files(pattern: str) -> tuple[Path, list[Path]]:
    parts = Path(pattern).parts
    fixed = next(k for k, part in enumerate(parts) if glob.has_magic(part))
    root = Path(*parts[:fixed])
    found: list[Path] = []
    for match in map(Path, glob.glob(pattern, recursive=True)):
        if not any(map(_is_hidden, match.relative_to(root).parts)):
            found += _files_below(match) if match.is_dir() else [match]
    return root, found


def _files_below(folder: Path) -> list[Path]:
    found = []
    for parent, folders, names in os.walk(folder, followlinks=True):
        folders[:] = [name for name in folders if not _is_hidden(name)]
        found += [Path(parent, name) for name in names if not _is_hidden(name) and name.endswith(SUFFIXES)]
    return found


def _is_hidden(name: str) -> bool:
    return name.startswith((".", "_"))


def partition_values(root: Path, paths: Sequence[Path]) -> list[dict[str, PartitionValue]]:
    """Return what the `key=value` folders above each file say.

    The values of a key are integers if every one is, else strings.
    """
    texts = [
        dict(part.split("=", 1) for part in path.relative_to(root).parts[:-1] if "=" in part)
        for path in paths
    ]
    strings = {
        key
        for found in texts
        for key, text in found.items()
        if text != _NULL_PARTITION and not _is_int64(text)
    }
    return [{key: _value(text, key in strings) for key, text in found.items()} for found in texts]


def _is_int64(text: str) -> bool:
    """Tell whether a text is a 64-bit integer as it would be printed, unlike "07" or "1_0"."""
    try:
        return str(int(text)) == text and -(2**63) <= int(text) < 2**63
    except ValueError:
        return False


def _value(text: str, is_string: bool) -> PartitionValue:
    if text == _NULL_PARTITION:
        return None
    return unquote(text) if is_string else int(text)
