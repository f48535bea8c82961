"""The parts of README.md that are made or run: tables out of the registries, and blocks of code.

    python tests/readme_parts.py

writes the tables anew, between their marks.
"""

from __future__ import annotations

import re
from pathlib import Path

from starkiln.flags import FLAGS
from starkiln.settings import build_settings
from starkiln.tables.columns import QUANTITIES, REJECTED, Column, fitted_columns

README = Path(__file__).parents[1] / "README.md"
SUFFIXES = ("_lo95", "_lo68", "_p50", "_hi68", "_hi95")


def quantity_table() -> str:
    """A row for each quantity with a posterior."""
    return _table(("quantity", "unit", "what"), [(f"`{q.name}`", q.unit, q.title) for q in QUANTITIES])


def column_table() -> str:
    """A row for each other column that a fit adds to the catalogue."""
    quantiles = {q.name + suffix for q in QUANTITIES for suffix in SUFFIXES}
    return _column_table([column for column in _fitted() if column.name not in quantiles])


def rejected_table() -> str:
    """A row for each column of the rejected rows, but the id."""
    return _column_table(list(REJECTED))


def flag_table() -> str:
    """A row for each flag."""
    return _table(("bit", "name", "meaning"), [(str(flag.bit), f"`{flag.name}`", flag.sentence) for flag in FLAGS])


TABLES = {"quantities": quantity_table, "columns": column_table, "rejected": rejected_table, "flags": flag_table}


def _fitted() -> list[Column]:
    """The columns of a fit of three bands, of which one stands for all."""
    band = {"passband": "panstarrs_g", "label": "zzz", "value": "g", "error": "g_error", "unit": "nJy"}
    others = [band | {"label": f"other{k}", "value": f"v{k}", "error": f"e{k}"} for k in range(2)]
    settings = build_settings(
        {
            "run": {"name": "all", "output": "run"},
            "input": {"tables": "all.parquet", "id": "id", "photometry": [band, *others]},
        }
    )
    return [column for column in fitted_columns(settings) if not re.search(r"_other\d$", column.name)]


def _column_table(columns: list[Column]) -> str:
    rows = [(f"`{column.name}`", column.unit or "", column.description or "") for column in columns]
    return _table(("column", "unit", "meaning"), rows).replace("zzz", "BAND")


def _table(head: tuple[str, ...], rows: list[tuple[str, ...]]) -> str:
    lines = [head, tuple("---" for _ in head), *rows]
    return "\n".join("| " + " | ".join(line) + " |" for line in lines).replace("|  |", "| |")


def _pattern(name: str) -> re.Pattern[str]:
    return re.compile(rf"(?<=<!-- {name} -->\n\n).*?(?=\n\n<!-- /{name} -->)", re.DOTALL)


def table_in_readme(name: str) -> str:
    """The table between the marks of a name."""
    (found,) = _pattern(name).findall(README.read_text())
    return found


def blocks(language: str) -> list[str]:
    """The contents of every fenced block of a language, in order, indented ones too."""
    found = re.findall(rf"^( *)```{language}\n(.*?)^\1```$", README.read_text(), re.MULTILINE | re.DOTALL)
    return [re.sub(rf"^{indent}", "", text, flags=re.MULTILINE) for indent, text in found]


def block_with(language: str, words: str) -> str:
    """The one block of a language that holds some words."""
    (found,) = (text for text in blocks(language) if words in text)
    return found


def main() -> None:
    text = README.read_text()
    for name, make in TABLES.items():
        text = _pattern(name).sub(lambda _, make=make: make(), text)
    README.write_text(text)


if __name__ == "__main__":
    main()
