"""The settings of a run: nothing else parses them."""

from starkiln.settings.load import build_settings, load_settings
from starkiln.settings.models import Settings
from starkiln.settings.text import dump_toml, settings_schema

__all__ = ["Settings", "build_settings", "dump_toml", "load_settings", "settings_schema"]
