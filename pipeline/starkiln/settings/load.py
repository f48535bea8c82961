"""Reading the settings file, and telling all its problems at once."""

from __future__ import annotations

import copy
import os
import tomllib
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, TypeVar, get_args

from pydantic import ValidationError

from starkiln.errors import SettingsError, nearest
from starkiln.settings.models import Section, Settings

Loc = tuple[str | int, ...]
AnySettings = TypeVar("AnySettings", bound=Section)

_EXPECTED = {
    "string_type": "should be text in quotes",
    "string_too_short": "should not be empty",
    "float_type": "should be a number, without quotes",
    "int_type": "should be a whole number, without quotes",
    "finite_number": "should be a finite number",
    "too_short": "should be two numbers, [low, high]",
    "too_long": "should be two numbers, [low, high]",
    "is_instance_of": "should be a path in quotes",
    "list_type": "should be a list in square brackets",
}
_BAND_LISTS = (("input", "photometry"), ("forecast", "band"))
_PATTERNS = {
    r"^[a-z0-9_]+$": "should be lower-case letters, digits and underscores only",
    r"^[A-Za-z0-9][A-Za-z0-9._-]*$": "should be letters, digits, points, hyphens and underscores only",
}


def load_settings(path: str | Path) -> Settings:
    """Return the settings of a TOML file, its relative paths taken from the file's folder.

    Raises
    ------
    SettingsError
        If the file cannot be read, is no TOML, or holds anything wrong; all problems are named at once.
    """
    return load_section(Settings, Path(path))


def load_section(model: type[AnySettings], path: Path) -> AnySettings:
    """Return the settings of a TOML file as one of the models of a whole file.

    Raises
    ------
    SettingsError
        As of :func:`load_settings`.
    """
    try:
        data = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise SettingsError(f"{path}: cannot read the settings: {error.strerror}") from None
    except UnicodeDecodeError as error:
        raise SettingsError(f"{path}: not UTF-8 text at byte {error.start}; save it as UTF-8") from None
    except tomllib.TOMLDecodeError as error:
        raise SettingsError(f"{path}: not valid TOML: {error}") from None
    # `..` after a linked folder must mean what it means to the shell, so links are followed first.
    return build_section(model, data, folder=path.parent.resolve(), origin=str(path))


def build_settings(data: Mapping[str, Any], folder: str | Path = "", origin: str = "settings") -> Settings:
    """Return the settings held by nested dictionaries, as a TOML file would give them.

    Parameters
    ----------
    data
        The sections and their keys.
    folder
        Where relative paths start; the working directory unless given.
    origin
        What error messages call the settings, such as the file's path.

    Raises
    ------
    SettingsError
        If anything is wrong; all problems are named at once, each with its dotted key.
    """
    return build_section(Settings, data, folder, origin)


def build_section(
    model: type[AnySettings], data: Mapping[str, Any], folder: str | Path = "", origin: str = "settings"
) -> AnySettings:
    """Return nested dictionaries as one of the models of a whole file; the rest as of :func:`build_settings`."""
    try:
        return model.model_validate(data, context={"folder": os.fspath(folder)})
    except ValidationError as error:
        problems = _problems(model, error, data, folder)
    count = "1 problem" if len(problems) == 1 else f"{len(problems)} problems"
    raise SettingsError("\n  ".join([f"{origin}: {count} in the settings", *problems]))


def _problems(model: type[Section], error: ValidationError, data: Mapping[str, Any], folder: str | Path) -> list[str]:
    """Describe every problem; unknown keys are set aside so that they do not hide those of whole sections."""
    found = error.errors()
    unknown = [item for item in found if item["type"] == "extra_forbidden"]
    if unknown:
        try:
            model.model_validate(_without(data, unknown), context={"folder": os.fspath(folder)})
            found = unknown
        except ValidationError as rest:
            found = unknown + rest.errors()
    return [_describe(model, item, data) for item in found if item["type"] != "default_factory_not_called"]


def _without(data: Mapping[str, Any], unknown: list[Any]) -> Mapping[str, Any]:
    pruned = copy.deepcopy(data)
    for item in unknown:
        *parents, key = _visible(item["loc"])
        section: Any = pruned
        for parent in parents:
            section = section[parent]
        section.pop(key, None)
    return pruned


def _describe(model: type[Section], item: Any, data: Mapping[str, Any]) -> str:
    loc, kind, value = _visible(item["loc"]), item["type"], item["input"]
    where = _dotted(loc) + _band_name(loc, data)
    if kind == "problem":
        return f"{where} {item['msg']}"
    if kind == "extra_forbidden":
        return f"{where}: unknown key{_hint(model, loc)}"
    if kind == "missing" and isinstance(loc[-1], int):
        return f"{_dotted(loc[:-1])}: {_EXPECTED['too_short']}"
    if kind == "missing":
        return f"{where} is missing: {_meaning(model, loc)}"
    if isinstance(value, dict) and kind == "list_type":
        return f"{where}: write its header with double brackets, [[{_dotted(loc)}]]"
    if kind in ("model_type", "dict_type"):
        return f"{where} should be a table, headed [{_dotted(loc)}]"
    if kind == "value_error":
        text = str(item["ctx"]["error"])
    elif kind == "string_pattern_mismatch":
        text = _PATTERNS[item["ctx"]["pattern"]]
    elif kind == "literal_error" and isinstance(value, str):
        text = item["msg"].removeprefix("Input ") + nearest(value, _choices(item["ctx"]["expected"]))
    else:
        text = _EXPECTED.get(kind, item["msg"].removeprefix("Input "))
    shown = isinstance(value, str) and repr(value) in text
    return f"{where}: {text}" if shown else f"{where} = {value!r}: {text}"


def _visible(loc: Loc) -> Loc:
    """Leave out the names of the two forms of model.outliers; elsewhere they are keys of the user's own."""
    forms = {3} if loc[:2] == ("model", "outliers") and len(loc) > 2 and loc[2] in ("<table>", "<false>") else set()
    return tuple(part for place, part in enumerate(loc, start=1) if place not in forms)


def _dotted(loc: Loc) -> str:
    text = "".join(f"[{part}]" if isinstance(part, int) else f".{part}" for part in loc)
    return text.removeprefix(".") or "settings"


def _band_name(loc: Loc, data: Mapping[str, Any]) -> str:
    """Name the passband beside its place in the list, which nobody likes to count."""
    if loc[:2] not in _BAND_LISTS or len(loc) < 3:
        return ""
    band = data[str(loc[0])][str(loc[1])][loc[2]]
    name = band.get("passband") if isinstance(band, dict) else None
    return f" ({name})" if isinstance(name, str) else ""


def _choices(expected: str) -> list[str]:
    return expected.replace("'", "").replace(" or ", ", ").split(", ")


def _section(section: type[Section], loc: Loc) -> type[Section]:
    """Return the model of the section at a place below a section."""
    for part in loc:
        if isinstance(part, str):
            section = _model_in(section.model_fields[part].annotation) or section
    return section


def _model_in(annotation: Any) -> type[Section] | None:
    if isinstance(annotation, type) and issubclass(annotation, Section):
        return annotation
    return next((model for argument in get_args(annotation) if (model := _model_in(argument))), None)


def _meaning(model: type[Section], loc: Loc) -> str:
    parent = _section(model, loc[:-1])
    described = parent.model_fields[str(loc[-1])].description
    return described or (_section(model, loc).__doc__ or "").strip()


def _hint(model: type[Section], loc: Loc) -> str:
    key = str(loc[-1])
    if close := nearest(key, _section(model, loc[:-1]).model_fields):
        return close
    homes = [section for section, home in _all_sections(model, "") if key in home.model_fields]
    return f" (it belongs in [{homes[0]}])" if homes and homes[0] else "; remove it"


def _all_sections(model: type[Section], name: str) -> Iterator[tuple[str, type[Section]]]:
    yield name, model
    for key, field in model.model_fields.items():
        if inner := _model_in(field.annotation):
            yield from _all_sections(inner, f"{name}.{key}".removeprefix("."))
