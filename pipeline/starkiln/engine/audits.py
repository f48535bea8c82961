"""What stars say of the zero points, as bytes and back: arrays and names of fields, never stored objects."""

from __future__ import annotations

import io
from collections.abc import Iterable, Iterator
from dataclasses import fields, is_dataclass
from functools import reduce
from typing import Any, get_args, get_type_hints

import numpy as np
from numpy.typing import NDArray

from starkiln.stages.audit import together
from starkiln.stages.process import PartTables

_SUMS: type[Any] = get_args(get_type_hints(PartTables)["audit"])[0]
"""What a part leaves for the audit."""


def pack_audit(sums: Any) -> bytes:
    """Return the sums of a part as bytes; none if there are none."""
    return b"" if sums is None else pack(sums)


def unpack_audit(data: bytes) -> Any:
    """Return the sums that `pack_audit` packed, or None."""
    return unpack(data, _SUMS) if data else None


def packed_together(packed: Iterable[bytes]) -> bytes:
    """Return the packed sums of several parts together."""
    return pack_audit(reduce(together, map(unpack_audit, packed), None))


def trimmed(packed: bytes, total: Any) -> bytes:
    """Return the packed sums of a part without the stars that no longer count beside those of other parts.

    The stars that count are the ones with the least keys, so a star that has fallen out never comes back.

    Parameters
    ----------
    total
        The sums of other parts of the same build, or None.
    """
    sums = unpack_audit(packed)
    if sums is None:
        return packed
    all_stars: Any = together(total, sums)
    return pack(_at(sums, np.isin(sums.key, all_stars.key)))


def pack(record: Any) -> bytes:
    """Return a named tuple or dataclass of arrays, or of others like it, as bytes."""
    file = io.BytesIO()
    arrays: dict[str, Any] = dict(_leaves(record, ""))
    np.savez_compressed(file, **arrays)
    return file.getvalue()


def unpack(data: bytes, kind: type[Any]) -> Any:
    """Return the record of a kind that `pack` packed."""
    with np.load(io.BytesIO(data), allow_pickle=False) as arrays:
        return _record(kind, "", arrays)


def _names(kind: type[Any]) -> list[str] | None:
    """Return the fields of a named tuple or dataclass, None for anything else."""
    if is_dataclass(kind):
        return [field.name for field in fields(kind)]
    return list(getattr(kind, "_fields", ())) or None


def _leaves(record: Any, path: str) -> Iterator[tuple[str, NDArray[Any]]]:
    for name in _names(type(record)) or []:
        value = getattr(record, name)
        if _names(type(value)) is None:
            yield path + name, value
        else:
            yield from _leaves(value, f"{path}{name}.")


def _at(record: Any, stars: NDArray[np.bool_]) -> Any:
    """Return a record of arrays, one row a star, of some of its stars."""
    values = {name: getattr(record, name) for name in _names(type(record)) or []}
    return type(record)(
        **{name: value[stars] if _names(type(value)) is None else _at(value, stars) for name, value in values.items()}
    )


def _record(kind: type[Any], path: str, arrays: Any) -> Any:
    kinds = get_type_hints(kind)
    return kind(
        **{
            name: arrays[path + name] if _names(kinds[name]) is None else _record(kinds[name], f"{path}{name}.", arrays)
            for name in _names(kind) or []
        }
    )
