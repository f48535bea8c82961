"""Generations: a catalogue is built beside the published one and published by one rename of a link."""

from __future__ import annotations

import os
import re
import shutil
import uuid
from pathlib import Path

from starkiln.engine.disk import remove_folder
from starkiln.tables.write import sync_folder

LINKED = ("catalogue", "rejected", "report")


class Generations:
    """The numbered generations of a run directory, whose lock must be held.

    Parameters
    ----------
    run_dir
        The run directory.
    """

    def __init__(self, run_dir: Path) -> None:
        self._run_dir = run_dir
        self._folder = run_dir / "generations"

    def numbers(self) -> list[int]:
        """Return the numbers of the complete generations, ascending."""
        if not self._folder.is_dir():
            return []
        return sorted(int(path.name) for path in self._folder.iterdir() if re.fullmatch(r"\d{6,}", path.name))

    def begin(self) -> Path:
        """Remove what unfinished runs left and make the folder of the next generation, still partial."""
        for stale in self._folder.glob("*.partial"):
            remove_folder(stale)
        number = max(self.numbers(), default=0) + 1
        partial = self._folder / f"{number:06d}.partial"
        partial.mkdir(parents=True)
        return partial

    def discard(self, partial: Path) -> None:
        """Remove a partial generation, if it is still there."""
        shutil.rmtree(partial, ignore_errors=True)

    def publish(self, partial: Path, keep: int) -> Path:
        """Make a partial generation the current one, and remove the oldest beyond the number to keep.

        Everything is on disk before the link moves; a reader sees the old generation or the new one, whole.

        Parameters
        ----------
        partial
            The folder that `begin` returned, complete.
        keep
            How many generations to keep, this one included; at least 1.
        """
        sync_tree(partial)
        published = partial.with_suffix("")
        partial.rename(published)
        sync_folder(self._folder)
        self._switch(published)
        for number in self.numbers()[:-keep]:
            shutil.rmtree(self._folder / f"{number:06d}")
        return published

    def _switch(self, published: Path) -> None:
        _link(self._run_dir / "current", published.relative_to(self._run_dir))
        for name in LINKED:
            if (published / name).exists():
                _link(self._run_dir / name, Path("current") / name)
        sync_folder(self._run_dir)


def _link(link: Path, target: Path) -> None:
    if link.is_symlink() and Path(os.readlink(link)) == target:
        return
    fresh = link.with_name(f".{link.name}.{uuid.uuid4().hex}.tmp")
    fresh.symlink_to(target)
    fresh.replace(link)


def sync_tree(folder: Path) -> None:
    """Flush every file and folder below a folder to disk, and the folder itself."""
    for root, _, names in os.walk(folder, topdown=False):
        for name in names:
            sync_folder(Path(root, name))
        sync_folder(Path(root))
