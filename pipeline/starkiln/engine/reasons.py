"""Why earlier results cannot be taken over, in words."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from starkiln.engine.keys import ROWS_VERSION

MOST_NAMED = 4
"""Of settings, bands or columns that differ, so many are named."""


def why_refit(
    hashes_then: Mapping[str, Any],
    hashes_now: Mapping[str, Any],
    fit_then: Mapping[str, Any] | None,
    fit_now: Mapping[str, Any],
    missing_columns: Sequence[str],
) -> str:
    """Return why every row is to be fitted again, or nothing if results can be taken over.

    Parameters
    ----------
    hashes_then, hashes_now
        The key of a fit and its parts, of the published generation and of this run.
    fit_then, fit_now
        The settings that can change a fit; None where those of the published generation cannot be read.
    missing_columns
        Columns of the catalogue that the published one lacks, or has with another type.
    """
    if hashes_then.get("rows") != ROWS_VERSION:
        return "the published catalogue was made by an earlier version of starkiln"
    reasons = []
    if hashes_then["fit_key"] != hashes_now["fit_key"]:
        reasons = [*_changes(hashes_then, hashes_now, fit_then, fit_now)] or ["what a fit hangs on has changed"]
    if missing_columns:
        noun = "column" if len(missing_columns) == 1 else "columns"
        reasons.append(f"the published catalogue has no {noun} {_listed(missing_columns)}")
    return "; ".join(reasons)


def _changes(
    then: Mapping[str, Any], now: Mapping[str, Any], fit_then: Mapping[str, Any] | None, fit_now: Mapping[str, Any]
) -> Iterator[str]:
    if then.get("method") != now["method"]:
        yield f"the method's version changed ({then.get('method')} -> {now['method']})"
    if then.get("settings") != now["settings"]:
        differences = [] if fit_then is None else list(_differences("", fit_then, fit_now))
        yield "settings changed" + (f" ({_listed(differences)})" if differences else "")
    before = then.get("passbands", {})
    labels = [label for label, digest in now["passbands"].items() if before.get(label) != digest]
    if labels:
        yield f"passbands changed ({_listed(labels)})"
    if then.get("departures") != now["departures"]:
        yield "departures changed"


def _differences(key: str, then: Any, now: Any) -> Iterator[str]:
    """Yield the dotted keys at which two settings differ, with both values."""
    if isinstance(then, Mapping) and isinstance(now, Mapping):
        for name in dict.fromkeys([*then, *now]):
            yield from _differences(f"{key}.{name}".lstrip("."), then.get(name), now.get(name))
    elif isinstance(then, list) and isinstance(now, list) and len(then) == len(now):
        for index, (before, after) in enumerate(zip(then, now, strict=True)):
            yield from _differences(f"{key}.{index}", before, after)
    elif then != now:
        yield f"{key}: {_shown(then)} -> {_shown(now)}"


def _shown(value: Any) -> str:
    if isinstance(value, list):
        return f"{len(value)} of them"
    if isinstance(value, Mapping):
        return "another table"
    return "none" if value is None else str(value)


def _listed(texts: Sequence[str]) -> str:
    more = len(texts) - MOST_NAMED
    return ", ".join(texts[:MOST_NAMED]) + (f" and {more} more" if more > 0 else "")
