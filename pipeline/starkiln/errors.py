"""The errors a user can cause, each with the exit code it ends a command with."""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class StarkilnError(Exception):
    """An expected failure: its text says what is wrong, where, and what to do."""

    exit_code = 1


class SettingsError(StarkilnError):
    """The settings file or the command line is wrong."""

    exit_code = 2


class UnknownPassband(SettingsError):
    """No passband has this name."""


class InputError(StarkilnError):
    """The input tables cannot be used."""

    exit_code = 3


class EnvironmentTrouble(StarkilnError):
    """Disk, folder or scheduler trouble; run again when mended."""

    exit_code = 74


class DirectoryBusy(StarkilnError):
    """Another run holds the run directory."""

    exit_code = 75


def nearest(name: str, known: Iterable[str]) -> str:
    """Return " (did you mean 'x'?)" for the closest known name, whatever its case, or an empty string."""
    spelt = {text.lower(): text for text in known}
    close = difflib.get_close_matches(name.lower(), list(spelt), n=1, cutoff=0.5)
    return f" (did you mean {spelt[close[0]]!r}?)" if close else ""
