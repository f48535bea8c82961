"""Records on disk, dealt by the hash of an id, so that joining many rows takes the memory of few."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from starkiln.engine.disk import disk_trouble

BUCKET_ROWS = 400_000


class Buckets:
    """Structured records in files, each holding a range of `id_hash`; the ranges ascend from file to file.

    Parameters
    ----------
    folder
        Made here; holds the files.
    rows
        About how many records will come, which sets the number of files.
    dtype
        The records' type, with an int64 field `id_hash` that is spread evenly.
    """

    def __init__(self, folder: Path, rows: int, dtype: np.dtype[np.void]) -> None:
        with disk_trouble(folder):
            folder.mkdir()
        count = max(1, -(-rows // BUCKET_ROWS))
        self._paths = [folder / f"{number:06d}.bin" for number in range(count)]
        self._dtype = dtype

    def add(self, **fields: NDArray[np.generic]) -> None:
        """Append records, given as one array for each field."""
        records = np.empty(len(fields["id_hash"]), self._dtype)
        for name, values in fields.items():
            records[name] = values
        bucket = self._bucket(records["id_hash"])
        for number in np.unique(bucket):
            path = self._paths[number]
            with disk_trouble(path), path.open("ab") as file:
                file.write(records[bucket == number].tobytes())

    def _bucket(self, hashes: NDArray[np.int64]) -> NDArray[np.int64]:
        top_bits = (hashes >> 32) + 2**31
        return top_bits * len(self._paths) >> 32

    def drain(self) -> Iterator[NDArray[np.void]]:
        """Yield the records of each range in turn, in the order they came, and remove the file.

        A range without records yields an empty array, so two sets of as many buckets can be walked side by side.
        """
        for path in self._paths:
            with disk_trouble(path):
                records = np.fromfile(path, self._dtype) if path.exists() else np.empty(0, self._dtype)
                path.unlink(missing_ok=True)
            yield records
