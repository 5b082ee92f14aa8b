"""The content of a report as plain text for a terminal: the answer, key figures and tables.

Numbers, their rounding and their order are those of the report: this module only lays them out.
"""

from __future__ import annotations

import unicodedata
from collections.abc import Collection, Iterable, Sequence
from typing import TypeVar

from compsize.cli.say import printable
from compsize.report.blocks import Block, Cell, Column, Figures, Items, Page, Table, Words

__all__ = ["MOST_ROWS", "answer_lines", "block_of", "figure_lines", "note_lines", "table_lines"]

MOST_ROWS = 12
"""Rows of a table shown before it is cut: the rest stands in the files."""
INDENT = "  "
# What a plain terminal, or the next program in a pipe, may not read; names of the study are left alone.
_PLAIN = str.maketrans(
    {
        "\N{MINUS SIGN}": "-",
        "\N{EN DASH}": "-",
        "\N{NO-BREAK SPACE}": " ",
        "\N{NARROW NO-BREAK SPACE}": " ",
        "\N{GREATER-THAN OR EQUAL TO}": ">=",
        "\N{LEFT DOUBLE QUOTATION MARK}": '"',
        "\N{RIGHT DOUBLE QUOTATION MARK}": '"',
    }
)

Kind = TypeVar("Kind", Table, Figures, Items)


def answer_lines(page: Page) -> list[str]:
    """Title, status, the sentence that answers and, where there is one, what it rests on."""
    detail = [_plain(page.detail)] if page.detail else []
    return [printable(page.title), page.status.translate(_PLAIN), _plain(page.answer), *detail]


def block_of(page: Page, section: str, kind: type[Kind], key: str = "") -> Kind | None:
    """The first block of a kind in a section of the page; a table with the key ``key``, if one is named."""
    blocks: Iterable[Block] = (block for part in page.sections if part.key == section for block in part.blocks)
    for block in blocks:
        if isinstance(block, kind) and (not key or (isinstance(block, Table) and block.key == key)):
            return block
    return None


def figure_lines(figures: Figures) -> list[str]:
    """One line per key figure."""
    wide = max(len(figure.label) for figure in figures.figures)
    lines = []
    for figure in figures.figures:
        text = f"{figure.text} {figure.unit}".strip().translate(_PLAIN)
        remark = f" ({_plain(figure.remark)})" if figure.remark else ""
        lines.append(f"{INDENT}{figure.label.ljust(wide)}{INDENT}{printable(text)}{remark}")
    return lines


def note_lines(page: Page) -> list[str]:
    """What a reader must know beside the tables."""
    items = block_of(page, "notes", Items)
    return [] if items is None else [f"Note: {_plain(words)}" for _, words in items.items]


def table_lines(table: Table, without: Collection[str] = (), most: int = MOST_ROWS) -> list[str]:
    """The caption, the headings and the first ``most`` rows.

    Columns without content, and those with a key in ``without``, are left out. The mark of a row that is not
    met is left out too, since the column of verdicts says so.
    """
    kept = [
        (k, column)
        for k, column in enumerate(table.columns)
        if column.key not in without and any(_cell(row[k], column) for row in table.rows)
    ]
    columns = [column for _, column in kept]
    rows = [[_cell(row[k], column) for k, column in kept] for row in table.rows[:most]]
    marks = [mark if mark != "not met" else "" for mark in table.marks[: len(rows)]]
    if len(table.rows) > most:
        rows.append([f"... and {len(table.rows) - most:,} more", *[""] * (len(kept) - 1)])
    if table.total:
        rows.append([_cell(table.total[k], column) for k, column in kept])
    heads = [[column.heading for column in columns], [printable(column.unit) for column in columns]]
    widths = [max(_width(line[at]) for line in (*heads, *rows)) for at in range(len(columns))]
    lines = [_plain(table.caption)]
    groups = [column.group for column in columns]
    if len(set(groups) - {""}) > 1:
        lines.append(_group_line(groups, widths))
    lines += [_line(head, widths, columns, "") for head in heads if any(head)]
    marks += [""] * (len(rows) - len(marks))
    return lines + [_line(row, widths, columns, mark) for row, mark in zip(rows, marks, strict=True)]


def _plain(words: Words) -> str:
    pieces = (piece.translate(_PLAIN) if isinstance(piece, str) else printable(piece.text) for piece in words)
    return "".join(pieces)


def _cell(cell: Cell, column: Column) -> str:
    text = cell.text if column.kind in ("id", "quote") else cell.text.translate(_PLAIN)
    return printable(" ".join([*cell.parts, *([text] if text else [])]))


def _width(text: str) -> int:
    """Columns of a terminal that ``text`` takes."""
    wide = sum(unicodedata.east_asian_width(character) in "WF" for character in text)
    return len(text) + wide - sum(bool(unicodedata.combining(character)) for character in text)


def _line(cells: Sequence[str], widths: Sequence[int], columns: Sequence[Column], mark: str) -> str:
    parts = []
    for text, width, column in zip(cells, widths, columns, strict=True):
        space = " " * (width - _width(text))
        parts.append(space + text if column.kind == "number" else text + space)
    return (INDENT + INDENT.join([*parts, mark])).rstrip()


def _group_line(groups: Sequence[str], widths: Sequence[int]) -> str:
    """Each group heading above the first of its columns; it may run on over the others."""
    line, at, before = "", len(INDENT), ""
    for group, width in zip(groups, widths, strict=True):
        if group and group != before:
            line = line.ljust(at) + group
        at, before = at + width + len(INDENT), group
    return line
