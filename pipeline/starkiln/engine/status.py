"""Where a run stands, also while it is running: read from progress.json and the published generation's run.json."""

from __future__ import annotations

import json
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from starkiln.engine.board import FILE_NAME, SCHEMA
from starkiln.errors import EnvironmentTrouble, SettingsError

NEWS_SECONDS = 30.0
"""A living run writes its progress ten times as often."""

MOVE_SECONDS = 900.0
"""A run that lives but gets no row done for so long is told as stale, too."""

FATES = {
    "new": "new",
    "changed": "changed",
    "kept": "kept from before",
    "failed": "failed before",
    "retried": "tried again",
    "duplicate": "duplicate",
    "gone": "gone",
    "set_aside": "set aside for faults",
}


def read_status(run_dir: Path, now: datetime | None = None) -> dict[str, Any]:
    """Return where a run stands: what progress.json says, how old that is, and what is published.

    Parameters
    ----------
    run_dir
        The run directory; reading it needs no lock.
    now
        The time to measure ages from; the present one unless given.

    Returns
    -------
    dict
        The keys of progress.json, with `age_s`, `stale`, `stale_since` (a time, or None) and `catalogue`: generation,
        end, exit_code and counts of what is published, or None.

    Raises
    ------
    SettingsError
        If there is no run.
    EnvironmentTrouble
        If a file cannot be read.
    """
    progress, published = _read(run_dir / FILE_NAME), _read(run_dir / "current" / "run.json")
    if progress is None and published is None:
        raise SettingsError(f"{run_dir} holds no run: name the run.output of one")
    if progress is None:
        progress = _after(published or {})
    if progress.get("schema") != SCHEMA:
        raise SettingsError(
            f"{run_dir / FILE_NAME} has schema {progress.get('schema')}, and this starkiln knows {SCHEMA}: "
            "use the version that made it"
        )
    now = now or datetime.now(UTC)
    return {**progress, **_freshness(progress, now), "catalogue": _catalogue(run_dir, published)}


def _read(path: Path) -> dict[str, Any] | None:
    try:
        found = json.loads(path.read_text())
    except (FileNotFoundError, NotADirectoryError):
        return None
    except OSError as error:
        raise EnvironmentTrouble(f"{path}: {error.strerror}") from error
    except ValueError as error:
        raise EnvironmentTrouble(f"{path} is damaged: the next run replaces it") from error
    if not isinstance(found, dict):
        raise EnvironmentTrouble(f"{path} is damaged: the next run replaces it")
    return found


def _after(published: dict[str, Any]) -> dict[str, Any]:
    """Return what progress.json would say after the run that published, where it is lost."""
    known: dict[str, Any] = {key: published[key] for key in ("name", "start", "exit_code") if key in published}
    return {"schema": SCHEMA, **known, "updated": published.get("end"), "state": "ended", "message": ""}


def _freshness(progress: dict[str, Any], now: datetime) -> dict[str, Any]:
    age, still = _age(progress.get("updated"), now), _age(progress.get("moved"), now)
    since = None
    if progress.get("state") != "ended":
        if age > NEWS_SECONDS:
            since = progress.get("updated")
        elif still > MOVE_SECONDS:
            since = progress.get("moved")
    return {"age_s": round(age, 1), "stale": since is not None, "stale_since": since}


def _age(moment: str | None, now: datetime) -> float:
    # The writer's clock may be ahead of the reader's.
    return max(0.0, (now - datetime.fromisoformat(moment)).total_seconds()) if moment else 0.0


def _catalogue(run_dir: Path, published: dict[str, Any] | None) -> dict[str, Any] | None:
    if published is None:
        return None
    facts = {key: published.get(key) for key in ("end", "exit_code", "counts")}
    return {"generation": (run_dir / "current").resolve().name, **facts}


def describe_status(status: dict[str, Any]) -> str:
    """Return a status in a few lines for people."""
    rows = status.get("rows", {})
    fates = ", ".join(f"{rows[key]} {words}" for key, words in FATES.items() if rows.get(key))
    news = f"no news since {_moment(status['stale_since'])}: if the run is dead, run again to go on"
    lines = (
        (f"{status.get('name', 'a run')}: {_standing(status)}", True),
        (_whereabouts(status), "start" in status),
        (f"rows: {fates}", fates),
        (f"refits all: {status.get('why')}", status.get("why")),
        (f"must end by {_moment(status.get('deadline'))}", status.get("deadline")),
        (status.get("message"), status.get("message")),
        (news, status["stale"]),
        (_published(status["catalogue"]), True),
    )
    return "\n".join(str(line) for line, wanted in lines if wanted)


def _standing(status: dict[str, Any]) -> str:
    if status.get("state") == "ended":
        code = status.get("exit_code")
        return "ended" if code is None else f"ended with exit code {code}"
    told = [str(status.get("state"))]
    step, parts, files = (status.get(key, {}) for key in ("step", "parts", "files"))
    if step.get("rows"):
        told.append(f"{step['done']} of {step['rows']} rows ({100 * step['done'] / step['rows']:.1f} %)")
    if parts.get("total"):
        told.append(f"{parts['done']} of {parts['total']} parts")
    elif files.get("total"):
        told.append(f"{files['planned']} of {files['total']} files planned")
    if status.get("rate"):
        told.append(f"{status['rate']:.3g} rows a second")
    if status.get("seconds_left") is not None and not status["stale"]:
        told.append(f"{duration(status['seconds_left'])} left")
    return ", ".join(told)


def _whereabouts(status: dict[str, Any]) -> str:
    told = f"begun {_moment(status.get('start'))}"
    if "pid" in status:
        told += f" by process {status['pid']} on {status['host']}"
    if status.get("state") != "ended":
        told += f", {status.get('workers', 0)} workers, last news {duration(status['age_s'])} ago"
    return told


def _published(catalogue: dict[str, Any] | None) -> str:
    if catalogue is None:
        return "nothing is published yet"
    counts = catalogue.get("counts") or {}
    return (
        f"published: generation {catalogue['generation']} of {_moment(catalogue['end'])}, "
        f"{counts.get('catalogue')} stars, {counts.get('rejected')} rejected rows"
    )


def _moment(text: str | None) -> str:
    return "?" if text is None else datetime.fromisoformat(text).astimezone(UTC).strftime("%Y-%m-%d %H:%M:%S UTC")


def duration(seconds: float) -> str:
    """Return a time span in words: "45 s", "12 min", "3 h 20 min"."""
    if seconds < 100:
        return f"{seconds:.0f} s"
    minutes = round(seconds / 60)
    return f"{minutes} min" if minutes < 100 else f"{minutes // 60} h {minutes % 60} min"
