"""Generations: a catalogue is built beside the published one and published by one rename of a link."""

from __future__ import annotations

import os
import re
import shutil
import uuid
from collections.abc import Callable, Collection
from pathlib import Path

from starkiln.engine.disk import remove_folder
from starkiln.tables.write import sync_folder

LINKED = ("catalogue", "rejected", "report")


class Generations:
    """The numbered generations of a run directory, whose lock must be held.

    Each is built in a folder of its own, <number>.partial, where result/ becomes the generation; a number is
    never used again.

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
        return self._numbered(r"(\d{6,})")

    def partials(self) -> list[int]:
        """Return the numbers of those that are being built, ascending."""
        return self._numbered(r"(\d{6,})\.partial")

    def _numbered(self, pattern: str) -> list[int]:
        if not self._folder.is_dir():
            return []
        found = (re.fullmatch(pattern, path.name) for path in self._folder.iterdir())
        return sorted(int(match[1]) for match in found if match)

    def current(self) -> int | None:
        """Return the number of the published generation, None if there is none."""
        try:
            name = Path(os.readlink(self._run_dir / "current")).name
        except OSError:
            return None
        return int(name) if re.fullmatch(r"\d{6,}", name) and self.folder(int(name)).is_dir() else None

    def folder(self, number: int) -> Path:
        """Return the folder of a complete generation."""
        return self._folder / f"{number:06d}"

    def partial(self, number: int) -> Path:
        """Return the folder in which a generation is built."""
        return self._folder / f"{number:06d}.partial"

    def begin(self, number: int) -> Path:
        """Make the folder of a new generation, still partial and empty."""
        partial = self.partial(number)
        remove_folder(partial)
        partial.mkdir(parents=True)
        return partial

    def remove_partial(self, number: int) -> None:
        """Remove what was needed to build a generation, if it is still there."""
        remove_folder(self.partial(number))

    def sweep(self, known: Collection[int]) -> list[int]:
        """Remove the partial generations that are not known, and what a stopped run was about to remove.

        Returns
        -------
        The numbers of the partial generations removed.
        """
        unknown = [number for number in self.partials() if number not in known]
        for number in unknown:
            self.remove_partial(number)
        for leftover in self._folder.glob(".*.removed"):
            remove_folder(leftover)
        for name in ("current", *LINKED):
            for leftover in self._run_dir.glob(f".{name}.*.tmp"):
                leftover.unlink()
        return unknown

    def publish(self, number: int, keep: int, on_state: Callable[[str], None]) -> Path:
        """Make the result of a partial generation the current one, and remove the oldest beyond those to keep.

        Everything is on disk before the link moves; a reader sees the old generation or the new one, whole.

        Parameters
        ----------
        number
            The generation, complete in the folder result/ of its partial one.
        keep
            How many generations to keep, this one included; at least 1.
        on_state
            Called with "publishing" before anything is renamed, and with "published" when the link has moved.
        """
        result = self.partial(number) / "result"
        sync_tree(result)
        on_state("publishing")
        result.rename(self.folder(number))
        return self.finish(number, keep, on_state)

    def finish(self, number: int, keep: int, on_state: Callable[[str], None]) -> Path:
        """Do what is left of a publication once the folder has its name; doing it again changes nothing."""
        published = self.folder(number)
        sync_folder(self._folder)
        self._switch(published)
        on_state("published")
        for old in self.numbers()[:-keep]:
            doomed = self._folder / f".{old:06d}.removed"
            self.folder(old).rename(doomed)
            shutil.rmtree(doomed)
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
