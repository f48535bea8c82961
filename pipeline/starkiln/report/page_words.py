"""Numbers and sentences of the quality page."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def integer(value: Any) -> str:
    """Return a whole number with its thousands apart."""
    return f"{round(float(value)):,}"


def number(value: Any, digits: int = 3) -> str:
    """Return a number with so many significant digits, thousands apart, no exponent where it can be read without."""
    value = float("nan") if value is None else float(value)
    if not math.isfinite(value):
        return "–"
    if value == 0:
        return "0"
    power = math.floor(math.log10(abs(value)))
    if not -5 < power < 9:
        return f"{value:.{digits - 1}e}"
    decimals = digits - 1 - power
    return f"{round(value, decimals):,.{max(decimals, 0)}f}"


def axis_number(value: float) -> str:
    """Return a number for an axis: plain from 0.01 to 99,999, else as a power of ten."""
    if 0.0099 < abs(value) < 99_999:
        return f"{value:,.6g}"
    power = math.floor(math.log10(abs(value)) + 1e-9)
    factor = value / 10.0**power
    ten = f"10{str(power).translate(_SUPERSCRIPT)}"
    return ten if abs(factor - 1.0) < 1e-6 else f"{factor:g}×{ten}"


def percent(share: Any) -> str:
    """Return a share in per cent."""
    share = float(share)
    if not math.isfinite(share):
        return "–"
    return f"{number(100.0 * share, 2 if abs(share) < 0.1 else 3)}\N{NO-BREAK SPACE}%"


def duration(seconds: float) -> str:
    """Return seconds in words."""
    if seconds < 120:
        return f"{seconds:.0f} s"
    minutes = round(seconds / 60.0)
    return f"{minutes} min" if minutes < 120 else f"{minutes // 60} h {minutes % 60} min"


def size(count: Any) -> str:
    """Return a number of bytes in words."""
    value = float(count)
    for unit in ("bytes", "kB", "MB"):
        if value < 1000:
            return f"{value:.0f} {unit}"
        value /= 1000
    return f"{value:.1f} GB"


def with_interval(star: dict[str, Any], name: str) -> str:
    """Return a star's median with the way to the ends of the 68 % interval."""
    median = star.get(f"{name}_p50")
    if median is None or not np.isfinite(median):
        return "–"
    above, below = star[f"{name}_hi68"] - median, median - star[f"{name}_lo68"]
    return f"{number(median, 4)} +{number(above, 2)} −{number(below, 2)}"
