"""The settings as text: the resolved TOML that a run keeps, and the JSON Schema that editors read."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import tomlkit

from starkiln.settings.models import Section, Settings


def dump_toml(settings: Section) -> str:
    """Return the resolved settings as TOML that `load_settings` reads back to an equal model."""
    return tomlkit.dumps(_plain(settings.model_dump(exclude_none=True)))


def settings_schema() -> dict[str, Any]:
    """Return the JSON Schema of the settings."""
    return {"$schema": "https://json-schema.org/draft/2020-12/schema"} | Settings.model_json_schema()


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    return str(value) if isinstance(value, Path) else value
