"""The kinds of value a setting can hold, each with its check and the remedy for a wrong one."""

from __future__ import annotations

import os
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated, Any, Literal

from astropy import units as u
from pydantic import AfterValidator, BeforeValidator, Field, Strict, ValidationInfo

from starkiln.errors import nearest

FluxKind = Literal["f_nu", "f_lambda", "mag"]

_F_NU = u.Jy
_F_LAMBDA = u.W / u.m**3
_FLUX_REMEDY = (
    'give a flux density per frequency ("nJy", "erg / (s cm2 Hz)") '
    'or per wavelength ("W / (m2 um)"), or "mag"'
)
_MEMORY = re.compile(r"(\d{1,9}(?:\.\d{1,9})?) ?([kMGT]?)(i?)B")
_OPERATORS = ("=", "==", "!=", "<", ">", "<=", ">=", "in", "not in")


def parse_unit(text: str) -> u.UnitBase:
    """Return the astropy unit of a text.

    Raises
    ------
    ValueError
        If astropy does not know it; the message names a near unit if there is one.
    """
    try:
        return u.Unit(text)
    except ValueError as error:
        guess = re.search(r"Did you mean (.+?)\?", str(error))
        hint = f" (did you mean {guess[1]}?)" if guess else ""
        raise ValueError(f"{text!r} is not a unit{hint}") from None


def flux_kind(unit: str) -> FluxKind:
    """Tell whether a unit is one of flux density per frequency, per wavelength, or magnitudes.

    Raises
    ------
    ValueError
        If it is none of the three.
    """
    if unit == "mag":
        return "mag"
    try:
        parsed = parse_unit(unit)
    except ValueError as error:
        raise ValueError(f"{error}; {_FLUX_REMEDY}") from None
    if _logarithmic(parsed):
        raise ValueError(f'{unit!r} is logarithmic: write unit = "mag" with system = "AB" or "Vega"')
    if parsed.is_equivalent(_F_NU):
        return "f_nu"
    if parsed.is_equivalent(_F_LAMBDA):
        return "f_lambda"
    raise ValueError(f"{unit!r} is not a flux density; {_FLUX_REMEDY}")


def memory_bytes(text: str) -> int:
    """Return the number of bytes of a text such as "2GB" (powers of 1000) or "512MiB" (powers of 1024).

    Raises
    ------
    ValueError
        If the text is no positive amount of memory.
    """
    match = _MEMORY.fullmatch(text)
    if not match or not float(match[1]):
        raise ValueError(f'{text!r} is not an amount of memory: write "2GB" or "512MiB"')
    number, prefix, binary = match.groups()
    return int(float(number) * (1024 if binary else 1000) ** " kMGT".index(prefix or " "))


def conditions(where: list[Any]) -> Iterator[Any]:
    """Yield the conditions of a filter, whether it is a list of them or a list of alternatives."""
    for entry in where:
        if entry and isinstance(entry[0], str):
            yield entry
        else:
            yield from entry


def _logarithmic(unit: u.UnitBase) -> bool:
    return isinstance(unit, u.function.FunctionUnitBase)


def _unit_of(what: str, example: str) -> BeforeValidator:
    def check(text: object) -> object:
        if isinstance(text, str):
            unit = parse_unit(text)
            if _logarithmic(unit) or not unit.is_equivalent(u.Unit(example)):
                raise ValueError(f"{text!r} is not a unit of {what}: write for example {example!r}")
        return text

    return BeforeValidator(check)


def _flux_unit(text: str) -> str:
    flux_kind(text)
    return text


def _memory(text: str) -> str:
    memory_bytes(text)
    return text


def _absolute(text: str, info: ValidationInfo) -> str:
    if "://" in text:
        raise ValueError(f"{text!r} is a URL: only paths on this machine can be read")
    folder = (info.context or {}).get("folder", "")
    return os.path.abspath(os.path.join(folder, os.path.expanduser(text)))


def _absolute_path(value: object, info: ValidationInfo) -> object:
    return Path(_absolute(str(value), info)) if isinstance(value, str | Path) and str(value) else value


def _number_or_column(value: object) -> object:
    if isinstance(value, bool) or not isinstance(value, int | float | str) or value == "":
        raise ValueError("should be a number, or the name of a column in quotes")
    return value


def _positive_number(value: float | str) -> float | str:
    if not isinstance(value, str) and value <= 0:
        raise ValueError("should be greater than 0")
    return value


def _ordered(pair: tuple[float, float]) -> tuple[float, float]:
    if pair[0] >= pair[1]:
        raise ValueError("the lower bound comes first: write [low, high] with low < high")
    return pair


def _workers(value: object) -> object:
    if value != "auto" and (isinstance(value, bool) or not isinstance(value, int) or value < 1):
        raise ValueError('should be "auto" or a whole number above 0')
    return value


def _condition_problem(condition: object) -> str | None:
    """Say what is wrong with one [column, operator, value], or None."""
    if not isinstance(condition, list) or len(condition) != 3:
        return f'{condition!r} is no condition: write ["column", "operator", value]'
    column, operator, value = condition
    if not isinstance(column, str) or not column:
        return f"{condition!r}: the first item should be the name of a column in quotes"
    if operator not in _OPERATORS:
        hint = nearest(operator, _OPERATORS) if isinstance(operator, str) else ""
        return f"{condition!r}: the operator should be one of {', '.join(_OPERATORS)}{hint}"
    if operator in ("in", "not in"):
        listed = isinstance(value, list) and value
        return None if listed else f"{condition!r}: {operator!r} needs a list of values"
    return f"{condition!r}: {operator!r} needs one value" if isinstance(value, list | dict) else None


def _where(value: object) -> object:
    shape = 'write [["column", "operator", value], ...], or a list of such lists for alternatives'
    if not isinstance(value, list) or not all(isinstance(entry, list) and entry for entry in value):
        raise ValueError(f"is no filter: {shape}")
    if not value:
        raise ValueError("an empty filter keeps nothing apart: leave the key out")
    if len({isinstance(entry[0], str) for entry in value}) == 2:
        raise ValueError(f"mixes conditions and lists of conditions: {shape}")
    problems = [problem for condition in conditions(value) if (problem := _condition_problem(condition))]
    if problems:
        raise ValueError("; ".join(problems))
    return value


Text = Annotated[str, Field(min_length=1)]
SnakeCase = Annotated[str, Field(pattern=r"^[a-z0-9_]+$")]
Positive = Annotated[float, Field(gt=0)]
Count = Annotated[int, Field(gt=0)]
Temperature = Annotated[float, Field(ge=1000, le=100000)]
TemperatureRange = Annotated[tuple[Temperature, Temperature], Strict(False), AfterValidator(_ordered)]
PositiveRange = Annotated[tuple[Positive, Positive], Strict(False), AfterValidator(_ordered)]
NumberOrColumn = Annotated[float | str, BeforeValidator(_number_or_column)]
PositiveOrColumn = Annotated[NumberOrColumn, AfterValidator(_positive_number)]
FluxUnit = Annotated[Text, AfterValidator(_flux_unit)]
AngleUnit = Annotated[Text, _unit_of("angle", "mas")]
LengthUnit = Annotated[Text, _unit_of("length", "pc")]
Memory = Annotated[Text, AfterValidator(_memory)]
TablesPath = Annotated[Text, AfterValidator(_absolute)]
FilePath = Annotated[Path, BeforeValidator(_absolute_path)]
Where = Annotated[list[list[Any]], BeforeValidator(_where)]
Workers = Annotated[Count | Literal["auto"], BeforeValidator(_workers)]
