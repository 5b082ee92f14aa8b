"""Writes files-in.md from the declarations that the readers themselves use: `python docs/make_files_in.py`."""

from __future__ import annotations

import math
from collections.abc import Iterable
from pathlib import Path

from compsize.study.schema import Column, Key, Section, Table
from compsize.study.schema_keys import NETWORK_KEYS, STUDY_SECTIONS
from compsize.study.schema_tables import NETWORK_TABLES, STUDY_TABLES

PAGE = Path(__file__).with_name("files-in.md")

HEAD = """\
# Files of a study

This page is made from the declarations that the readers use (`python docs/make_files_in.py`); do not edit it.

A study is a folder with `study.toml` and the tables that it names. Paths are relative and stay inside the folder; only
`network` may name a folder or file beside it. `compsize new FOLDER` writes a small one in which every key is explained.

- Tables are CSV in UTF-8 with commas and a decimal point. Ids are trimmed text: `01` and `NA` stay what they are.
- Powers are in MW and Mvar, per-unit values on `base_mva` and the bus `kv`, angles in degrees, costs in one currency.
- Mvar of a load are positive when it draws reactive power, Mvar of a capacitor when it supplies it. A lagging power
  factor is positive, a leading one negative.
- A blank cell, or a column or key that is absent, takes the default. An unknown column or key is a fault.
- yes or no: `yes`, `on`, `true`, `1` or `no`, `off`, `false`, `0` in tables; `true` or `false` in TOML.
"""

NETWORK = """\
## The network

A folder with these tables, or a workbook (.xlsx) with sheets of these names and a sheet `network` with the columns
`key` and `value`; or a file in the IEEE Common Data Format; or a CGMES 2.4.15 folder or zip. A branch is a pi with the
ratio and shift at its from side: I_from = (y + jb/2) V_from / t^2 - y V_to / (t e^(-js)), y = 1/(r + jx).
"""

MORE = {
    "generators": "Two set-points on one bus are a fault.",
    "branches": "The last five columns describe a tap changer and are given together.",
    "svcs": "On the slope V = v_ref - slope x I, I capacitive positive.",
    "contingencies": "`intact`, `outages`, `bank_outage` and names that begin with `branch:` or `bank:` are reserved.",
    "equipment": "The output of a bank at voltage V is step_mvar (V / kv)^2.",
}
"""Sentences that belong to a table and to no single column."""


def page() -> str:
    """The whole page."""
    parts = [HEAD, NETWORK, _keys("`network.toml`", NETWORK_KEYS)]
    parts += [_table(table) for table in NETWORK_TABLES.values()]
    parts.append("## `study.toml`\n")
    parts += [_keys(_section_title(section), section) for section in STUDY_SECTIONS.values()]
    parts.append("## The tables that `study.toml` names\n\nTheir file names are free.\n")
    parts += [_table(table) for table in STUDY_TABLES.values()]
    return "\n".join(parts)


def _section_title(section: Section) -> str:
    if not section.name:
        return "At the top"
    return f"`[[{section.name}]]`" if section.repeated else f"`[{section.name}]`"


def _keys(title: str, section: Section) -> str:
    rows = [(f"`{key.name}`", _meaning(key), key.unit, _default(key)) for key in section.keys]
    return f"### {title}\n\n{_sentence(section.meaning)}\n\n" + _grid(("Key", "Meaning", "Unit", "Default"), rows)


def _table(table: Table) -> str:
    rows = [(f"`{column.name}`", _meaning(column), column.unit, _default(column)) for column in table.columns]
    words = _sentence(table.meaning) + (" May be absent." if table.optional else "")
    if table.name in MORE:
        words += f" {MORE[table.name]}"
    return f"### `{table.name}.csv`\n\n{words}\n\n" + _grid(("Column", "Meaning", "Unit", "Default"), rows)


def _grid(head: tuple[str, ...], rows: Iterable[tuple[str, ...]]) -> str:
    lines = [_row(head), _row(("---",) * len(head)), *(_row(row) for row in rows)]
    return "\n".join(lines) + "\n"


def _row(cells: Iterable[str]) -> str:
    return "| " + " | ".join(cell.replace("|", "\\|") for cell in cells) + " |"


def _sentence(words: str) -> str:
    return words[:1].upper() + words[1:] + "."


def _meaning(item: Column | Key) -> str:
    words = item.meaning
    if item.choices:
        words += ": " + ", ".join(f"`{choice}`" for choice in item.choices)
    if item.kind in ("number", "integer"):
        limits = str(item.bounds)
        notes = (["whole"] if item.kind == "integer" else []) + ([limits] if limits != "any number" else [])
        if notes:
            words += f" ({', '.join(notes)})"
    return words


def _default(item: Column | Key) -> str:
    if item.required:
        return "required"
    value = item.default
    if value is None:
        return "none"
    if isinstance(value, bool):
        return ("true" if value else "false") if isinstance(item, Key) else ("yes" if value else "no")
    if isinstance(value, float):
        return "unlimited" if math.isinf(value) else f"{value:g}"
    return f'"{value}"' if value and isinstance(item, Key) else value or "blank"


if __name__ == "__main__":
    PAGE.write_text(page(), encoding="utf-8")
